"""core: which hydrophones are compared with which: the nearest ones, close pairs, and evenly spaced stretches."""

from collections.abc import Sequence
from itertools import pairwise
from typing import Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = ["LEAST_NEIGHBOURS", "NEIGHBOURS", "PairList", "Surroundings", "close_pairs", "even_stretches"]

NEIGHBOURS: Final = 8  #: four on each side in the middle of a line: up to three sick ones do not move their median
LEAST_NEIGHBOURS: Final = 4  #: fewer say nothing about who is wrong
PAIRS_EACH: Final = 4  #: partners by which a polarity is judged
STRETCH: Final = 64  #: hydrophones compared each with each; longer lines are cut, so that cost grows with length
LEAST_STRETCH: Final = 8
_EVEN: Final = 0.05  #: of the spacing: a position this far off still counts as evenly spaced

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


class Surroundings:
    """The nearest hydrophones in use of each.

    positions_m : (channels, 3) float64.
    """

    def __init__(self, positions_m: Floats) -> None:
        apart = np.linalg.norm(positions_m[:, None] - positions_m, axis=2)
        np.fill_diagonal(apart, -1.0)
        self._order = np.argsort(apart, axis=1, kind="stable")[:, 1:]

    def nearest(self, fit: NDArray[np.bool_]) -> Ints | None:
        """(channels, k) indices of the k nearest that are `fit` (channels,) bool; None: too few to judge by."""
        count = min(int(np.count_nonzero(fit)) - 1, NEIGHBOURS)
        if count < LEAST_NEIGHBOURS:
            return None
        usable = fit[self._order]
        chosen = usable & (np.cumsum(usable, axis=1) <= count)
        return self._order[chosen].reshape(len(fit), count)


class PairList(NamedTuple):
    """first, second : (pairs,) channels.  limit_hz : (pairs,) below it every sound in the water reaches both with less
    than a quarter of a period between."""

    first: Ints
    second: Ints
    limit_hz: Floats


def close_pairs(positions_m: Floats, delay_s: Sequence[float], sound_speed_m_s: float) -> PairList:
    """Each hydrophone with its nearest, every pair once."""
    delay = np.asarray(delay_s, np.float64)
    apart = np.linalg.norm(positions_m[:, None] - positions_m, axis=2)
    late = apart / sound_speed_m_s + np.abs(delay[:, None] - delay)
    order = np.argsort(late + np.where(np.eye(len(late), dtype=bool), -1.0, 0.0), axis=1, kind="stable")
    near = order[:, 1 : PAIRS_EACH + 1]
    both = {(min(i, int(j)), max(i, int(j))) for i in range(len(near)) for j in near[i]}
    pairs = np.array(sorted(both), np.int64).reshape(-1, 2)
    first, second = pairs[:, 0], pairs[:, 1]
    return PairList(first, second, 0.25 / np.maximum(late[first, second], 1e-9))


def even_stretches(positions_m: Floats) -> list[Ints]:
    """Stretches of consecutive hydrophones that stand evenly on a straight line, each of 8 to 64 channels."""
    steps = np.diff(positions_m, axis=0)
    found: list[Ints] = []
    begin = 0
    for i in range(1, len(positions_m)):
        here, same = steps[i - 1], steps[begin]
        if np.linalg.norm(here - same) > _EVEN * np.linalg.norm(same):
            found += _cut(begin, i)
            begin = i - 1
    return found + _cut(begin, len(positions_m))


def _cut(begin: int, end: int) -> list[Ints]:
    length = end - begin
    if length < LEAST_STRETCH:
        return []
    edges = np.linspace(begin, end, -(-length // STRETCH) + 1).round().astype(np.int64)
    return [np.arange(a, b) for a, b in pairwise(edges)]
