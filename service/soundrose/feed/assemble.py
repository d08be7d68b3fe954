"""core: hops from blocks of any length, and the hydrophones' health along the way.

A block is written straight into the hop it belongs to, piece by piece: a piece ends with the block, with the hop or
with a part of a second of `Health`, whichever comes first. So nothing that comes out depends on how the samples were
cut into blocks, but for what is said of a block as a whole: its time, and the hydrophones misread in it.
"""

from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from soundrose.feed.calibrate import Calibration, RawBlock
from soundrose.feed.health import Health
from soundrose.feed.hop import Hop
from soundrose.product.messages import HealthProduct

__all__ = ["Assembled", "HopAssembler"]

Assembled: TypeAlias = list[Hop | HealthProduct]


class HopAssembler:
    """Collects the samples of an unbroken stretch into hops of one length.

    Parameters
    ----------
    channels, length : size of a hop.
    rate_hz : nominal sampling rate.
    calibration, health : what every sample goes through.
    """

    def __init__(self, channels: int, length: int, rate_hz: float, calibration: Calibration, health: Health) -> None:
        self._channels, self._length, self._period_ns = channels, length, 1e9 / rate_hz
        self._calibration, self.health = calibration, health
        self._run, self._epoch = "", 0
        self._buffer: NDArray[np.float32] | None = None
        self._first = self._filled = self._judged = 0
        self._times: list[int] = []
        self._bad = np.zeros(channels, bool)
        self._misread: NDArray[np.bool_] | None = None  # of the block that is being written
        self._clipped, self._piece_clipped = np.zeros(channels, np.int32), np.zeros(channels, np.int32)
        self._last_t_ns = self._received_ns = 0

    def begin(self, run: str, epoch: int) -> None:
        """What comes now belongs to this run; the hop before must have been flushed."""
        self._run, self._epoch = run, epoch

    def push(self, block: RawBlock, first: int, t_ns: int, received_ns: int) -> Assembled:
        """Take a block whose first sample has the index `first` and the time `t_ns`; what is complete with it."""
        out: Assembled = []
        samples, position, health = block.values.shape[1], 0, self.health
        self._received_ns = received_ns
        if block.bad is not None:
            self._settle()
            self._misread = block.bad
        while position < samples:
            now_ns = t_ns + round(position * self._period_ns) if position else t_ns
            if health.is_apart(now_ns):
                self._settle()
                _append(out, health.move(now_ns))
            if not self._filled:
                self._open(first + position)
            if not self._filled or not position:
                self._times += (first, t_ns)
            room = health.room(now_ns)
            count = min(samples - position, self._length - self._filled, room)
            self._write(block, position, count)
            position += count
            self._last_t_ns = t_ns + round((position - 1) * self._period_ns)
            if self._filled == self._length:
                out.append(self._hand_over())
            if count == room:
                self._settle()
                _append(out, health.close())
        if block.bad is not None:
            self._settle()
            self._misread = None
        return out

    def flush(self) -> Hop | None:
        """The hop begun, shorter, because the stretch is over; None if there is none."""
        return self._hand_over() if self._filled else None

    def _open(self, first: int) -> None:
        if self._buffer is None:
            self._buffer = np.empty((self._channels, self._length), np.float32)
        self._first, self._judged = first, 0
        self._times.clear()
        self._bad = self.health.out.copy()
        self._clipped = np.zeros(self._channels, np.int32)

    def _write(self, block: RawBlock, position: int, count: int) -> None:
        assert self._buffer is not None
        filled = self._filled + count
        out = self._buffer[:, self._filled : filled]
        self._calibration.write(block, position, position + count, out, self._piece_clipped)
        self._filled = filled
        if block.bad is not None:
            self._bad |= block.bad

    def _settle(self) -> None:
        """Give `health` what was written since the last time."""
        if self._buffer is None or self._judged == self._filled:
            return
        piece = self._buffer[:, self._judged : self._filled]
        self.health.add(piece, self._piece_clipped, self._misread, self._last_t_ns)
        self._clipped += self._piece_clipped
        self._piece_clipped[:] = 0
        self._judged = self._filled

    def _hand_over(self) -> Hop:
        self._settle()
        assert self._buffer is not None
        if self._filled == self._length:
            samples, self._buffer = self._buffer, None
        else:
            samples = self._buffer[:, : self._filled].copy()
        samples.flags.writeable = False
        times = np.array(self._times, dtype=np.int64).reshape(-1, 2)
        hop = Hop(self._run, self._epoch, self._first, times, samples, self._bad, self._clipped, self._received_ns)
        self._filled = self._judged = 0
        return hop


def _append(out: Assembled, product: HealthProduct | None) -> None:
    if product is not None:
        out.append(product)
