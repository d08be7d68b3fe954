"""core: the rolling average of frames: weights, how many independent averages it is worth, and levels."""

from dataclasses import dataclass
from math import exp, expm1, log

import numpy as np
from numpy.typing import NDArray

from soundrose.product.messages import LEVEL_FLOOR_DB

__all__ = ["HANN_HALF_OVERLAP", "AverageStep", "RollingWeights", "density_scale", "to_levels"]

#: correlation of the powers of one bin in two frames that overlap by half, Hann taper, noise: the squared
#: autocorrelation (1/6) of the taper at half its length. Frames further apart share no samples.
HANN_HALF_OVERLAP = 1.0 / 36.0

#: a hair below the floor, so that rounding in the logarithm cannot leave zero power above it
_POWER_FLOOR = np.float32(10 ** (LEVEL_FLOOR_DB / 10 - 1e-4))
_DB_PER_NEPER = np.float32(10 / log(10))


@dataclass(frozen=True, slots=True)
class AverageStep:
    """How one frame enters: content = decay * content + gain * power of the frame."""

    decay: float
    gain: float


class RollingWeights:
    """Weights of an exponential average over frames, normalised from its start; no data in it.

    `gain` is the weight of a frame when it enters. Sums kept under the same decay as the content: `total`, the weight
    so far (content / total is the average), and the shares that `add_shares` is told of each frame.

    average_s : time constant; 0 = each frame alone.  hop : samples between adjacent frames.  rate_hz : nominal rate.

    Notes
    -----
    `averages` is 1 / (relative variance) of one bin's average in Gaussian noise: total^2 / (sum w_i^2 +
    2/36 sum w_i w_{i+1} over adjacent frames), kept up recursively. (The variance-equivalent number of Welch 1967,
    IEEE Trans. AU-15, 70-73, eq. for the variance with overlap, with exponential instead of equal weights.)
    """

    def __init__(self, average_s: float, hop: int, rate_hz: float) -> None:
        self._average_s, self._rate_hz = average_s, rate_hz
        self.gain = 1.0 if average_s == 0 else -expm1(-hop / rate_hz / average_s)
        self.restart()

    def restart(self) -> None:
        """Begin anew: nothing is in the average."""
        self.total = 0.0
        self._squares = 0.0
        self._shares = (0.0, 0.0)

    def step(self, elapsed: int | None, adjacent: bool) -> AverageStep:
        """A frame enters, `elapsed` samples after the one before it (None: there is none).

        adjacent : half a frame after it, so that the two overlap.
        """
        decay = 0.0 if elapsed is None else self._decay(elapsed)
        self.total = decay * self.total + self.gain
        self._squares = decay * decay * self._squares + self.gain**2
        if adjacent:
            self._squares += 2 * HANN_HALF_OVERLAP * decay * self.gain**2
        self._shares = (decay * self._shares[0], decay * self._shares[1])
        return AverageStep(decay, self.gain)

    def add_shares(self, clipped: float, masked: float) -> None:
        """Shares (0..1) of the frame that has just entered: clipped samples, time under own pulses."""
        self._shares = (self._shares[0] + self.gain * clipped, self._shares[1] + self.gain * masked)

    @property
    def clipped(self) -> float:
        """Weighted share of clipped samples, 0..1."""
        return self._share(0)

    @property
    def masked(self) -> float:
        """Weighted share of time under own pulses, 0..1."""
        return self._share(1)

    @property
    def averages(self) -> float:
        """Variance-equivalent number of independent averages of one bin; at least 1 once a frame is in, else 0."""
        return self.total**2 / self._squares if self.total else 0.0

    def _share(self, i: int) -> float:
        return min(1.0, self._shares[i] / self.total) if self.total else 0.0

    def _decay(self, elapsed: int) -> float:
        return 0.0 if self._average_s == 0 else exp(-elapsed / self._rate_hz / self._average_s)


def density_scale(bins: NDArray[np.intp], frame_length: int, rate_hz: float) -> NDArray[np.float32]:
    """(bins,) factors from |Hann-tapered transform|^2 to one-sided power spectral density.

    2 / (rate sum w^2) with sum w^2 = 3 N / 8 of the periodic Hann taper: its equivalent noise bandwidth, 1.5 bins, is
    in it. Bin 0 and the bin at half the rate have no mirror image and are not doubled. bins : indices, 0..N/2.
    """
    scale = np.full(len(bins), 2.0 / (rate_hz * 3 * frame_length / 8))
    scale[(bins == 0) | (bins == frame_length // 2)] /= 2
    return scale.astype(np.float32)


def to_levels(power: NDArray[np.float32]) -> NDArray[np.float32]:
    """Levels in dB of float32 powers >= 0, IN PLACE: 10 log10, zero (and less than the floor) reads -300."""
    np.maximum(power, _POWER_FLOOR, out=power)
    np.log(power, out=power)
    np.multiply(power, _DB_PER_NEPER, out=power)
    np.maximum(power, np.float32(LEVEL_FLOOR_DB), out=power)
    return power
