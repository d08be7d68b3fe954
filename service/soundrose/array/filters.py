"""core: how long the steering filters are, and the shortest frame they fit in; settings and beams share this rule."""

from collections.abc import Sequence
from math import ceil, isfinite

import numpy as np
from numpy.typing import NDArray

from soundrose.array.geometry import Geometry
from soundrose.errors import UsageError

__all__ = ["KAISER_BETA", "LOBES", "is_smooth", "max_delay_samples", "min_frame", "next_frame", "tap_count"]

#: lobes of the windowed sinc on each side, and the shape of its Kaiser window: in-band error of the fractional delay
#: below -78 dB up to 0.46 of the sampling rate, which is why bands end at 0.45
LOBES = 32
KAISER_BETA = 8.0


def max_delay_samples(
    geometry: Geometry, sound_speed_m_s: float, rate_hz: float, delay_s: Sequence[float] | NDArray[np.float64] = (0.0,)
) -> float:
    """The largest |delay| in samples that steering the band to any direction takes, about the band's own middle.

    delay_s : sampling skew, seconds: one value, one per channel of the band, or one per hydrophone listed.
    """
    skews = np.asarray(delay_s, dtype=np.float64)
    if len(skews) not in (1, len(geometry.channels)):
        skews = skews[list(geometry.channels)]
    skews = skews - (skews.max() + skews.min()) / 2
    farthest = np.abs(geometry.x_m - geometry.middle_x_m) / sound_speed_m_s + np.abs(skews)
    return float(farthest.max()) * rate_hz


def tap_count(max_delay: float) -> int:
    """P, the odd length of the centred steering filters for delays up to `max_delay` samples.

    The rounding forgives 1e-9 sample, so that 94 samples computed as 94.0000000000001 do not cost two taps.
    """
    if not (isfinite(max_delay) and max_delay >= 0):
        raise UsageError(f"max_delay is {max_delay!r} samples; it must be finite and at least 0")
    return 2 * (ceil(max_delay - 1e-9) + LOBES) + 1


def min_frame(taps: int) -> int:
    """The shortest frame N for filters of `taps`: P <= N/2 + 1 keeps the middle half of the frame free of wrap."""
    return 2 * (taps - 1)


def is_smooth(frame: int) -> bool:
    """True for an even length with no prime factor above 7: its transform is fast, half of it is a hop."""
    if frame < 2 or frame % 2:
        return False
    for prime in (2, 3, 5, 7):
        while frame % prime == 0:
            frame //= prime
    return frame == 1


def next_frame(frame: int) -> int:
    """The shortest allowed frame length that is at least `frame`."""
    frame = max(2, frame + frame % 2)
    while not is_smooth(frame):
        frame += 2
    return frame
