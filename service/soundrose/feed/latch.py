"""core: hysteresis: what is said of a hydrophone begins and ends only after seconds in a row that say so."""

import numpy as np
from numpy.typing import NDArray

__all__ = ["Latch", "Recent"]

Bools = NDArray[np.bool_]


class Latch:
    """One statement about each of many hydrophones.

    channels : how many.  enter, leave : seconds in a row that must say yes, or no, before it changes.
    """

    def __init__(self, channels: int, enter: int, leave: int) -> None:
        self._enter, self._leave = enter, leave
        self._for, self._against = np.zeros(channels, np.int64), np.zeros(channels, np.int64)
        self.on = np.zeros(channels, bool)

    def push(self, yes: Bools, no: Bools) -> Bools:
        """One second, (channels,) each; where neither is true nothing is learned, and what was said stands."""
        self._for = np.where(yes, self._for + 1, np.where(no, 0, self._for))
        self._against = np.where(no, self._against + 1, np.where(yes, 0, self._against))
        self.on = np.where(self.on, self._against < self._leave, self._for >= self._enter)
        return self.on

    def resume(self, on: Bools) -> None:
        """Go on with what was said before a restart."""
        self.on = on.copy()


class Recent:
    """How many of the last seconds had something. channels : how many.  seconds : looked back on."""

    def __init__(self, channels: int, seconds: int) -> None:
        self._marks = np.zeros((seconds, channels), bool)
        self._at = 0

    def push(self, marks: Bools) -> NDArray[np.int64]:
        """One second, (channels,); the count (channels,) with it."""
        self._marks[self._at] = marks
        self._at = (self._at + 1) % len(self._marks)
        return np.asarray(np.count_nonzero(self._marks, axis=0))
