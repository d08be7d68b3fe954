"""core: hops of any length in, overlapped frames out; where framing begins anew, and what each frame is worth."""

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from soundrose.errors import UsageError
from soundrose.feed.hop import Hop

__all__ = ["LOUDEST_UPA", "Frame", "Framer", "rows"]

#: a channel with a sample beyond this (260 dB re 1 uPa; single precision would overflow in the power of 10^4 times
#: more) is not used in the frame: no sound in the sea is that loud, but a float feed may send it
LOUDEST_UPA = np.float32(1e13)


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """N samples of a band's channels, and what is known of them.

    epoch, run : as in the hop.  first : index in the run of the first sample.  t_ns : its time.
    samples : (channels of the band, N) float32, micropascal; a view that holds until the next push.
    used : (channels of the band,) bool, False if bad in any hop that overlaps the frame.
    silent : no used channel has a sample other than zero in those hops.
    clipped : number of clipped samples of used channels (hops in part inside count in proportion).
    elapsed : samples since the first sample of the frame before it; None for the first frame of an epoch.
    adjacent : the frame before it starts half a frame earlier, with no gap between.
    since_gap : samples from the end of the last gap of the epoch to `first`; None before any gap.
    received_ns : host clock at receipt of the hop with the last sample.
    """

    epoch: int
    run: str
    first: int
    t_ns: int
    samples: NDArray[np.float32]
    used: NDArray[np.bool_]
    silent: bool
    clipped: float
    elapsed: int | None
    adjacent: bool
    since_gap: int | None
    received_ns: int

    @property
    def length(self) -> int:
        """N."""
        return int(self.samples.shape[1])

    @property
    def end(self) -> int:
        """Index just after the last sample."""
        return self.first + self.length


@dataclass(frozen=True, slots=True, eq=False)
class _Piece:
    """What is remembered of a hop whose samples are (in part) in the buffer. Arrays in band order."""

    first: int
    end: int
    bad: NDArray[np.bool_]
    peak: NDArray[np.float32]
    clipped: NDArray[np.int32]
    received_ns: int


def rows(channels: Sequence[int] | NDArray[np.intp]) -> slice | NDArray[np.intp]:
    """Index that picks these rows, a slice where they are evenly spaced: a view then, not a copy."""
    listed = np.asarray(channels, dtype=np.intp)
    step = int(listed[1] - listed[0]) if len(listed) > 1 else 1
    if step == 0 or not np.array_equal(listed, listed[0] + step * np.arange(len(listed))):
        return listed
    stop = int(listed[-1]) + (1 if step > 0 else -1)
    return slice(int(listed[0]), stop if stop >= 0 else None, step)


