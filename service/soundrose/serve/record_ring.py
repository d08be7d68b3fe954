"""core: levels over bearing of one band through the last hour: a bounded ring of rows, and the holes between them."""

from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from math import ceil
from typing import Any, Literal, cast

import numpy as np
from numpy.typing import NDArray

from soundrose.product.reduce import group_size

__all__ = ["BEAMS_MOST", "KEPT_S", "PARTS", "ROW_NS", "STEP_DB", "BandRing", "Hole", "Rows", "Why", "rows_within"]

ROW_NS = 500_000_000  #: two rows a second of data time
KEPT_S = 3600
PARTS = 4  #: ranges of frequency, each the same ratio wide
BEAMS_MOST = 181  #: neighbours are joined above
STEP_DB = 0.5  #: of a stored byte; 127.5 dB below the loudest of a row read as that
HOLES_MOST = 1024
_LATE = 1.5  #: of the usual step between two maps: more is a hole
_TOP = 255

Why = Literal["gap", "maps missed", "band restarted", "new run", "began"]


@dataclass(frozen=True, slots=True)
class Hole:
    """Nothing is known from `t` to `t_end` (ns, data time). row : number of the row that follows."""

    row: int
    t: int
    t_end: int
    why: Why


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """A copy of rows. first : number of the first. t_end : (rows,) int64 ns. level_db : (rows, beams) float32."""

    first: int
    t_end: NDArray[np.int64]
    level_db: NDArray[np.float32]
    holes: list[Hole]


