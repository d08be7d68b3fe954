"""core: what is truly there at a time: the array, each source, each way of its sound, and how loud it arrives."""

from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from soundrose.scene.engine import emitter_seed
from soundrose.scene.place import Arrival, Line, arrivals, bounces_up_to
from soundrose.scene.recorder import latitude_longitude
from soundrose.scene.rendering import absorption_db_km
from soundrose.scene.scene_types import Emitter, Events, Motor, Scene
from soundrose.scene.waveforms import Timetable, band_edge, motor_density

__all__ = ["Truth", "band_levels", "decidecades"]

Floats = NDArray[np.float64]
LEAST_HZ: Final = 10.0
POINTS: Final = 32  # of the integral over a band


def decidecades(rate_hz: float) -> list[tuple[float, float, float]]:
    """(centre, low, high) Hz of the base-10 third octaves from 10 Hz to 0.45 of the rate."""
    bands = []
    for n in range(-20, 60):
        centre = 1000 * 10 ** (n / 10)
        low, high = centre * 10**-0.05, centre * 10**0.05
        if low >= LEAST_HZ and high <= 0.45 * rate_hz:
            bands.append((centre, low, high))
    return bands


class Truth:
    """Truth of a scene, at times that rise."""

    def __init__(self, scene: Scene, start_ns: int = 0) -> None:
        self.scene, self._start_ns = scene, start_ns
        self._line = Line(scene.own, np.array(scene.array.positions_m))
        self._bands = decidecades(scene.rate_hz)
        self._tables = {
            emitter.name: Timetable(emitter.sound, emitter_seed(scene, number))
            for number, emitter in enumerate(scene.emitters)
            if isinstance(emitter.sound, Events)
        }

    def at(self, t_s: float) -> dict[str, Any]:
        """One line of truth, plain values: array, and sources with each way of their sound."""
        t = np.array([t_s])
        origin, forward = self._line.origin(t)[0], self._line.forward(t)[0]
        latitude, longitude = latitude_longitude(self.scene, origin[0], origin[1])
        return {
            "t": self._start_ns + round(t_s * 1e9),
            "time_s": t_s,
            "array": {
                "north_m": float(origin[0]), "east_m": float(origin[1]), "depth_m": float(origin[2]),
                "latitude_deg": latitude, "longitude_deg": longitude,
                "heading_deg": float(np.rad2deg(self._line.heading(t)[0])) % 360,
                "positions_m": np.round(self._line.shape(t_s), 4).tolist(),
            },
            "bands_hz": [round(centre, 3) for centre, _, _ in self._bands],
            "contacts": [self._contact(emitter, t, forward) for emitter in self.scene.emitters],
        }  # fmt: skip

    def _contact(self, emitter: Emitter, t: Floats, forward: Floats) -> dict[str, Any]:
        arrival = arrivals(emitter, self._line, self.scene.water, t)
        north, east, down = arrival.source_m[0, 0]
        sounding = None
        if emitter.name in self._tables:
            heard = float(t[0] - arrival.delay_s[0, 0])
            sounding = bool([e for e in self._tables[emitter.name].between(heard, heard + 1e-9) if e.start_s <= heard])
        side = float(forward[0] * (east - self._east(t)) - forward[1] * (north - self._north(t)))
        return {
            "name": emitter.name, "kind": emitter.kind, "north_m": float(north), "east_m": float(east),
            "depth_m": float(down), "range_m": float(arrival.distance_m[0, 0]),
            "side": "starboard" if side >= 0 else "port",
            "cone_deg": _cone(arrival, forward, 0), "sounding": sounding,
            "ways": [self._way(emitter, arrival, forward, number) for number in range(len(arrival.delay_s))],
        }  # fmt: skip

    def _north(self, t: Floats) -> float:
        return float(self._line.origin(t)[0, 0])

    def _east(self, t: Floats) -> float:
        return float(self._line.origin(t)[0, 1])

    def _way(self, emitter: Emitter, arrival: Arrival, forward: Floats, number: int) -> dict[str, Any]:
        bounce = bounces_up_to(emitter.bounces)[number]
        distance = float(arrival.distance_m[number, 0])
        levels = None
        if isinstance(emitter.sound, Motor):
            loss_db = 20 * np.log10(distance) - 20 * np.log10(abs(bounce.factor(self.scene.water.bottom_loss_db)))
            levels = [
                None if level is None else round(level - float(loss_db), 2)
                for level in band_levels(self.scene, emitter, distance, self._bands)
            ]
        return {
            "bounces": bounce.name, "cone_deg": _cone(arrival, forward, number), "distance_m": distance,
            "delay_s": float(arrival.delay_s[number, 0]), "doppler": float(1 - arrival.stretch[number, 0]),
            "level_db": levels,
        }  # fmt: skip


def band_levels(
    scene: Scene, emitter: Emitter, distance_m: float, bands: list[tuple[float, float, float]]
) -> list[float | None]:
    """Level of a ship in each band, dB re 1 µPa m: spectrum and tones, absorbed over a distance but not spread."""
    assert isinstance(emitter.sound, Motor)
    motor, levels = emitter.sound, []
    depth = (emitter.depth_m + scene.own.array_depth_m) / 2

    def kept(frequency_hz: Floats) -> Floats:
        loss_db = absorption_db_km(scene.water, frequency_hz, depth) * distance_m / 1000
        return np.asarray(10 ** (-loss_db / 10) * band_edge(frequency_hz, scene.rate_hz) ** 2)

    for _, low, high in bands:
        f = low + (np.arange(POINTS) + 0.5) * (high - low) / POINTS
        power = float(np.mean(motor_density(motor, f) * kept(f)) * (high - low))
        for frequency, level_db in motor.tones:
            if low <= frequency < high:
                power += float(10 ** (level_db / 10) * kept(np.array([frequency]))[0])
        levels.append(10 * float(np.log10(power)) if power > 0 else None)
    return levels


def _cone(arrival: Arrival, forward: Floats, number: int) -> float:
    return float(np.rad2deg(np.arccos(np.clip(arrival.direction[number, 0] @ forward, -1, 1))))
