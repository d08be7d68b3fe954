"""core: what ingest hands on to the bands: hops of calibrated samples, and notes that act from a time on."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import gcd

import numpy as np
from numpy.typing import NDArray

__all__ = ["Hop", "Navigation", "Note", "Positions", "Pulse", "RunEnd", "hop_length"]


@dataclass(frozen=True, slots=True, eq=False)
class Hop:
    """Samples of every channel over one fixed step of time (shorter before a gap, a new run or an end).

    run : name of the run.  epoch : counts runs and restarts from 0, so that the same name begun anew is told apart.
    first : index of the first sample in the run.
    times : (blocks, 2) int64, [index of a block's first sample, its t in ns], every block that has samples in the
        hop, in order; the first entry's index is <= `first`.
    samples : (channels, n) float32, micropascal, read-only, finite everywhere.
    bad : (channels,) bool, not to be used in this hop (excluded, judged dead, NaN or infinity inside).
    clipped : (channels,) int32, number of clipped samples in the hop.
    received_ns : host monotonic clock at receipt of the hop's last sample (0 offline); never enters a product
        but as `latency_ms`.
    """

    run: str
    epoch: int
    first: int
    times: NDArray[np.int64]
    samples: NDArray[np.float32]
    bad: NDArray[np.bool_]
    clipped: NDArray[np.int32]
    received_ns: int = 0

    @property
    def length(self) -> int:
        """Number of sample instants."""
        return int(self.samples.shape[1])

    @property
    def end(self) -> int:
        """Index just after the last sample."""
        return self.first + self.length

    def t_ns_at(self, index: int, rate_hz: float) -> int:
        """Time of sample `index` (first <= index < end): that of the block holding it plus offset / rate."""
        row = int(np.searchsorted(self.times[:, 0], index, side="right")) - 1
        block_first, block_t = (int(v) for v in self.times[max(row, 0)])
        return block_t + round((index - block_first) * 1e9 / rate_hz)


@dataclass(frozen=True, slots=True)
class Navigation:
    """Where array or ship is, and through what water. `values` holds the optional keys of the message that came."""

    t_ns: int
    of: str
    values: Mapping[str, float | str]


@dataclass(frozen=True, slots=True, eq=False)
class Positions:
    """New hydrophone positions. positions_m : (channels, 3) float64, array frame, all hydrophones listed."""

    t_ns: int
    positions_m: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Pulse:
    """An own active source fires at `t_ns` for `length_s`."""

    t_ns: int
    source: str
    length_s: float


#: acts from the first frame that begins at or after its `t_ns`
Note = Navigation | Positions | Pulse


@dataclass(frozen=True, slots=True)
class RunEnd:
    """The run of this epoch is over: an `end`, another run, or a restart."""

    run: str
    epoch: int


def hop_length(frames: Sequence[int]) -> int:
    """Length of a hop in samples for bands with these frame lengths.

    Half a frame where there is one band. With several, the greatest common divisor of the half frames, so that every
    band gets its frames without waiting, unless that is below an eighth of the smallest half frame: then the
    smallest half frame.
    """
    halves = [frame // 2 for frame in frames]
    shared = gcd(*halves)
    return shared if 8 * shared >= min(halves) else min(halves)
