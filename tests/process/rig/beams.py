"""A beamformer of the tests' own: float64, exact delays over the long period, taper, power, rolling average."""

from collections.abc import Sequence

import numpy as np

__all__ = ["ExactMap", "half_power_width", "pattern_db", "peak_cosine"]


def pattern_db(
    weights: np.ndarray, x_m: np.ndarray, frequency_hz: float, look: np.ndarray | float, source: float, c: float
) -> np.ndarray:
    """Response in dB of beams at cosines `look` to a plane wave from cosine `source`."""
    steps = np.atleast_1d(look)[:, None] - source
    return 20 * np.log10(np.abs(np.exp(-2j * np.pi * frequency_hz / c * steps * x_m) @ weights))


def half_power_width(weights: np.ndarray, x_m: np.ndarray, frequency_hz: float, c: float) -> float:
    """Full width in cosine between the half-power points of the main lobe, looking broadside."""
    look = np.linspace(0, 1, 20001)
    over = pattern_db(weights, x_m, frequency_hz, look, 0.0, c) > 10 * np.log10(0.5)
    return 2 * float(look[np.argmin(over)])


def peak_cosine(cosines: np.ndarray, level_db: np.ndarray) -> tuple[int, float]:
    """Loudest beam, and the cosine at the top of the parabola through it and its neighbours (dB)."""
    top = int(np.argmax(level_db))
    if top in (0, len(cosines) - 1):
        return top, float(cosines[top])
    left, middle, right = (float(v) for v in level_db[top - 1 : top + 2])
    shift = 0.5 * (left - right) / (left - 2 * middle + right)
    return top, float(cosines[top] + shift * (cosines[top + 1] - cosines[top]))


class ExactMap:
    """Levels that beams of one periodic sea must read.

    signals : (channels, period) float64 micropascal, one whole period.    weights : shading, sum 1.
    """

    def __init__(self, signals: np.ndarray, x_m: np.ndarray, weights: np.ndarray, rate_hz: float, c: float = 1500.0):
        self.x_m, self.weights, self.rate_hz, self.c = x_m, weights, rate_hz, c
        self.period = signals.shape[1]
        self._spectra = np.fft.rfft(signals, axis=1)

    def series(self, cosine: float) -> np.ndarray:
        """(period,) time series of the beam at that cosine: the weighted sum of exactly delayed hydrophones."""
        f = np.fft.rfftfreq(self.period, 1 / self.rate_hz)
        turned = self._spectra * np.exp(-2j * np.pi * np.outer(self.x_m * cosine / self.c, f))
        return np.fft.irfft(self.weights @ turned, self.period)

    def frame_powers(self, cosine: float, starts: Sequence[int], frame: int) -> np.ndarray:
        """(frames, frame//2+1) one-sided density of each frame, micropascal^2/Hz, periodic Hann taper."""
        taper = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(frame) / frame)
        rows = np.asarray(starts)[:, None] + np.arange(frame)
        spectra = np.fft.rfft(self.series(cosine)[rows % self.period] * taper, axis=1)
        return 2 * np.abs(spectra) ** 2 / (self.rate_hz * np.sum(taper**2))

    def rolling_db(self, cosine: float, starts: Sequence[int], frame: int, average_s: float) -> np.ndarray:
        """(frames, bins) dB: exponential average from the first frame on, aged by the time between frames."""
        powers = self.frame_powers(cosine, starts, frame)
        if average_s == 0:
            return 10 * np.log10(np.maximum(powers, 1e-30))
        total, weight, out = np.zeros(powers.shape[1]), 0.0, []
        for i, power in enumerate(powers):
            aged = np.exp(-(starts[i] - starts[i - 1]) / self.rate_hz / average_s) if i else 0.0
            share = 1 - np.exp(-frame / 2 / self.rate_hz / average_s)
            total, weight = aged * total + share * power, aged * weight + share
            out.append(10 * np.log10(np.maximum(total / weight, 1e-30)))
        return np.array(out)
