"""core: a scene as the messages that its array would send: samples with gaps and drift, navigation, pulses."""

from collections.abc import Iterator
from dataclasses import dataclass
from math import floor, hypot

import numpy as np

from soundrose.feed.messages import encode_end, encode_navigation, encode_positions, encode_pulse, encode_samples
from soundrose.scene.engine import Sea, emitter_seed
from soundrose.scene.faults import Converter, Faults
from soundrose.scene.place import Line
from soundrose.scene.scene_types import Events, Scene
from soundrose.scene.waveforms import Timetable

__all__ = ["Recorder", "Sent", "latitude_longitude"]

EARTH_M = 6_371_000.0  # mean radius; places are told to 1 in 300, as a plane about own ship's start
NAVIGATION = 5  # number of its stream of random numbers


@dataclass(frozen=True, slots=True, eq=False)
class Sent:
    """One message and the index after the last sample that had been taken when it could be sent."""

    end: int
    parts: list[bytes]
    samples: int = 0


class Recorder:
    """Messages of a scene's array.

    scene, sea : what is recorded; the sea by default makes all of the scene.  run : name of the run.
    start_ns : time of sample 0.  block : samples in a block.  total : samples in all, None for ever.
    """

    def __init__(
        self, scene: Scene, run: str, start_ns: int, block: int, total: int | None = None, sea: Sea | None = None
    ) -> None:
        self.scene, self.run, self.start_ns = scene, run, start_ns
        self._sea = sea or Sea(scene)
        self._block, self._total = block, total
        self._faults = Faults(scene.faults, scene.true_rate_hz, scene.seed)
        self._converter = Converter(scene)
        self._gaps = sorted((self._index(gap.at_s), self._index(gap.at_s + gap.length_s)) for gap in scene.gaps)
        self._notes = _Notes(scene, self._sea.line)
        self._told_s = 0.0

    def _index(self, t_s: float) -> int:
        return round(t_s * self.scene.true_rate_hz)

    def t_ns(self, index: int) -> int:
        """True time of a sample."""
        return self.start_ns + round(index * 1e9 / self.scene.true_rate_hz)

    def messages(self) -> Iterator[Sent]:
        """Blocks and what is told beside them, in the order in which an array would send them; an `end` at last."""
        first = 0
        while self._total is None or first < self._total:
            end = first + self._block if self._total is None else min(first + self._block, self._total)
            yield from self._around(first, end)
            first = end
        yield Sent(first, encode_end(self.scene.array.id, self.run))

    def _around(self, first: int, end: int) -> Iterator[Sent]:
        until_s = end / self.scene.true_rate_hz
        for t_s, keys in self._notes.between(self._told_s, until_s):
            yield Sent(end, _note(self.scene.array.id, self.start_ns + round(t_s * 1e9), keys))
        self._told_s = until_s
        samples = self._converter.convert(self._faults.apply(self._sea.read(end - first), first))
        for begin, stop in self._kept(first, end):
            parts = encode_samples(
                self.scene.array.id, self.run, begin, self.t_ns(begin), self.scene.rate_hz,
                samples[:, begin - first : stop - first], type=self.scene.type,
            )  # fmt: skip
            yield Sent(stop, parts, stop - begin)

    def _kept(self, first: int, end: int) -> list[tuple[int, int]]:
        """The stretches of [first, end) that no gap takes."""
        kept, at = [], first
        for begin, stop in self._gaps:
            if stop <= at or begin >= end:
                continue
            if begin > at:
                kept.append((at, begin))
            at = stop
        if at < end:
            kept.append((at, end))
        return kept


Keys = dict[str, object]


class _Notes:
    """What is told beside samples, in order of time."""

    def __init__(self, scene: Scene, line: Line) -> None:
        self._scene, self._line = scene, line
        self._pulses = [
            (emitter.announce, Timetable(emitter.sound, emitter_seed(scene, number)))
            for number, emitter in enumerate(scene.emitters)
            if emitter.announce and isinstance(emitter.sound, Events)
        ]

    def between(self, from_s: float, to_s: float) -> list[tuple[float, Keys]]:
        """(time, keys) of messages with from_s <= time < to_s."""
        sending, found = self._scene.navigation, []
        found += [(k * sending.every_s, self._navigation(k)) for k in _ticks(sending.every_s, from_s, to_s)]
        every = sending.positions_every_s
        found += [(k * every, {"positions_m": self._line.shape(k * every)}) for k in _ticks(every, from_s, to_s)]
        for source, table in self._pulses:
            for event in table.between(from_s, to_s):
                if from_s <= event.start_s < to_s:
                    found.append((event.start_s, {"source": source, "length_s": event.shape.length_s}))
        return sorted(found, key=lambda item: item[0])

    def _navigation(self, number: int) -> Keys:
        sending, t = self._scene.navigation, np.array([number * self._scene.navigation.every_s])
        random = np.random.default_rng([self._scene.seed, NAVIGATION, number])
        errors = random.standard_normal(4)
        north, east, down = self._line.origin(t)[0]
        north += sending.position_sigma_m * errors[0]
        east += sending.position_sigma_m * errors[1]
        velocity = self._line.velocity(t)[0]
        heading = float(np.rad2deg(self._line.heading(t)[0]))
        latitude, longitude = latitude_longitude(self._scene, north, east)
        keys: Keys = {
            "latitude_deg": latitude, "longitude_deg": longitude,
            "heading_deg": (heading + sending.heading_sigma_deg * errors[2]) % 360,
            "heading_sigma_deg": sending.heading_sigma_deg, "heading_from": "compass",
            "pitch_deg": self._scene.own.pitch_deg, "depth_m": float(down + sending.depth_sigma_m * errors[3]),
            "speed_m_s": hypot(velocity[0], velocity[1]), "course_deg": heading % 360,
        }  # fmt: skip
        return keys


def latitude_longitude(scene: Scene, north_m: float, east_m: float) -> tuple[float, float]:
    """Degrees, of a place in the scene's plane."""
    latitude = scene.own.latitude_deg + float(np.rad2deg(north_m / EARTH_M))
    circle = EARTH_M * np.cos(np.deg2rad(scene.own.latitude_deg))
    return latitude, (scene.own.longitude_deg + float(np.rad2deg(east_m / circle)) + 180) % 360 - 180


def _ticks(every_s: float, from_s: float, to_s: float) -> range:
    """Whole numbers k with from_s <= k * every_s < to_s; none where every_s is 0."""
    if every_s == 0:
        return range(0)
    first = floor(from_s / every_s)
    while first * every_s < from_s:
        first += 1
    end = first
    while end * every_s < to_s:
        end += 1
    return range(first, end)


def _note(array: str, t_ns: int, keys: Keys) -> list[bytes]:
    if "positions_m" in keys:
        return encode_positions(array, t_ns, keys["positions_m"])  # type: ignore[arg-type]
    if "source" in keys:
        return encode_pulse(array, t_ns, str(keys["source"]), float(keys["length_s"]))  # type: ignore[arg-type]
    return encode_navigation(array, t_ns, **keys)  # type: ignore[arg-type]
