"""core: what ingest must know of the bands' frames: samples that fill none, and which frames are already over."""

from collections import deque
from collections.abc import Sequence

from soundrose.feed.hop import Hop

__all__ = ["FrameStarts", "unused_samples"]


def unused_samples(length: int, frames: Sequence[int]) -> int:
    """Samples of an unbroken stretch of `length` that lie in no frame of any band.

    Frame k of a band covers [k N/2, k N/2 + N) of the stretch, so that what is left over is always its tail.
    """
    return min(length - _used(length, frame) for frame in frames)


def _used(length: int, frame: int) -> int:
    half = frame // 2
    return ((length - frame) // half + 2) * half if length >= frame else 0


class FrameStarts:
    """Follows the frames of one band through the hops handed on.

    completed_t_ns : `t` of the last frame that is complete, None before the first. It goes on over gaps and runs, and
    is forgotten when time goes back: what happened later by an earlier clock says nothing about the new one.
    """

    def __init__(self, frame: int, rate_hz: float) -> None:
        self._frame, self._rate_hz = frame, rate_hz
        self._open: deque[tuple[int, int]] = deque()  # (index just after the frame, its t); at most three or so
        self._epoch = self._end = self._next = -1
        self.completed_t_ns: int | None = None

    def push(self, hop: Hop) -> None:
        """Take the next hop."""
        if hop.epoch != self._epoch or hop.first != self._end:
            self._open.clear()
            self._next = hop.first
            t_ns = hop.t_ns_at(hop.first, self._rate_hz)
            if self.completed_t_ns is not None and t_ns < self.completed_t_ns:
                self.completed_t_ns = None
        self._epoch, self._end = hop.epoch, hop.end
        while self._next < hop.end:
            self._open.append((self._next + self._frame, hop.t_ns_at(self._next, self._rate_hz)))
            self._next += self._frame // 2
        while self._open and self._open[0][0] <= hop.end:
            self.completed_t_ns = self._open.popleft()[1]
