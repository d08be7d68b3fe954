"""core: energy on the channels that is no sound: mains hum and waves that run along the cable."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from soundrose.scene.scene_types import Hum, Strum

__all__ = ["Tones", "add_tones", "hum_tones", "strum_tones"]

Floats = NDArray[np.float64]
BREATH, BREATH_HZ = 0.3, 0.11  # how the amplitude of a strum rises and falls
WANDER, WANDER_HZ = 0.8, 0.07  # radians by which its phase wanders


class Tones:
    """Tones with a slowly changing complex amplitude on each channel, linear from knot to knot."""

    def __init__(
        self, frequency_hz: float, amplitude: NDArray[np.complex128], lag_s: Floats, breathes: bool, phase: float
    ):
        """amplitude : (channels,) steady part.  lag_s : (channels,) by which the slow changes come later there."""
        self.frequency_hz, self._amplitude, self._lag, self._phase = frequency_hz, amplitude, lag_s, phase
        self._breathes = breathes

    def at(self, t_s: Floats) -> NDArray[np.complex128]:
        """(channels, times) complex amplitude."""
        if not self._breathes:
            return np.repeat(self._amplitude[:, None], len(t_s), axis=1)
        t = t_s - self._lag[:, None]
        swell = (1 + BREATH * np.cos(2 * np.pi * BREATH_HZ * t + self._phase)) / np.sqrt(1 + BREATH**2 / 2)
        turn = np.exp(1j * WANDER * np.sin(2 * np.pi * WANDER_HZ * t + 2.4 * self._phase))
        return np.asarray(self._amplitude[:, None] * swell * turn)


def hum_tones(hum: Hum, channels: int, seed: tuple[int, ...]) -> list[Tones]:
    """In phase on every channel."""
    phases = np.random.default_rng([*seed, 0]).uniform(0, 2 * np.pi, len(hum.tones))
    return [
        Tones(f, np.full(channels, _amplitude(level) * np.exp(1j * phase)), np.zeros(channels), False, 0.0)
        for (f, level), phase in zip(hum.tones, phases, strict=True)
    ]


def strum_tones(strum: Strum, x_m: Floats, seed: tuple[int, ...]) -> list[Tones]:
    """From the forward end aft, with the speed of the cable's waves. x_m : (channels,) forward."""
    lag = (x_m.max() - x_m) / strum.wave_speed_m_s
    fade = np.exp(-(x_m.max() - x_m) / strum.decay_m)
    phases = np.random.default_rng([*seed, 0]).uniform(0, 2 * np.pi, len(strum.tones))
    return [
        Tones(f, _amplitude(level) * fade * np.exp(1j * (phase - 2 * np.pi * f * lag)), lag, True, float(phase))
        for (f, level), phase in zip(strum.tones, phases, strict=True)
    ]


def _amplitude(level_db: float) -> float:
    return float(np.sqrt(2) * 10 ** (level_db / 20))


def add_tones(made: NDArray[np.float32], tones: Sequence[Tones], first: int, step: int, rate_hz: float) -> None:
    """Adds tones to (channels, n) samples from index `first` on, IN PLACE; n is a multiple of `step`."""
    rise = np.arange(step) / step
    for begin in range(0, made.shape[1], step):
        t = (first + begin + np.arange(step)) / rate_hz
        rows, columns = [], []
        for tone in tones:
            early, late = tone.at(np.array([t[0], t[0] + step / rate_hz])).T
            angle = 2 * np.pi * ((tone.frequency_hz * t) % 1.0)
            cos, sin = np.cos(angle), np.sin(angle)
            rows += [cos * (1 - rise), cos * rise, -sin * (1 - rise), -sin * rise]
            columns += [early.real, late.real, early.imag, late.imag]
        made[:, begin : begin + step] += (np.stack(columns, axis=1) @ np.stack(rows)).astype(np.float32)
