"""core: plane waves on an array of hydrophones, exact in delay and level; the simplest sea there is.

A wave of noise is the sum over k of w[k] h(t - k), with w white Gaussian numbers and h a windowed band-pass kernel
that is known as a formula. Hydrophone m hears it at t + x_m cos(cone) / c, so its samples are found by evaluating
that formula at shifted times: there is no interpolation and the delay is exact, whatever its fraction of a sample.
Out of the band the kernel is 100 dB down.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from soundrose.errors import UsageError

__all__ = ["Noise", "PlaneWaves", "Tone", "to_counts"]

HALF = 512  # samples on each side of the kernel: at 16 kHz the band's edges are 100 Hz wide
BETA = 10.0  # Kaiser: side lobes of the edges 100 dB down
STEP = 8192  # samples made at once; results do not depend on how blocks are cut
DRAW = 16384  # random numbers drawn at once, each lot from a seed of its own: any place can be reached directly
TOP = 0.47  # of the rate: above it the kernel's edge would fold over
SENSOR = 1 << 20  # number of the stream of random numbers that is no wave's
BEFORE = 1 << 20  # lots before sample 0


@dataclass(frozen=True, slots=True)
class Noise:
    """Noise of constant spectral density from a cone angle.

    level_db : dB re 1 µPa²/Hz.  band_hz : lower, upper edge.
    """

    cone_deg: float
    level_db: float
    band_hz: tuple[float, float]


@dataclass(frozen=True, slots=True)
class Tone:
    """A tone from a cone angle. level_db : dB re 1 µPa (mean square)."""

    cone_deg: float
    level_db: float
    frequency_hz: float
    phase: float = 0.0


class PlaneWaves:
    """Sound pressure at every hydrophone.

    Parameters
    ----------
    positions_m : (channels, 3); x counts, about the mean of all.  rate_hz : > 0.  sound_speed_m_s : > 0.
    waves : what arrives; p_m(t) = p(t + x_m cos(cone) / c), forward hydrophones first for cone angles below 90.
    sensor_db : level of noise of each hydrophone's own, white up to half the rate, dB re 1 µPa²/Hz; None: none.
    seed : same seed, same samples.
    period : samples after which everything repeats, so that a recording that long can be played in a loop; None: never.

    Raises
    ------
    UsageError : a level, band or frequency that cannot be; a tone that does not fit the period.
    """

    def __init__(
        self,
        positions_m: NDArray[np.float64],
        rate_hz: float,
        sound_speed_m_s: float,
        waves: Sequence[Noise | Tone],
        *,
        sensor_db: float | None = None,
        seed: int = 0,
        period: int | None = None,
    ) -> None:
        positions = np.asarray(positions_m, np.float64)
        if positions.ndim != 2 or positions.shape[1] != 3:
            raise UsageError(f"positions have shape {positions.shape}; they must be (channels, 3)")
        self.channels = len(positions)
        self._x = positions[:, 0] - positions[:, 0].mean()
        self._rate, self._speed, self._seed, self._period = rate_hz, sound_speed_m_s, seed, period
        for wave in waves:
            _check(wave, rate_hz, period)
        self._tones = [wave for wave in waves if isinstance(wave, Tone)]
        self._noises = [wave for wave in waves if isinstance(wave, Noise)]
        self._sensor = None if sensor_db is None else _deviation(sensor_db, rate_hz)
        self._reach = HALF + int(np.ceil(np.abs(self._x).max() / sound_speed_m_s * rate_hz)) + 1
        self._size = scipy.fft.next_fast_len(STEP + 2 * self._reach, real=True)
        self._kernels = [self._kernel(wave) for wave in self._noises]
        self._made: tuple[int, NDArray[np.float64]] | None = None

    def _delays(self, cone_deg: float) -> NDArray[np.float64]:
        """(channels,) advance of each hydrophone, samples."""
        delays: NDArray[np.float64] = self._x * (np.cos(np.deg2rad(cone_deg)) / self._speed * self._rate)
        return delays

    def _kernel(self, wave: Noise) -> NDArray[np.complex128]:
        """(channels, bins) transform of h(j + delay), j from -reach to reach."""
        time = np.arange(-self._reach, self._reach + 1) + self._delays(wave.cone_deg)[:, None]
        low, high = (2 * edge / self._rate for edge in wave.band_hz)
        inside = np.clip(1 - (time / HALF) ** 2, 0, None)
        window = np.where(np.abs(time) < HALF, np.i0(BETA * np.sqrt(inside)) / np.i0(BETA), 0.0)
        kernel = (high * np.sinc(high * time) - low * np.sinc(low * time)) * window
        transform: NDArray[np.complex128] = scipy.fft.rfft(kernel, self._size, axis=1)
        return transform

    def block(self, first: int, length: int) -> NDArray[np.float64]:
        """(channels, length) micropascal from sample `first` (>= 0) on. Cutting it otherwise gives the same bits."""
        if first < 0 or length < 1:
            raise UsageError(f"first is {first}, length {length}; they must be at least 0 and 1")
        pieces, place = [], first
        while place < first + length:
            step, offset = divmod(place, STEP)
            take = min(STEP - offset, first + length - place)
            pieces.append(self._step(step)[:, offset : offset + take])
            place += take
        return np.concatenate(pieces, axis=1)

    def blocks(self, total: int, length: int) -> Iterator[NDArray[np.float64]]:
        """Samples 0 to `total` in blocks of at most `length`."""
        for first in range(0, total, length):
            yield self.block(first, min(length, total - first))

    def _step(self, step: int) -> NDArray[np.float64]:
        if self._made is None or self._made[0] != step:
            self._made = (step, self._make(step * STEP))
        return self._made[1]

    def _make(self, first: int) -> NDArray[np.float64]:
        spectrum = np.zeros((self.channels, self._size // 2 + 1), np.complex128)
        for stream, (wave, kernel) in enumerate(zip(self._noises, self._kernels, strict=True)):
            white = self._white(stream, 1, first - self._reach, STEP + 2 * self._reach)
            spectrum += scipy.fft.rfft(white * _deviation(wave.level_db, self._rate), self._size) * kernel
        made: NDArray[np.float64] = scipy.fft.irfft(spectrum, self._size, axis=1)
        made = made[:, 2 * self._reach : 2 * self._reach + STEP]  # what lies before is wrapped
        for tone in self._tones:
            made = made + self._tone(tone, first)
        if self._sensor is not None:
            made = made + self._sensor * self._white(SENSOR, self.channels, first, STEP)
        return made

    def _tone(self, tone: Tone, first: int) -> NDArray[np.float64]:
        cycles = tone.frequency_hz / self._rate
        index = np.arange(first, first + STEP) % (self._period or 1 << 53)
        angle = 2 * np.pi * cycles * (index + self._delays(tone.cone_deg)[:, None]) + tone.phase
        return np.asarray(np.sqrt(2) * 10 ** (tone.level_db / 20) * np.cos(angle))

    def _white(self, stream: int, rows: int, first: int, length: int) -> NDArray[np.float64]:
        """(rows, length) white Gaussian numbers of unit variance; `first` may lie before 0."""
        out, done = np.empty((rows, length)), 0
        while done < length:
            place = first + done if self._period is None else (first + done) % self._period
            lot, offset = divmod(place, DRAW)
            end = DRAW if self._period is None else min(DRAW, self._period - lot * DRAW)
            take = min(end - offset, length - done)
            numbers = np.random.default_rng([self._seed, stream, lot + BEFORE]).standard_normal((DRAW, rows))
            out[:, done : done + take] = numbers[offset : offset + take].T
            done += take
        return out


def _deviation(level_db: float, rate_hz: float) -> float:
    """Standard deviation of white numbers at `rate_hz` with that one-sided spectral density, micropascal."""
    return float(np.sqrt(10 ** (level_db / 10) * rate_hz / 2))


def _check(wave: Noise | Tone, rate_hz: float, period: int | None) -> None:
    if not 0 <= wave.cone_deg <= 180:
        raise UsageError(f"{wave}: cone_deg must be from 0 to 180")
    top = TOP * rate_hz
    if isinstance(wave, Noise):
        if not 0 <= wave.band_hz[0] < wave.band_hz[1] <= top:
            raise UsageError(f"{wave}: band_hz must rise, from 0 to {top:g} at most")
        return
    if not 0 < wave.frequency_hz <= top:
        raise UsageError(f"{wave}: frequency_hz must be above 0, at most {top:g}")
    if period is not None and abs((cycles := wave.frequency_hz * period / rate_hz) - round(cycles)) > 1e-9 * cycles:
        raise UsageError(f"{wave}: frequency_hz must be a multiple of {rate_hz / period:g} to fit the period")


def to_counts(
    pressure: NDArray[np.float64], sensitivity_db: float, gain_db: float, full_scale_v: float, bits: int
) -> NDArray[np.int32]:
    """Micropascal as a converter would give them: (channels, n) int32 in the range of `bits` (16, 24, 32), rounded.

    sensitivity_db : dB re 1 V/µPa.  UsageError where a sample is beyond full scale.
    """
    half = 1 << (bits - 1)
    counts = np.rint(pressure * (10 ** ((sensitivity_db + gain_db) / 20) / full_scale_v * half))
    if counts.min() < -half or counts.max() >= half:
        loudest = 20 * np.log10(np.abs(counts).max() / half)
        raise UsageError(f"the waves are {loudest:.1f} dB over full scale ({full_scale_v:g} V): lower levels or gain")
    return counts.astype(np.int32)
