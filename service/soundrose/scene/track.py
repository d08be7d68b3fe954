"""core: ways through the water: straight lines and arcs, travelled at one speed, as functions of time.

World frame: metres north, east and down from where own ship is at time 0. A way is known at any arc length, also
before its beginning (straight on backwards) and after its end (the last piece goes on).
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import atan2, cos, hypot, pi, sin, tan

import numpy as np
from numpy.typing import NDArray

__all__ = ["Leg", "Way", "legs_way", "waypoints_way"]

Floats = NDArray[np.float64]
STRAIGHT = 1e-12  # curvature below which an arc is a line


@dataclass(frozen=True, slots=True)
class Leg:
    """A stretch of a way. seconds : how long it lasts.  turn_deg_s : rate of turn, clockwise seen from above."""

    seconds: float
    turn_deg_s: float


class Way:
    """Pieces of constant curvature, joined without a step in place or heading.

    start : (north, east), m.  heading : radians clockwise from north.  pieces : (length m, curvature 1/m, clockwise).
    speed_m_s : along the way, >= 0.
    """

    def __init__(
        self, start: tuple[float, float], heading: float, pieces: Sequence[tuple[float, float]], speed_m_s: float
    ) -> None:
        self.speed_m_s = speed_m_s
        rows = [(0.0, start[0], start[1], heading, 0.0)]  # before the beginning: straight
        at, north, east = 0.0, start[0], start[1]
        for length, curvature in pieces or [(1.0, 0.0)]:
            rows.append((at, north, east, heading, curvature))
            forward, side = _arc(np.float64(length), np.float64(curvature))
            north += float(forward) * cos(heading) - float(side) * sin(heading)
            east += float(forward) * sin(heading) + float(side) * cos(heading)
            heading += length * curvature
            at += length
        self._rows = np.array(rows)
        self._starts = self._rows[1:, 0]

    def at(self, arc_m: Floats) -> tuple[Floats, Floats, Floats]:
        """North, east, m, and heading, radians, at these arc lengths (any shape)."""
        rows = self._rows[np.searchsorted(self._starts, arc_m, side="right")]
        along, heading, curvature = arc_m - rows[..., 0], rows[..., 3], rows[..., 4]
        forward, side = _arc(along, curvature)
        c, s = np.cos(heading), np.sin(heading)
        return (
            rows[..., 1] + forward * c - side * s,
            rows[..., 2] + forward * s + side * c,
            heading + along * curvature,
        )

    def place(self, t_s: Floats) -> Floats:
        """(..., 2) north, east, m, at these times."""
        north, east, _ = self.at(t_s * self.speed_m_s)
        return np.stack([north, east], axis=-1)

    def velocity(self, t_s: Floats) -> Floats:
        """(..., 2) north, east, m/s, at these times."""
        _, _, heading = self.at(t_s * self.speed_m_s)
        return self.speed_m_s * np.stack([np.cos(heading), np.sin(heading)], axis=-1)


def _arc(length: Floats | np.float64, curvature: Floats | np.float64) -> tuple[Floats, Floats]:
    """Forward and to the right after an arc that begins straight ahead."""
    bent = np.abs(curvature) > STRAIGHT
    safe = np.where(bent, curvature, 1.0)
    angle = length * curvature
    return (
        np.where(bent, np.sin(angle) / safe, length),
        np.where(bent, 2 * np.sin(angle / 2) ** 2 / safe, 0.0),
    )


def legs_way(start: tuple[float, float], course_deg: float, speed_m_s: float, legs: Sequence[Leg]) -> Way:
    """From a start on a course, then leg after leg; straight on after the last."""
    pieces = [(leg.seconds * speed_m_s, float(np.deg2rad(leg.turn_deg_s)) / speed_m_s) for leg in legs if speed_m_s > 0]
    return Way(start, float(np.deg2rad(course_deg)), [*pieces, (1.0, 0.0)], speed_m_s)


def waypoints_way(points: Sequence[tuple[float, float]], speed_m_s: float, radius_m: float) -> Way:
    """Through (north, east) points, corners rounded off with `radius_m`, or less where legs are too short for it."""
    pieces: list[tuple[float, float]] = []
    headings = [atan2(b[1] - a[1], b[0] - a[0]) for a, b in pairwise(points)]
    lengths = [hypot(b[0] - a[0], b[1] - a[1]) for a, b in pairwise(points)]
    used = 0.0
    for i, length in enumerate(lengths):
        cut = turn = radius = 0.0
        if i + 1 < len(lengths):
            turn = (headings[i + 1] - headings[i] + pi) % (2 * pi) - pi
            steep = tan(min(abs(turn), 0.99 * pi) / 2)
            cut = min(radius_m * steep, length / 2, lengths[i + 1] / 2)
            radius = cut / steep if steep > 0 else 0.0
        pieces.append((length - used - cut, 0.0))
        if radius > 0 and turn:
            pieces.append((abs(turn) * radius, (1 if turn > 0 else -1) / radius))
        used = cut
    return Way(points[0], headings[0], [*pieces, (1.0, 0.0)], speed_m_s)
