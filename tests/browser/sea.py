"""A service with a sea of known truth, fed at the pace of the clock, for looking at it through a browser."""

import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from rig import ArrayModel, Service, Wave, block_message, cut_blocks, plane_wave, sensor_noise

__all__ = ["NOISE_DB", "WAVES", "Array", "Sea", "sea"]

PERIOD_S = 8
BLOCK_S = 0.064
NOISE_DB = 70.0  #: of each hydrophone's own, dB re 1 µPa²/Hz
#: what is out there: broadband, and a narrow band that is as good as a tone
WAVES = (Wave(64.0, 92.0, (200.0, 1400.0), seed=1), Wave(126.0, 100.0, (895.0, 905.0), seed=2))


@dataclass
class Array(ArrayModel):
    """48 hydrophones whose half wavelength is at 2 kHz: two bands, the second on half of them."""

    channels: int = 48
    spacing_m: float = 0.375
    rate_hz: float = 8000.0

    def toml(self, **keys: Any) -> dict[str, Any]:
        """Settings of a service with live overload: like at sea, the feed sets the pace. None leaves a table out."""
        main = self.band(band_hz=[50.0, 3000.0], frame=2048, beams=145, average_s=1.0)
        low = self.band(name="low", band_hz=[50.0, 900.0], frame=4096, beams=73, channels="0:48:2", average_s=2.0)
        merged = self.settings(main, low, overload="drop") | keys
        return {name: part for name, part in merged.items() if part is not None}


@dataclass
class Sea:
    """The feed: a thread that sends blocks when they are due. `pause` stops it; what was missed meanwhile is a gap."""

    array: Array
    endpoint: str
    dead: tuple[int, ...] = ()
    sending: threading.Event = field(default_factory=threading.Event)
    ending: threading.Event = field(default_factory=threading.Event)

    def run(self, feeder: Any) -> None:
        pressure = sensor_noise(self.array.channels, self.period, self.array.rate_hz, NOISE_DB)
        for wave in WAVES:
            pressure += plane_wave(wave, self.array.positions_m, self.period, self.array.rate_hz)
        pressure[list(self.dead)] = 0.0
        length = round(BLOCK_S * self.array.rate_hz)
        blocks = list(cut_blocks(pressure / self.array.full_scale_upa, length, self.array.rate_hz, 0, 0, "i2"))
        began, number = time.time(), 0
        while not self.ending.is_set():
            due = began + (number + 1) * BLOCK_S
            self.ending.wait(max(0.0, due - time.time()))
            if self.sending.is_set():
                block = blocks[number % len(blocks)]
                t = round(1e9 * (began + number * BLOCK_S))
                keys = {"first": number * length, "t": t, "type": "i2"}
                feeder.send(block_message(self.array, block, "sea", **keys))
            number += 1

    @property
    def period(self) -> int:
        """Samples after which all repeats: a whole number of blocks."""
        length = round(BLOCK_S * self.array.rate_hz)
        return round(PERIOD_S / BLOCK_S) * length


@contextmanager
def sea(
    folder: Path, array: Array | None = None, dead: tuple[int, ...] = (), **keys: Any
) -> Iterator[tuple[Service, Sea]]:
    """The service, and its feed as it runs; what is not of the array's own settings by keys."""
    array = array or Array()
    with Service(array.toml(**keys), folder) as service, service.feeder() as feeder:
        water = Sea(array, service.ready["feed"], dead)
        water.sending.set()
        thread = threading.Thread(target=water.run, args=(feeder,))
        thread.start()
        try:
            yield service, water
        finally:
            water.ending.set()
            thread.join(20)
            feeder.abandon()
