"""The field line as the service sees it: settings, recordings, and what its maps say of a shot."""

from pathlib import Path
from typing import Any

import numpy as np
import soundfile
from rig import Listener, Message, Service, run_command
from rig.field_records import Record, read_record

__all__ = ["AVERAGE_SLOWNESS_MS_M", "RATE_HZ", "SHOTS", "STEERING_M_S", "line_settings", "play", "shares", "shot_maps"]

RATE_HZ = 500.0  # of 8000 recorded: everything of interest lies below 100 Hz
STEERING_M_S = 140.0  # slower than the wave (about 171 m/s), so that it lies inside the grid and not at its end
FRAME = 800  # 1.6 s: steering 92 m at 140 m/s takes filters of 395 taps, and a frame at least twice that
START = "2013-02-02T12:00:00Z"  # the day of the survey; the hour is made up
SHOTS = (2002, 2004, 2005, 2003)
#: slowness along the line, ms/m, phase-normalised sum over 10 to 60 Hz of all 24 channels, worked out beforehand with
#: two programs of few lines (steered in the frequency domain; delayed and summed in the time domain). Standing:
#: recomputed from the records; none is published. 2003 has its source in the middle of the line: two waves, no value.
AVERAGE_SLOWNESS_MS_M = {2002: 5.833, 2004: -5.833, 2005: -5.833}


def line_settings(folder: Path) -> dict[str, Any]:
    """Geophone at 0 m is the forward-most: sound from forward travels towards larger distances along the line."""
    return {
        "array": {"id": "line", "hydrophones": 24, "spacing_m": 4.0},
        "feed": {"bind": "tcp://127.0.0.1:*", "rate_hz": RATE_HZ, "overload": "hold"},
        "calibration": {"sensitivity_db": 0.0, "gain_db": 0.0, "full_scale_v": 1.0},  # levels re digital full scale
        "water": {"sound_speed_m_s": STEERING_M_S},
        "bands": [{"name": "ground", "band_hz": [5.0, 200.0], "frame": FRAME, "beams": 141, "shading": "hann",
                   "average_s": 0.0}],
        "publish": {"bind": "tcp://127.0.0.1:*"},
        "serve": {"host": "127.0.0.1", "port": 0},
        "store": {"path": str(folder / "store")},
    }  # fmt: skip


def write_recording(path: Path, record: Record) -> None:
    """A multichannel WAV of 32-bit floats, the record scaled to nine tenths of full scale."""
    samples = record.resampled(RATE_HZ)
    soundfile.write(path, (0.9 * samples / np.abs(samples).max()).T, int(RATE_HZ), subtype="FLOAT", format="WAV")


def play(service: Service, listener: Listener, number: int) -> Message:
    """Send a shot with the command that sends recordings; the one map that comes of its two seconds."""
    path = service.folder / f"{number}.wav"
    write_recording(path, read_record(number))
    before = len(listener.of("map/ground"))
    ended = run_command(
        "feed", "file", str(path), "--config", str(service.config), "--to", service.ready["feed"], "--speed", "max",
        "--start", START, "--run", str(number), cwd=service.folder,
    )  # fmt: skip
    assert ended.returncode == 0, ended.stderr
    message = listener.wait_count("map/ground", before + 1)[before]
    assert message.header["run"] == str(number)
    return message


def shot_maps(folder: Path) -> dict[int, Message]:
    """The map of every shot, through recording, feed, ingest, band and subscriber."""
    with Service(line_settings(folder), folder) as service, service.listener() as listener:
        return {number: play(service, listener, number) for number in SHOTS}


def shares(message: Message, low_hz: float = 10.0, high_hz: float = 60.0) -> np.ndarray:
    """(beams,) each bin's power shared out over the beams, summed over the bins: loud bins count no more than others.

    d = 4 m is half a wavelength at 21 Hz for this wave. Above it images of the wave stand on other beams, at another
    place in every bin, while the wave stays: the sum over bins keeps the one and smears the others.
    """
    f = message.frequencies_hz
    power = 10 ** (message.level_db[:, (f >= low_hz) & (f <= high_hz)].astype(float) / 10)
    return np.sum(power / power.sum(axis=0), axis=1)
