"""core: what a demo saw, against what was there."""

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from soundrose.scene.scenario import Sound

__all__ = ["Finding", "Tally"]


@dataclass(frozen=True, slots=True)
class Finding:
    """A sound and the beam that was loudest where it is by itself. true_deg, found_deg : cone angles."""

    name: str
    true_deg: float
    found_deg: float


@dataclass(slots=True)
class Tally:
    """Maps added up in power, so that a beam's mean level is that of its mean power.

    settle : maps left out first, while the average is young.
    """

    settle: int = 20
    maps: int = 0
    _power: NDArray[np.float64] | None = field(default=None, repr=False)
    _cone_deg: NDArray[np.float64] | None = field(default=None, repr=False)
    _frequency_hz: NDArray[np.float64] | None = field(default=None, repr=False)

    def add(
        self, level_db: NDArray[np.float32], cone_deg: NDArray[np.float64], frequency_hz: NDArray[np.float64]
    ) -> None:
        """One map, (beams, bins) dB re 1 µPa²/Hz, with its axes."""
        self.maps += 1
        if self._power is not None and self.maps <= self.settle + 1:
            self._power = None
        power = 10.0 ** (level_db.astype(np.float64) / 10)
        self._power = power if self._power is None else self._power + power
        self._cone_deg, self._frequency_hz = cone_deg, frequency_hz

    def findings(self, sounds: Sequence[Sound]) -> list[Finding]:
        """The loudest beam in each sound's own frequencies; nothing if no map came."""
        if self._power is None or self._cone_deg is None or self._frequency_hz is None:
            return []
        found = []
        for sound in sounds:
            own = (self._frequency_hz >= sound.own_hz[0]) & (self._frequency_hz <= sound.own_hz[1])
            beam = int(np.argmax(self._power[:, own].sum(axis=1)))
            found.append(Finding(sound.name, sound.wave.cone_deg, float(self._cone_deg[beam])))
        return found
