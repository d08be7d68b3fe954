"""core: the whole scene at the hydrophones: sound pressure as it goes on, in constant memory, from seeds alone."""

from collections.abc import Collection

import numpy as np
from numpy.typing import NDArray

from soundrose.errors import UsageError
from soundrose.scene.field import FieldNoise, ambient_covariance, flow_covariance, reverberation_covariance
from soundrose.scene.line_tones import Tones, add_tones, hum_tones, strum_tones
from soundrose.scene.place import Line, arrivals
from soundrose.scene.rendering import KNOTS, Renderer, Steps, knot_samples
from soundrose.scene.scene_types import Emitter, Events, Scene
from soundrose.scene.waveforms import Timetable

__all__ = ["PARTS", "Sea", "emitter_seed"]

Floats = NDArray[np.float64]
#: parts of a scene beside its emitters, each with a stream of random numbers of its own
PARTS = ("ambient", "reverberation", "hum", "strum")
FIRST_EMITTER = 16  # number of the first emitter's stream
SILENT_DB = 60.0  # a reverberation that has fallen by so much is over


def emitter_seed(scene: Scene, number: int) -> tuple[int, int]:
    """The seed of the scene's emitter of that number."""
    return scene.seed, FIRST_EMITTER + number


class Sea:
    """Sound pressure at every hydrophone, before faults and converters.

    scene : as read.  only : names of emitters and of PARTS that are heard; None: all. What is left out takes no random
    numbers from the others, so that parts add up to the whole.

    UsageError : a name in `only` that is not in the scene.
    """

    def __init__(self, scene: Scene, only: Collection[str] | None = None) -> None:
        names = {*PARTS, *(emitter.name for emitter in scene.emitters)}
        if only is not None and (unknown := sorted(set(only) - names)):
            raise UsageError(f"only: got {', '.join(unknown)}; must be among {', '.join(sorted(names))}")
        heard = names if only is None else set(only)
        self.scene, self.index, self._made = scene, 0, 0
        self.step = knot_samples(scene.rate_hz)
        self.chunk = KNOTS * self.step
        listed = np.array(scene.array.positions_m)
        self.line = Line(scene.own, listed)
        self._places = listed - listed.mean(axis=0)
        self._late = np.array(scene.calibration.delay_s)
        reach = float(np.linalg.norm(self._places, axis=1).max()) + abs(scene.own.sag_m)
        late = float(np.abs(self._late).max())
        steps = Steps.of(scene.rate_hz, scene.true_rate_hz, reach / scene.water.sound_speed_m_s + late, self._late)
        emitters = [(e, emitter_seed(scene, i)) for i, e in enumerate(scene.emitters) if e.name in heard]
        self._renderer = Renderer(emitters, self.line, scene.water, steps, scene.rate_hz)
        self._ambient = self._make_ambient() if "ambient" in heard else None
        self._tones = self._make_tones(heard)
        self._reverberation = None
        if scene.reverberation is not None and "reverberation" in heard:
            self._reverberation = _Reverberation(scene, self.line, self._places, self._frequencies(), self._late)
        self._left = np.zeros((scene.array.channels, 0), np.float32)

    def _frequencies(self) -> Floats:
        """Of the frames of noise: two hops to a chunk."""
        hop = self.chunk // 2
        return np.arange(hop + 1) * self.scene.rate_hz / (2 * hop)

    def _make_ambient(self) -> FieldNoise:
        scene, frequency = self.scene, self._frequencies()
        total: NDArray[np.complex128] | Floats
        total = ambient_covariance(scene.ambient, frequency, self._places, scene.water.sound_speed_m_s)
        if scene.flow is not None and scene.own.way.speed_m_s > 0:
            total = total + flow_covariance(scene.flow, scene.own.way.speed_m_s, frequency, self._places[:, 0])
        return FieldNoise(total, scene.rate_hz, self._late, (scene.seed, 0))

    def _make_tones(self, heard: Collection[str]) -> list[Tones]:
        tones: list[Tones] = []
        if self.scene.hum is not None and "hum" in heard:
            tones += hum_tones(self.scene.hum, self.scene.array.channels, (self.scene.seed, 2))
        if self.scene.strum is not None and "strum" in heard:
            tones += strum_tones(self.scene.strum, self._places[:, 0], (self.scene.seed, 3))
        return tones

    def read(self, samples: int) -> NDArray[np.float32]:
        """(channels, samples) micropascal, the next ones. However they are cut, the bits are the same."""
        pieces, wanted = [self._left], samples - self._left.shape[1]
        while wanted > 0:
            pieces.append(self._next_chunk())
            wanted -= self.chunk
        made = np.concatenate(pieces, axis=1) if len(pieces) > 1 else self._left
        self._left = made[:, samples:]
        self.index += samples
        return made[:, :samples]

    def _next_chunk(self) -> NDArray[np.float32]:
        first = self._made
        made = self._renderer.chunk()
        hop = first // (self.chunk // 2)
        if self._ambient is not None:
            made += self._ambient.make(hop, 2)
        if self._reverberation is not None:
            self._reverberation.add(made, first)
        if self._tones:
            add_tones(made, self._tones, first, self.step, self.scene.true_rate_hz)
        self._made = first + self.chunk
        return made


class _Reverberation:
    """Diffuse noise that each shot of a source leaves."""

    def __init__(self, scene: Scene, line: Line, places: Floats, frequency_hz: Floats, late_s: Floats) -> None:
        assert scene.reverberation is not None
        self._decay, self._rate = scene.reverberation.decay_db, scene.true_rate_hz
        self._emitter, number = _named(scene, scene.reverberation.source)
        assert isinstance(self._emitter.sound, Events)
        self._table = Timetable(self._emitter.sound, emitter_seed(scene, number))
        covariance = reverberation_covariance(scene.reverberation, frequency_hz, places, scene.water.sound_speed_m_s)
        self._noise = FieldNoise(covariance, scene.rate_hz, late_s, (scene.seed, 1))
        self._line, self._water = line, scene.water
        self._shots: list[float] = []

    def add(self, made: NDArray[np.float32], first: int) -> None:
        """Adds it to (channels, n) samples from index `first` on, IN PLACE."""
        t = (first + np.arange(made.shape[1])) / self._rate
        delay = float(arrivals(self._emitter, self._line, self._water, t[:1]).delay_s[0, 0])
        heard = [event.start_s + delay for event in self._table.between(t[0] - delay, t[-1] - delay)]
        self._shots += [shot for shot in heard if not any(abs(shot - known) < 0.5 for known in self._shots)]
        self._shots = [shot for shot in self._shots if (t[0] - shot) * self._decay < SILENT_DB]
        power = np.zeros_like(t)
        for shot in self._shots:
            since = t - shot
            power += np.where(since >= 0, 10 ** (-self._decay * np.maximum(since, 0) / 10), 0.0)
        if power.any():
            hop = made.shape[1] // 2
            made += self._noise.make(first // hop, 2) * np.sqrt(power).astype(np.float32)


def _named(scene: Scene, name: str) -> tuple[Emitter, int]:
    for number, emitter in enumerate(scene.emitters):
        if emitter.name == name:
            return emitter, number
    raise UsageError(f"reverberation: no source is named {name!r}")
