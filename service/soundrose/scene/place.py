"""core: where hydrophones and sources are, and how sound goes from one to the other: straight and by bounces."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from soundrose.scene.scene_types import Emitter, Own, Water

__all__ = ["Arrival", "Bounce", "Line", "arrivals", "bounces_up_to", "hydrophone_delays"]

Floats = NDArray[np.float64]
LEAST_M = 1.0  # nearer than this a source is no point
TURNS = 4  # of the search for the time of emission: each gains a factor of speed / sound speed


@dataclass(frozen=True, slots=True)
class Bounce:
    """A way of the sound: an image of the source at depth sign * depth + 2 * bottoms * water depth.

    name : "direct", or the reflections in order, "s" surface, "b" bottom.  surface, bottom : how many of each.
    """

    name: str
    sign: int
    bottoms: int
    surface: int
    bottom: int

    def depth(self, depth_m: float, water_m: float) -> float:
        return self.sign * depth_m + 2 * self.bottoms * water_m

    def factor(self, loss_db: float) -> float:
        """Amplitude left: -1 for each surface, the loss for each bottom."""
        return float((-1) ** self.surface * 10 ** (-loss_db * self.bottom / 20))


_BOUNCES = (
    Bounce("direct", 1, 0, 0, 0),
    Bounce("s", -1, 0, 1, 0),
    Bounce("b", -1, 1, 0, 1),
    Bounce("sb", 1, 1, 1, 1),
    Bounce("bs", 1, -1, 1, 1),
    Bounce("sbs", -1, -1, 2, 1),
    Bounce("bsb", -1, 2, 1, 2),
)


def bounces_up_to(most: int) -> tuple[Bounce, ...]:
    """The ways with at most so many reflections, 0 to 3, between surface and bottom: 1, 3, 5 or 7 of them."""
    return tuple(bounce for bounce in _BOUNCES if bounce.surface + bounce.bottom <= most)


class Line:
    """The hydrophones in the world: towed along own ship's way, or still where that does not move.

    positions_m : (channels, 3), array frame, as listed. The line follows the way by arc length, so it bends as the way
    does; it hangs through by a parabola and is pitched.
    """

    def __init__(self, own: Own, positions_m: NDArray[np.float64]) -> None:
        local = np.asarray(positions_m, np.float64)
        local = local - local.mean(axis=0)
        pitch = np.deg2rad(own.pitch_deg)
        hang = local[:, 0] / max(np.abs(local[:, 0]).max(), 1e-9)
        sag = own.sag_m * (1 - hang**2)
        self._own = own
        self._along = local[:, 0] * np.cos(pitch) + local[:, 2] * np.sin(pitch)
        self._side = local[:, 1]
        self._down = -local[:, 0] * np.sin(pitch) + local[:, 2] * np.cos(pitch) + sag - sag.mean()
        self._pitch = pitch
        self.channels = len(local)

    def origin(self, t_s: Floats) -> Floats:
        """(..., 3) north, east, down of the array origin, m."""
        north, east, _ = self._own.way.at(t_s * self._own.way.speed_m_s - self._own.layback_m)
        return np.stack([north, east, np.full_like(north, self._own.array_depth_m)], axis=-1)

    def heading(self, t_s: Floats) -> Floats:
        """(...) heading of the way at the origin, radians."""
        return self._own.way.at(t_s * self._own.way.speed_m_s - self._own.layback_m)[2]

    def velocity(self, t_s: Floats) -> Floats:
        """(..., 3) m/s of the array origin."""
        heading = self.heading(t_s)
        return self._own.way.speed_m_s * np.stack([np.cos(heading), np.sin(heading), np.zeros_like(heading)], axis=-1)

    def forward(self, t_s: Floats) -> Floats:
        """(..., 3) unit vector of the array's x axis in the world."""
        heading, pitch = self.heading(t_s), self._pitch
        level = np.cos(pitch)
        return np.stack(
            [np.cos(heading) * level, np.sin(heading) * level, np.full_like(heading, -np.sin(pitch))], axis=-1
        )

    def places(self, t_s: Floats) -> Floats:
        """(..., channels, 3) north, east, down of every hydrophone, m."""
        arc = np.asarray(t_s)[..., None] * self._own.way.speed_m_s - self._own.layback_m + self._along
        north, east, heading = self._own.way.at(arc)
        north, east = north - self._side * np.sin(heading), east + self._side * np.cos(heading)
        return np.stack([north, east, np.broadcast_to(self._own.array_depth_m + self._down, north.shape)], axis=-1)

    def shape(self, t_s: float) -> Floats:
        """(channels, 3) places in the array frame (x forward, y starboard, z down) about their mean, m."""
        t = np.array([t_s])
        away = self.places(t)[0]
        away = away - away.mean(axis=0)
        heading, pitch = float(self.heading(t)[0]), float(self._pitch)
        ahead = away[:, 0] * np.cos(heading) + away[:, 1] * np.sin(heading)
        side = -away[:, 0] * np.sin(heading) + away[:, 1] * np.cos(heading)
        x = ahead * np.cos(pitch) - away[:, 2] * np.sin(pitch)
        z = ahead * np.sin(pitch) + away[:, 2] * np.cos(pitch)
        return np.stack([x, side, z], axis=1)


