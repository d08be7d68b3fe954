"""A sea for hydrophones that may be sick: waves from everywhere, a contact, passing ships, own shots, a turn.

Noise from everywhere is made of many plane waves, spread evenly in the cosine of the cone angle as an isotropic sea
is, each of its own random phases, delayed exactly in the Fourier domain over one long period. What moves is near: it
is read from one long signal at the time each hydrophone hears it, with its spreading.
"""

from dataclasses import dataclass

import numpy as np

__all__ = ["Mover", "far_contact", "isotropic_sea", "shot_signal"]

WAVES = 72
CHUNK = 4096  # bins at a time: what is worked on stays small


def sea_density_db(f: np.ndarray) -> np.ndarray:
    """dB re 1 micropascal^2/Hz: flat below 100 Hz, then 5 dB an octave down."""
    return 85.0 - 5.0 * np.log2(np.maximum(f, 100.0) / 100.0)


def isotropic_sea(
    x_m: np.ndarray, period: int, rate_hz: float, seed: int = 5, sound_speed_m_s: float = 1500.0, own_db: float = 45.0
) -> np.ndarray:
    """(channels, period) float32 micropascal, periodic; x_m evenly spaced; own_db : white noise of each hydrophone."""
    rng = np.random.default_rng(seed)
    f = np.fft.rfftfreq(period, 1 / rate_hz)
    amplitude = np.sqrt(10 ** (sea_density_db(f) / 10) * rate_hz * period / 2 / WAVES)
    amplitude[(f < 15) | (f > 0.48 * rate_hz)] = 0
    cosines = np.sort(np.linspace(-1, 1, WAVES, endpoint=False) + rng.uniform(0, 2 / WAVES, WAVES))
    spectra = np.zeros((len(x_m), len(f)), np.complex64)
    for at in range(0, len(f), CHUNK):
        part = slice(at, at + CHUNK)
        wave = rng.standard_normal((WAVES, len(f[part]), 2), np.float32).view(np.complex64)[..., 0] / np.sqrt(2)
        wave = (wave * amplitude[part]).astype(np.complex64)
        turn = 2j * np.pi / sound_speed_m_s * cosines[:, None] * f[part]
        wave *= np.exp(turn * x_m[0]).astype(np.complex64)
        step = np.exp(turn * (x_m[1] - x_m[0])).astype(np.complex64)
        for m in range(len(x_m)):
            spectra[m, part] = wave.sum(axis=0)
            wave *= step
    sea = np.fft.irfft(spectra, period).astype(np.float32)
    return sea + rng.standard_normal(sea.shape, np.float32) * np.float32(np.sqrt(10 ** (own_db / 10) * rate_hz / 2))


def far_contact(
    x_m: np.ndarray, cone_deg: float, level_db: float, period: int, rate_hz: float, seed: int = 8,
    sound_speed_m_s: float = 1500.0,
) -> np.ndarray:  # fmt: skip
    """(channels, period) float32 from far away, periodic; level_db : density at 100 Hz, falling as the sea does."""
    rng = np.random.default_rng(seed)
    f = np.fft.rfftfreq(period, 1 / rate_hz)
    amplitude = np.sqrt(10 ** ((sea_density_db(f) - 85.0 + level_db) / 10) * rate_hz * period / 4)
    amplitude[(f < 30) | (f > 0.4 * rate_hz)] = 0
    spectrum = amplitude * rng.standard_normal((len(f), 2)).view(complex)[:, 0]
    ahead_s = x_m * np.cos(np.radians(cone_deg)) / sound_speed_m_s
    return np.stack([np.fft.irfft(spectrum * np.exp(2j * np.pi * f * s), period) for s in ahead_s]).astype(np.float32)


def shot_signal(rate_hz: float, every_s: float, length_s: float, peak_upa: float) -> np.ndarray:
    """Own shots seen from 1 m: a sharp pulse with a decaying tail of echoes, one each `every_s`."""
    rng = np.random.default_rng(21)
    signal = np.zeros(int(length_s * rate_hz), np.float32)
    t = np.arange(int(1.5 * rate_hz)) / rate_hz
    tail = rng.standard_normal(len(t)) * np.exp(-t / 0.25) * 0.05
    shot = (np.exp(-t / 0.004) * np.sin(2 * np.pi * 60 * t) + tail).astype(np.float32) * np.float32(peak_upa)
    for at in range(int(3.3 * rate_hz), len(signal) - len(shot), int(every_s * rate_hz)):
        signal[at : at + len(shot)] += shot
    return signal


@dataclass
class Mover:
    """A source near enough for its range to matter. `place(t)` gives x, y in the array frame, metres.

    signal : as heard at 1 m, micropascal, repeated; read between samples by four times finer interpolation.
    """

    signal: np.ndarray
    rate_hz: float
    track: tuple[tuple[float, float, float], ...]  # (t, x, y), straight between
    sound_speed_m_s: float = 1500.0

    def __post_init__(self) -> None:
        n = len(self.signal)
        spectrum = np.fft.rfft(self.signal)
        self._fine = (np.fft.irfft(spectrum, 4 * n) * 4).astype(np.float32)

    def heard(self, x_m: np.ndarray, start_s: float, samples: int) -> np.ndarray:
        """(channels, samples) float32 from `start_s` on."""
        t = start_s + np.arange(samples) / self.rate_hz
        times, xs, ys = np.array(self.track).T
        x, y = np.interp(t, times, xs), np.interp(t, times, ys)
        out = np.empty((len(x_m), samples), np.float32)
        for m, at in enumerate(x_m):
            apart = np.hypot(x - at, y)
            place = (t - apart / self.sound_speed_m_s) * (4 * self.rate_hz) % (len(self._fine) - 1)
            low = place.astype(np.int64)
            out[m] = (self._fine[low] + (place - low) * (self._fine[low + 1] - self._fine[low])) / apart
        return out