class Framer:
    """Frames of one band: map k of an unbroken stretch from sample s covers [s + k N/2, s + k N/2 + N).

    A frame never spans a gap, a new epoch or hops that were missed; framing begins anew at the first sample after
    it. Samples are written once into a buffer of some frames; frames are views of it.

    channels : the band's channel numbers, in band order.  frame_length : N, even, >= 2.  rate_hz : nominal rate.
    gaps : discontinuities seen within a run (a new epoch is none).
    unused_samples : sample instants that filled no frame, counted where framing began anew.
    """

    def __init__(self, channels: Sequence[int], frame_length: int, rate_hz: float) -> None:
        if frame_length < 2 or frame_length % 2:
            raise UsageError(f"frame_length is {frame_length!r}; it must be even and at least 2")
        self._rows = rows(channels)
        self._length = frame_length
        self._rate_hz = rate_hz
        self._buffer = np.empty((len(channels), 4 * frame_length), dtype=np.float32)
        self._pieces: deque[_Piece] = deque()
        self._starts: deque[tuple[int, int]] = deque()  # (first, t_ns) of frames begun and not complete
        self._begin, self._fill = 0, 0  # columns of the buffer that hold samples
        self._epoch: int | None = None
        self._origin = 0  # index of the first sample of the stretch
        self._end = 0  # index just after the newest sample
        self._due = 0  # first sample of the next frame to begin
        self._last: int | None = None  # first sample of the last complete frame of the epoch
        self._gap_end: int | None = None
        self.gaps = 0
        self.unused_samples = 0

    def push(self, hop: Hop, missed: int = 0, *, resumed: bool = False) -> list[Frame]:
        """Take one hop; return the frames that it completes, oldest first.

        missed : hops that this band did not get between the last one and this: a gap.
        resumed : this process, or the one before it, was started anew within the run: a gap, whatever was lost.
        The frames' samples hold until the next push. Hops of one epoch must not go back (UsageError).
        """
        if hop.epoch != self._epoch:
            new_run = self._epoch is not None
            self._start_epoch(hop)
            if (missed or resumed) and not new_run:
                self._mark_gap(hop.first)
        elif hop.first < self._end and not resumed:
            raise UsageError(f"hop begins at sample {hop.first}; the epoch is at {self._end} already")
        elif missed or resumed or hop.first != self._end:
            if hop.first < self._end:  # another ingest took the run up earlier than this band had come
                self._last = None
            self._start_stretch(hop.first)
            self._mark_gap(hop.first)
        self._append(hop)
        frames = []
        while self._starts and self._starts[0][0] + self._length <= self._end:
            frames.append(self._take(hop))
        return frames

    def finish(self) -> None:
        """The run is over: what filled no frame is counted; the next hop begins an epoch."""
        self._start_stretch(self._end)
        self._epoch = None

    def _start_epoch(self, hop: Hop) -> None:
        self._start_stretch(hop.first)
        self._epoch, self._last, self._gap_end = hop.epoch, None, None

    def _mark_gap(self, end: int) -> None:
        self._gap_end = end
        self.gaps += 1

    def _start_stretch(self, first: int) -> None:
        framed = self._origin
        if self._last is not None and self._last >= self._origin:
            framed = self._last + self._length
        if self._epoch is not None:
            self.unused_samples += self._end - framed
        self._origin = self._due = self._end = first
        self._begin = self._fill = 0
        self._pieces.clear()
        self._starts.clear()

    def _append(self, hop: Hop) -> None:
        room = self._buffer.shape[1]
        if self._fill + hop.length > room:
            kept = self._buffer[:, self._begin : self._fill].copy()
            if kept.shape[1] + hop.length > room:  # a hop longer than any before: at most a second, so this ends
                self._buffer = np.empty((len(kept), kept.shape[1] + hop.length), dtype=np.float32)
            self._buffer[:, : kept.shape[1]] = kept
            self._begin, self._fill = 0, kept.shape[1]
        into = self._buffer[:, self._fill : self._fill + hop.length]
        into[:] = hop.samples[self._rows]
        peak = np.maximum(into.max(axis=1, initial=0), -into.min(axis=1, initial=0))
        self._fill += hop.length
        self._pieces.append(
            _Piece(hop.first, hop.end, hop.bad[self._rows], peak, hop.clipped[self._rows], hop.received_ns)
        )
        self._end = hop.end
        while self._due < self._end:
            self._starts.append((self._due, hop.t_ns_at(self._due, self._rate_hz)))
            self._due += self._length // 2

    def _take(self, hop: Hop) -> Frame:
        first, t_ns = self._starts.popleft()
        end = first + self._length
        while self._pieces[0].end <= first:
            self._pieces.popleft()
        inside = [piece for piece in self._pieces if piece.first < end]
        peak = np.maximum.reduce([piece.peak for piece in inside])
        used = ~np.logical_or.reduce([piece.bad for piece in inside]) & (peak <= LOUDEST_UPA)
        clipped = sum(
            int(piece.clipped[used].sum()) * (min(piece.end, end) - max(piece.first, first)) / (piece.end - piece.first)
            for piece in inside
        )
        elapsed = None if self._last is None else first - self._last
        column = self._fill - (self._end - first)
        frame = Frame(
            epoch=hop.epoch, run=hop.run, first=first, t_ns=t_ns,
            samples=self._buffer[:, column : column + self._length],
            used=used, silent=not peak[used].any(), clipped=float(clipped), elapsed=elapsed,
            adjacent=elapsed == self._length // 2 and first > self._origin,
            since_gap=None if self._gap_end is None else first - self._gap_end,
            received_ns=inside[-1].received_ns,
        )  # fmt: skip
        self._last = first
        self._begin = column + self._length // 2
        return frame