@dataclass(frozen=True, slots=True, eq=False)
class Arrival:
    """Sound of one source at the array origin at times (times,), by each of its ways.

    delay_s : (ways, times) from the source to the array origin.  stretch : (ways, times) its change with time: a tone f
    is heard at f (1 - stretch).  distance_m : (ways, times).
    source_m, velocity_m_s, direction : (ways, times, 3), the world: where the source, or its image, was when it gave
    off what is heard, how it moved, and the unit vector from the origin towards it.
    """

    delay_s: Floats
    stretch: Floats
    distance_m: Floats
    source_m: Floats
    velocity_m_s: Floats
    direction: Floats


def arrivals(emitter: Emitter, line: Line, water: Water, t_s: Floats) -> Arrival:
    """How the emitter is heard at the array origin at these times of reception."""
    bounces = bounces_up_to(emitter.bounces)
    depth = np.array([bounce.depth(emitter.depth_m, water.depth_m) for bounce in bounces])[:, None]
    speed, origin = water.sound_speed_m_s, line.origin(t_s)
    delay = np.zeros((len(bounces), len(t_s)))
    for _ in range(TURNS):
        source, velocity = _source(emitter, t_s - delay, depth)
        delay = np.linalg.norm(source - origin, axis=-1) / speed
    source, velocity = _source(emitter, t_s - delay, depth)
    distance = np.maximum(delay * speed, LEAST_M)
    direction = (source - origin) / distance[..., None]
    towards = np.einsum("wti,wti->wt", direction, velocity)
    away = towards - np.einsum("wti,ti->wt", direction, line.velocity(t_s))
    return Arrival(delay, away / (speed + towards), distance, source, velocity, direction)


def hydrophone_delays(arrival: Arrival, line: Line, water: Water, t_s: Floats) -> Floats:
    """(ways, times, channels) seconds from the source to each hydrophone. Exact but for a source that turns while its
    sound crosses the array."""
    places = line.places(t_s)
    delay = arrival.delay_s[..., None]
    later = np.broadcast_to(delay, (*arrival.delay_s.shape, line.channels))
    still = arrival.source_m[:, :, None] - places
    for _ in range(3):
        away = still - arrival.velocity_m_s[:, :, None] * (later - delay)[..., None]
        later = np.sqrt(np.einsum("wtmi,wtmi->wtm", away, away)) / water.sound_speed_m_s
    return later


def _source(emitter: Emitter, t_s: Floats, depth_m: Floats) -> tuple[Floats, Floats]:
    """(ways, times, 3) place and velocity at these times (ways, times)."""
    way = emitter.way
    north, east, heading = way.at(t_s * way.speed_m_s - emitter.behind_m)
    place = np.stack([north, east, np.broadcast_to(depth_m, north.shape)], axis=-1)
    velocity = way.speed_m_s * np.stack([np.cos(heading), np.sin(heading), np.zeros_like(heading)], axis=-1)
    return place, velocity
