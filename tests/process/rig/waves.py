"""Sound as it is at the hydrophones: exact plane waves, delayed in the Fourier domain over one long period.

A wave from cone angle A is p(t + x cos(A) / c) at a hydrophone at x. Within the period the delays are exact for any
fraction of a sample, so no interpolation filter stands between the test and the truth. Amplitudes are set, not drawn:
every line of the spectrum carries its share of the density, phases alone are random. So the level is known exactly.
"""

from dataclasses import dataclass

import numpy as np

__all__ = ["Wave", "noise_spectrum", "plane_wave", "sensor_noise"]


@dataclass(frozen=True)
class Wave:
    """A band of noise from one direction. level_db : one-sided density, dB re 1 micropascal^2/Hz."""

    cone_deg: float
    level_db: float = 100.0
    band_hz: tuple[float, float] = (100.0, 2000.0)
    seed: int = 1


def noise_spectrum(period: int, rate_hz: float, level_db: float, band_hz: tuple[float, float], seed: int) -> np.ndarray:
    """(period//2+1,) complex transform of noise with that one-sided density inside the band, zero outside."""
    f = np.fft.rfftfreq(period, 1 / rate_hz)
    inside = (f >= band_hz[0]) & (f < band_hz[1]) & (f > 0) & (f < rate_hz / 2)
    amplitude = np.sqrt(2 * 10 ** (level_db / 10) * rate_hz / period)  # of each line: A^2/2 = density * line spacing
    phase = np.random.default_rng(seed).uniform(0, 2 * np.pi, len(f))
    return np.where(inside, amplitude * period / 2, 0) * np.exp(1j * phase)


def plane_wave(
    wave: Wave, positions_m: np.ndarray, period: int, rate_hz: float, sound_speed_m_s: float = 1500.0
) -> np.ndarray:
    """(channels, period) float64 micropascal at hydrophones at `positions_m` (about their mean), periodic."""
    spectrum = noise_spectrum(period, rate_hz, wave.level_db, wave.band_hz, wave.seed)
    f = np.fft.rfftfreq(period, 1 / rate_hz)
    ahead_s = positions_m[:, 0] * np.cos(np.radians(wave.cone_deg)) / sound_speed_m_s
    return np.stack([np.fft.irfft(spectrum * np.exp(2j * np.pi * f * s), period) for s in ahead_s])


def sensor_noise(channels: int, period: int, rate_hz: float, level_db: float, seed: int = 77) -> np.ndarray:
    """(channels, period) white noise of that density, different on every hydrophone."""
    whole = (0.0, rate_hz)
    return np.stack([
        np.fft.irfft(noise_spectrum(period, rate_hz, level_db, whole, seed + 1000 * m), period) for m in range(channels)
    ])  # fmt: skip
