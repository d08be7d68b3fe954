"""core: what sources give off, as samples 1 m from them, at twice the array's rate so that they are easily shifted.

Everything lies below 0.45 of the array's rate. Any stretch of time can be made by itself; stretches are made in
lots of fixed length, so that what comes out does not depend on how it is asked for.
"""

from collections import deque
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import count
from typing import Final, Protocol

import numpy as np
from numpy.typing import NDArray

from soundrose.scene.scene_types import Clicks, Events, Motor, Pulse, Range, Schedule, Shape, Shot, Sound, Sweep
from soundrose.scene.spectral_noise import SpectralNoise

__all__ = [
    "LOT",
    "Event",
    "Timetable",
    "Waveform",
    "WaveformBuffer",
    "band_edge",
    "motor_density",
    "shape_samples",
    "waveform",
]

Floats = NDArray[np.float64]
LOT: Final = 4096  # samples
TOP, NYQUIST = 0.45, 0.5  # of the array's rate: sounds are whole below the first and nothing above the second
BLADES: Final = 4  # harmonics of the blade rate in the beat


class Waveform(Protocol):
    """Samples of a source."""

    def make(self, number: int) -> NDArray[np.float32]:
        """(LOT,) samples [number * LOT, (number + 1) * LOT), micropascal at 1 m."""


def waveform(sound: Sound, rate_hz: float, seed: tuple[int, ...]) -> Waveform:
    """The waveform of a sound. rate_hz : of the array; samples are made at twice that."""
    if isinstance(sound, Motor):
        return _MotorWave(sound, rate_hz, seed)
    return _EventWave(sound, rate_hz, seed)


def band_edge(frequency_hz: Floats, rate_hz: float) -> Floats:
    """Amplitude, 1 below 0.45 of the rate and 0 above 0.5, a smooth step between."""
    place = np.clip((frequency_hz / rate_hz - TOP) / (NYQUIST - TOP), 0, 1)
    return np.asarray(np.cos(np.pi / 2 * np.sin(np.pi / 2 * place) ** 2) ** 2)


def motor_density(motor: Motor, frequency_hz: Floats) -> Floats:
    """Spectral density of a ship's broadband noise, µPa² m²/Hz."""

    def shape_db(f: Floats | float) -> Floats:
        return np.asarray(-motor.slope_db / 2 * np.log10(1 + (np.asarray(f) / motor.corner_hz) ** 2))

    return np.asarray(10 ** ((motor.level_db + shape_db(frequency_hz) - shape_db(1000.0)) / 10))


class _MotorWave:
    def __init__(self, motor: Motor, rate_hz: float, seed: tuple[int, ...]) -> None:
        self._motor, self._rate = motor, 2 * rate_hz
        frequency = np.arange(LOT + 1) * self._rate / (2 * LOT)
        density = motor_density(motor, frequency) * band_edge(frequency, rate_hz) ** 2
        self._noise = SpectralNoise(density, LOT, self._rate, seed)
        random = np.random.default_rng([*seed, 0])
        self._phases = random.uniform(0, 2 * np.pi, BLADES + len(motor.tones))

    def make(self, number: int) -> NDArray[np.float32]:
        t = (np.arange(LOT) + number * LOT) / self._rate
        made = self._noise.make(number) * self._beat(t)
        for (frequency, level_db), phase in zip(self._motor.tones, self._phases[BLADES:], strict=True):
            made += np.sqrt(2) * 10 ** (level_db / 20) * np.cos(2 * np.pi * ((frequency * t) % 1.0) + phase)
        return made.astype(np.float32)

    def _beat(self, t: Floats) -> Floats:
        """Envelope of mean square 1."""
        depth = self._motor.modulation
        if depth == 0:
            return np.ones_like(t)
        angle = (2 * np.pi * ((self._motor.blade_hz * t) % 1.0)).astype(np.float32)
        total, power = np.zeros_like(t), 0.0
        for k in range(1, BLADES + 1):
            total += np.cos(k * angle + np.float32(self._phases[k - 1])) / k
            power += 0.5 / k**2
        return np.asarray((1 + depth * total) / np.sqrt(1 + depth**2 * power))


@dataclass(frozen=True, slots=True)
class Event:
    """A sound of a source. start_s : when it begins there.  shape : what it is."""

    start_s: float
    shape: Shape

    @property
    def end_s(self) -> float:
        return self.start_s + self.shape.length_s