def rows_within(memory_bytes: int, bands: int, beams: int) -> int:
    """Rows of one band, an hour at most, so that all bands stay within the memory."""
    return max(1, min(KEPT_S * 10**9 // ROW_NS, memory_bytes // (max(bands, 1) * PARTS * min(beams, BEAMS_MOST))))


@dataclass(slots=True)
class _Slot:
    """Sum of the power of the maps of one row. number : data time of its end in whole rows."""

    number: int
    t_end: int
    power: NDArray[np.float64]
    maps: int = 1


@dataclass(slots=True, eq=False)
class BandRing:
    """One band's rows. Each is the mean power of the maps whose data time ends in the same half second.

    rows_most : rows kept.  count : rows ever made; the number of the next one.
    """

    rows_most: int
    count: int = 0
    cone_deg: list[float] = field(default_factory=list)
    ranges_hz: list[tuple[float, float]] = field(default_factory=list)
    _bins: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))  # in each part
    _starts: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))
    _shape: tuple[Any, ...] = ()
    _kept: int = 0
    _levels: NDArray[np.uint8] = field(default_factory=lambda: np.zeros((0, 0, 0), np.uint8))
    _floors: NDArray[np.float32] = field(default_factory=lambda: np.zeros(0, np.float32))
    _t_end: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))
    _holes: "deque[Hole]" = field(default_factory=lambda: deque(maxlen=HOLES_MOST))
    _slot: _Slot | None = None
    _last: Mapping[str, Any] | None = None
    _usual_ns: int = 0

    @property
    def first(self) -> int:
        """Number of the oldest row kept."""
        return self.count - self._kept

    def add(self, header: Mapping[str, Any], level_db: NDArray[np.float32]) -> None:
        """Take a published map. Data time that goes back begins the record anew: rows have one order."""
        shape = (tuple(header["shape"]), header["f0_hz"], header["df_hz"])
        last = self._last
        if shape != self._shape or (last is not None and header["t_end"] < last["t_end"]):
            self._begin(header, shape)
            last = None
        why = "began" if last is None else self._hole_before(header, last)
        if why is not None:
            self._close()
            self._holes.append(
                Hole(self.count, header["t"] if last is None else last["t_end"], header["t"], cast(Why, why))
            )
        power = self._power(level_db)
        number = -(-header["t_end"] // ROW_NS)
        if self._slot is not None and self._slot.number == number:
            self._slot.power += power
            self._slot.maps += 1
            self._slot.t_end = header["t_end"]
        else:
            self._close()
            self._slot = _Slot(number, header["t_end"], power)
        self._last = header

    def rows(self, since: int, limit: int, part: int | None, span_ns: int | None = None) -> Rows:
        """Rows from number `since` on, at most `limit`. part : of the ranges, None: all frequencies of the band.

        span_ns : none older than this before the newest.
        """
        begin = min(max(since, self.first), self.count)
        if span_ns is not None and self._kept:
            places = self._places(self.first, self.count)
            oldest = int(self._t_end[places[-1]]) - span_ns
            begin = max(begin, self.first + int(np.searchsorted(self._t_end[places], oldest, "right")))
        end = min(begin + limit, self.count)
        places = self._places(begin, end)
        levels = self._levels[places].astype(np.float32) * np.float32(STEP_DB) + self._floors[places][:, None, None]
        holes = [hole for hole in self._holes if begin <= hole.row < end]
        return Rows(begin, self._t_end[places], self._joined(levels, part), holes)

    def _joined(self, levels: NDArray[np.float32], part: int | None) -> NDArray[np.float32]:
        """(rows, parts, beams) to (rows, beams): one part, or the mean of the power of all bins."""
        if part is not None or not len(self._bins):
            return levels[:, part or 0] if levels.size else np.zeros((len(levels), len(self.cone_deg)), np.float32)
        power = np.exp(levels * np.float32(np.log(10) / 10))
        mean = np.tensordot(power, (self._bins / self._bins.sum()).astype(np.float32), ([1], [0]))
        return cast(NDArray[np.float32], (10 * np.log10(np.maximum(mean, 1e-30))).astype(np.float32))

    def _places(self, begin: int, end: int) -> NDArray[np.int64]:
        return np.arange(begin, end, dtype=np.int64) % max(len(self._t_end), 1)

    def _begin(self, header: Mapping[str, Any], shape: tuple[Any, ...]) -> None:
        beams, bins = header["shape"]
        self._slot, self._kept, self._shape, self._usual_ns = None, 0, shape, 0
        self._holes.clear()
        self._starts, self.ranges_hz = _ranges(header["f0_hz"], header["df_hz"], bins)
        self._bins = np.diff(np.append(self._starts, bins))
        by = group_size(beams, BEAMS_MOST)
        self.cone_deg = _group_cone(header["cone_deg"], by)
        self._levels = np.zeros((self.rows_most, len(self._starts), ceil(beams / by)), np.uint8)
        self._floors = np.zeros(self.rows_most, np.float32)
        self._t_end = np.zeros(self.rows_most, np.int64)

    def _hole_before(self, header: Mapping[str, Any], last: Mapping[str, Any]) -> str | None:
        """Why there is a hole between two maps of a band, or None."""
        step = header["t"] - last["t"]
        if header["run"] != last["run"]:
            return "new run"
        if header["start"] != last["start"]:
            return "band restarted"
        if header["seq"] != last["seq"] + 1:
            return "maps missed"
        usual, self._usual_ns = self._usual_ns, min(step, self._usual_ns or step)
        late = usual > 0 and step > _LATE * usual
        fresh = header["limits"]["gap"] and not last["limits"]["gap"]
        return "gap" if late or fresh else None

    def _power(self, level_db: NDArray[np.float32]) -> NDArray[np.float64]:
        """(parts, beams) mean power in each range of frequency."""
        power = np.exp(level_db * np.float32(np.log(10) / 10))
        means = np.add.reduceat(power, self._starts, axis=1, dtype=np.float64) / self._bins
        by = group_size(len(level_db), BEAMS_MOST)
        if by > 1:
            starts = np.arange(0, len(level_db), by)
            sizes = np.diff(np.append(starts, len(level_db)))
            means = np.add.reduceat(means, starts, axis=0) / sizes[:, None]
        return means.T

    def _close(self) -> None:
        """Make a row of the slot, if there is one."""
        if self._slot is None:
            return
        level = 10 * np.log10(np.maximum(self._slot.power / self._slot.maps, 1e-30))
        floor = np.ceil(level.max() / STEP_DB) * STEP_DB - _TOP * STEP_DB
        place = self.count % self.rows_most
        self._levels[place] = np.clip(np.rint((level - floor) / STEP_DB), 0, _TOP)
        self._floors[place], self._t_end[place] = floor, self._slot.t_end
        self.count += 1
        self._kept = min(self._kept + 1, self.rows_most)
        self._slot = None


def _ranges(f0_hz: float, df_hz: float, bins: int) -> tuple[NDArray[np.int64], list[tuple[float, float]]]:
    """First bins of the parts, and the lowest and highest frequency in each; a part without bins is left out."""
    low, high = max(f0_hz, df_hz), f0_hz + df_hz * (bins - 1)
    edges = np.geomspace(low, max(high, low * 1.0001), PARTS + 1)[:-1]
    starts = np.unique(np.clip(np.ceil((edges - f0_hz) / df_hz - 1e-6).astype(np.int64), 0, bins - 1))
    starts[0] = 0
    stops = np.append(starts[1:], bins)
    ranges = [(f0_hz + df_hz * int(a), f0_hz + df_hz * (int(b) - 1)) for a, b in zip(starts, stops, strict=True)]
    return starts, ranges


def _group_cone(cone_deg: Sequence[float], by: int) -> list[float]:
    """Arccosine of each group's mean cosine."""
    cosines = np.cos(np.radians(cone_deg))
    starts = np.arange(0, len(cosines), by)
    means = np.add.reduceat(cosines, starts) / np.diff(np.append(starts, len(cosines)))
    return [round(float(v), 6) for v in np.degrees(np.arccos(np.clip(means, -1, 1)))]
