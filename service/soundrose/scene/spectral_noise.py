"""core: Gaussian noise of any spectrum, in lots that follow each other without a seam.

Frames of random spectra, each from a seed of its own, are joined under sine tapers, half over each other: the
squares of the tapers add to one, so the noise is stationary. Any lot can be made without those before it.
"""

import numpy as np
import scipy.fft
from numpy.typing import NDArray

__all__ = ["BEFORE", "SpectralNoise", "join_frames", "sine_taper"]

BEFORE = 1 << 20  # lots before number 0: a sound that arrives at time 0 was made before it


def sine_taper(length: int) -> NDArray[np.float32]:
    """(length,) float32, w[n]² + w[n + length/2]² = 1."""
    return np.sin(np.pi * (np.arange(length) + 0.5) / length).astype(np.float32)


class SpectralNoise:
    """One channel of noise.

    density : (lot + 1,) one-sided spectral density at f = k rate / (2 lot), unit²/Hz.  lot : samples in a lot.
    rate_hz : of the samples.  seed : with the number of the lot it decides everything.
    """

    def __init__(self, density: NDArray[np.float64], lot: int, rate_hz: float, seed: tuple[int, ...]) -> None:
        self._lot, self._seed = lot, seed
        # a bin's mean square, one-sided, is density * rate / length: |X|² = density * rate * length / 2
        scale = np.sqrt(density * rate_hz * 2 * lot / 2 / 2)  # per real and imaginary part
        scale[0] = scale[-1] = 0.0
        self._scale = scale.astype(np.float32)
        self._taper = sine_taper(2 * lot)
        self._kept: tuple[int, NDArray[np.float32]] | None = None

    def make(self, number: int) -> NDArray[np.float32]:
        """(lot,) samples [number * lot, (number + 1) * lot); cheapest in rising order."""
        earlier = self._kept[1] if self._kept and self._kept[0] == number else self._frame(number)
        later = self._frame(number + 1)
        self._kept = (number + 1, later)
        made: NDArray[np.float32] = earlier[self._lot :] + later[: self._lot]
        return made

    def _frame(self, number: int) -> NDArray[np.float32]:
        random = np.random.default_rng([*self._seed, number + BEFORE])
        parts = random.standard_normal((2, self._lot + 1), dtype=np.float32) * self._scale
        frame = scipy.fft.irfft(parts[0] + np.complex64(1j) * parts[1], 2 * self._lot)
        tapered: NDArray[np.float32] = frame * self._taper
        return tapered


def join_frames(
    frames: NDArray[np.float32], tail: NDArray[np.float32]
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Joins tapered frames to a stream.

    frames : (channels, frames, length).  tail : (channels, length/2), what the frame before left over.
    Returns (channels, frames * length/2) and the new tail.
    """
    half = tail.shape[1]
    made = frames[:, :, :half].copy()
    made[:, 0] += tail
    made[:, 1:] += frames[:, :-1, half:]
    return made.reshape(len(made), -1), frames[:, -1, half:].copy()
