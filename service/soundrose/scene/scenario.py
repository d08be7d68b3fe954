"""core: the demo's scenario, invented: the survey vessel Skarvholm tows the array "aft" past four sounds."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from soundrose.scene.plane import Noise, Tone

__all__ = [
    "BITS", "CALIBRATION", "CHANNELS", "PERIOD", "RATE_HZ", "SENSOR_DB", "SOUNDS", "SOUND_SPEED_M_S", "Sound",
    "positions", "settings_text",
]  # fmt: skip

CHANNELS, SPACING_M = 48, 0.375
RATE_HZ, SOUND_SPEED_M_S = 16000.0, 1500.0
PERIOD = 320_000  # samples; 20 s, then the recording begins anew without a seam
BITS = 24
CALIBRATION = {"sensitivity_db": -180.0, "gain_db": 20.0, "full_scale_v": 2.5}
SENSOR_DB = 58.0  # flow and electronics at each hydrophone, dB re 1 µPa²/Hz


@dataclass(frozen=True, slots=True)
class Sound:
    """What is out there. own_hz : frequencies at which nothing else is as loud, where its bearing can be judged."""

    name: str
    wave: Noise | Tone
    own_hz: tuple[float, float]


#: chosen below the onset of images for their own beams: 1500 / (0.375 (1 + |cos|)) Hz
SOUNDS = (
    Sound("trawler astern", Noise(118.0, 90.0, (60.0, 1000.0)), (100.0, 950.0)),
    Sound("platform generator", Tone(40.0, 112.0, 1180.0), (1160.0, 1200.0)),
    Sound("calling animals", Noise(75.0, 82.0, (1500.0, 2200.0)), (1550.0, 2150.0)),
    Sound("rain squall", Noise(95.0, 80.0, (2500.0, 3500.0)), (2550.0, 3450.0)),
)


def positions() -> NDArray[np.float64]:
    """(channels, 3) metres, as the settings file's uniform line has them: channel 0 the foremost."""
    places = np.zeros((CHANNELS, 3))
    places[:, 0] = (CHANNELS - 1) / 2 * SPACING_M - SPACING_M * np.arange(CHANNELS)
    return places


def settings_text(feed: str, publish: str, port: int, store: str) -> str:
    """The demo's settings file (TOML). feed, publish : endpoints.  port : of HTTP.  store : a folder."""
    calibration = "\n".join(f"{key} = {value}" for key, value in CALIBRATION.items())
    return f"""\
# Survey vessel Skarvholm, array "aft": an invented scenario
[array]
id = "aft"
hydrophones = {CHANNELS}
spacing_m = {SPACING_M}
[feed]
bind = "{feed}"
rate_hz = {RATE_HZ}
[calibration]
{calibration}
[water]
sound_speed_m_s = {SOUND_SPEED_M_S}
[[bands]]
name = "main"
band_hz = [50.0, 4000.0]
frame = 4096
beams = 145
shading = "hann"
average_s = 2.0
[publish]
bind = "{publish}"
[serve]
port = {port}
[store]
path = "{store}"
"""