class Timetable:
    """The events of a source in order, as a schedule and a seed have them; those that are past can be forgotten."""

    def __init__(self, events: Events, seed: tuple[int, ...]) -> None:
        self._coming = _events(events, seed)
        self._known: deque[Event] = deque()
        self._next = next(self._coming)

    def between(self, from_s: float, to_s: float) -> list[Event]:
        """Events that touch from_s <= t < to_s; forgets those that ended before from_s."""
        while self._next.start_s < to_s:
            self._known.append(self._next)
            self._next = next(self._coming)
        while self._known and self._known[0].end_s <= from_s:
            self._known.popleft()
        return [event for event in self._known if event.start_s < to_s and event.end_s > from_s]


def _events(events: Events, seed: tuple[int, ...]) -> Iterator[Event]:
    random = np.random.default_rng([*seed, 1])
    schedule: Schedule = events.schedule

    def draw(limits: Range) -> float:
        return float(random.uniform(*limits))

    t = schedule.first_s
    end = t + draw(schedule.bout_s) if schedule.bout_s else np.inf
    for _ in count():
        shape = events.shapes[int(random.integers(len(events.shapes)))]
        yield Event(t, shape)
        t += max(draw(schedule.interval_s), shape.length_s)
        if t > end and schedule.bout_s and schedule.silence_s:
            t += draw(schedule.silence_s)
            end = t + draw(schedule.bout_s)


class _EventWave:
    def __init__(self, events: Events, rate_hz: float, seed: tuple[int, ...]) -> None:
        self._table, self._rate = Timetable(events, seed), 2 * rate_hz

    def make(self, number: int) -> NDArray[np.float32]:
        made = np.zeros(LOT)
        first = number * LOT
        for event in self._table.between(first / self._rate, (first + LOT) / self._rate):
            t = (first + np.arange(LOT)) / self._rate - event.start_s
            on = (t >= 0) & (t < event.shape.length_s)
            made[on] += shape_samples(event.shape, t[on])
        return made.astype(np.float32)


def shape_samples(shape: Shape, t: Floats) -> Floats:
    """Pressure at 1 m, micropascal, at times (n,) after the beginning, 0 <= t < length."""
    amplitude = 10 ** (shape.level_db / 20)
    match shape:
        case Sweep():
            slope = (shape.to_hz - shape.from_hz) / shape.length_s
            rise = np.clip(np.minimum(t, shape.length_s - t) / (0.1 * shape.length_s), 0, 1)
            # the ramps take 1/8 of the energy: (2 * 0.1 * 3/8 + 0.8) of the length is left
            whole = amplitude * np.sqrt(2 / (0.8 + 0.2 * 3 / 8))
            angle = 2 * np.pi * (shape.from_hz * t + slope * t**2 / 2)
            return np.asarray(whole * np.sin(np.pi / 2 * rise) ** 2 * np.sin(angle))
        case Pulse():
            return amplitude * _bell(t, shape.length_s / 2, shape.length_s / 12, shape.frequency_hz)
        case Clicks():
            within = t % shape.gap_s
            return amplitude * _bell(within, shape.gap_s / 2, 0.5 / shape.frequency_hz, shape.frequency_hz)
        case Shot():
            middle, total = 1.5 / shape.frequency_hz, np.zeros_like(t)
            for k, weight in enumerate((0.8, -0.35, 0.2, -0.1)):
                total += weight * _ricker(t - middle - k * shape.bubble_s, shape.frequency_hz)
                total += weight / 4 * _ricker(t - middle - k * shape.bubble_s, 6 * shape.frequency_hz)
            return np.asarray(amplitude * total)


def _bell(t: Floats, middle: float, deviation: float, frequency_hz: float) -> Floats:
    away = t - middle
    return np.asarray(np.exp(-0.5 * (away / deviation) ** 2) * np.cos(2 * np.pi * frequency_hz * away))


def _ricker(t: Floats, frequency_hz: float) -> Floats:
    square = (np.pi * frequency_hz * t) ** 2
    return np.asarray((1 - 2 * square) * np.exp(-square))


class WaveformBuffer:
    """The stretch of a waveform that is in use: from the latest bounce to the earliest arrival."""

    def __init__(self, wave: Waveform) -> None:
        self._make: Callable[[int], NDArray[np.float32]] = wave.make
        self._first = self._end = 0  # lots held
        self._samples = np.zeros(0, np.float32)

    def hold(self, first: int, end: int) -> tuple[NDArray[np.float32], int]:
        """Samples that hold `first` <= index < `end`, and the index of the first of them. `first` must not go back."""
        low, high = first // LOT, -(-end // LOT)
        if self._end <= low or not len(self._samples):
            self._first = self._end = low
            self._samples = np.zeros(0, np.float32)
        if low > self._first or high > self._end:
            pieces = [self._samples[(low - self._first) * LOT :]]
            pieces += [self._make(number) for number in range(self._end, high)]
            self._samples = np.concatenate(pieces)
            self._first, self._end = low, max(high, self._end)
        return self._samples, self._first * LOT
