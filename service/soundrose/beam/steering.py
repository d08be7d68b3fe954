"""core: steering filters (windowed-sinc fractional delays) and their transforms, the weights of the beams.

A plane wave from the direction of cosine u is recorded by hydrophone m as p(t + x_m u / c + delay_m), where delay_m is
the time by which its channel is sampled LATE. Steering delays it by tau = x_m u / c + delay_m: what comes out is p(t).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft
from scipy.special import i0

from soundrose.array.filters import KAISER_BETA, LOBES, min_frame, tap_count
from soundrose.array.geometry import Geometry
from soundrose.errors import UsageError

__all__ = ["BATCH", "Steering", "delay_filters", "delay_transforms", "kept_bins"]

#: filters transformed at once: a few MB of double precision, so that the work stays near the cache
BATCH = 64


@dataclass(frozen=True, slots=True, eq=False)
class Steering:
    """What a set of beams is steered by: everything the weights follow from.

    x_m : (M,) float64, places along the array, metres, about the point that delays refer to.
    weights : (M,) float64, shading, sum 1.
    mirror : (M,) index of each hydrophone's mirror image about x = 0, or None.
    delay_s : (M,) float64, seconds by which each channel is sampled late, about the same reference.
    cos : (beams,) float64, cosines of the cone angles, falling.   sound_speed_m_s : > 0.
    rate_hz, frame_length : of the transform.   bins : first and stop of the bins wanted, 0 <= first < stop <= N/2.
    """

    x_m: NDArray[np.float64]
    weights: NDArray[np.float64]
    mirror: NDArray[np.intp] | None
    delay_s: NDArray[np.float64]
    cos: NDArray[np.float64]
    sound_speed_m_s: float
    rate_hz: float
    frame_length: int
    bins: tuple[int, int]

    @classmethod
    def about_middle(
        cls, geometry: Geometry, weights: NDArray[np.float64], delay_s: Sequence[float], cos: NDArray[np.float64],
        sound_speed_m_s: float, rate_hz: float, frame_length: int, bins: tuple[int, int],
    ) -> "Steering":  # fmt: skip
        """Delays about the band's own middle and the middle of its skews: the shortest filters.

        A delay common to all channels does not change the power of a beam. delay_s : (M,) in band order.
        """
        skew = np.asarray(delay_s, dtype=np.float64)
        return cls(
            geometry.x_m - geometry.middle_x_m, weights, geometry.mirror, skew - (skew.max() + skew.min()) / 2, cos,
            sound_speed_m_s, rate_hz, frame_length, bins,
        )  # fmt: skip

    @classmethod
    def about_origin(
        cls, geometry: Geometry, weights: NDArray[np.float64], delay_s: Sequence[float], cos: NDArray[np.float64],
        sound_speed_m_s: float, rate_hz: float, frame_length: int, bins: tuple[int, int],
    ) -> "Steering":  # fmt: skip
        """Delays about the array origin, the skews as they are: what comes out is the pressure there, at its time."""
        return cls(
            geometry.x_m, weights, None, np.asarray(delay_s, dtype=np.float64), cos, sound_speed_m_s, rate_hz,
            frame_length, bins,
        )  # fmt: skip

    @property
    def taps(self) -> int:
        """P, the odd length of the filters."""
        farthest = np.abs(self.x_m) * np.abs(self.cos).max() / self.sound_speed_m_s + np.abs(self.delay_s)
        return tap_count(float(farthest.max()) * self.rate_hz)

    @property
    def paired(self) -> bool:
        """True where mirrored hydrophones and mirrored beams share their weights: the real-pair kernel may be used."""
        return (
            self.mirror is not None
            and np.allclose(self.weights, self.weights[self.mirror], rtol=0, atol=1e-12 * self.weights.max())
            and float(np.ptp(self.delay_s)) == 0.0
            and np.array_equal(self.cos, -self.cos[::-1])
        )

    def check_fits(self) -> None:
        """UsageError where the filters are too long for the frame: its middle half would not be free of wrap."""
        if min_frame(self.taps) > self.frame_length:
            raise UsageError(
                f"steering filters take {self.taps} taps; a frame of {self.frame_length} holds at most"
                f" {self.frame_length // 2 + 1}: use a frame of at least {min_frame(self.taps)}"
            )

    def samples(self, beams: slice, channels: NDArray[np.intp] | slice) -> NDArray[np.float64]:
        """(beams, channels) delays tau in samples."""
        tau = np.multiply.outer(self.cos[beams], self.x_m[channels]) / self.sound_speed_m_s
        delays: NDArray[np.float64] = (tau + self.delay_s[channels]) * self.rate_hz
        return delays


def kept_bins(bins: tuple[int, int]) -> tuple[int, int]:
    """First and stop of the bins that the Hann taper of `bins` takes: one more on each side.

    Bin -1 is bin 1, conjugate.
    """
    return bins[0] - 1, bins[1] + 1


def delay_filters(delays: NDArray[np.float64]) -> tuple[NDArray[np.intp], NDArray[np.float64]]:
    """Non-zero taps of fractional-delay filters: sinc, Kaiser window, both centred on the delay.

    Parameters
    ----------
    delays : (filters,) float64, samples, any sign.

    Returns
    -------
    at : (filters, 66) intp, tap numbers, 0 = no delay.    taps : (filters, 66) float64.

    References
    ----------
    .. [1] Laakso, Valimaki, Karjalainen, Laine 1996, IEEE Signal Process. Mag. 13(1), 30-60 (windowed sinc).
    """
    at = np.floor(delays).astype(np.intp)[:, None] + np.arange(-LOBES, LOBES + 2)
    off = at - delays[:, None]
    inside = np.clip(1 - (off / LOBES) ** 2, 0, None)
    taps = np.sinc(off) * i0(KAISER_BETA * np.sqrt(inside)) / i0(KAISER_BETA)
    taps[np.abs(off) > LOBES] = 0.0
    return at, taps


def delay_transforms(
    delays: NDArray[np.float64], frame_length: int, kept: tuple[int, int], gain: NDArray[np.float64] | None = None
) -> NDArray[np.complex128]:
    """(filters, bins) N-point transforms of the filters, at bins kept[0] .. kept[1]-1.

    delays : (filters,) samples; about `BATCH` at once are done best.  kept : from -1 (the conjugate of bin 1) to at
    most N/2 + 1.  gain : (filters,) factors, None: 1.
    """
    first, stop = kept
    at, taps = delay_filters(delays)
    if gain is not None:
        taps *= gain[:, None]
    padded = np.zeros((len(at), frame_length))
    np.put_along_axis(padded, at % frame_length, taps, axis=1)
    spectra: NDArray[np.complex128] = fft.rfft(padded, axis=1)
    if first >= 0:
        return spectra[:, first:stop]
    return np.concatenate([spectra[:, 1:2].conj(), spectra[:, :stop]], axis=1)
