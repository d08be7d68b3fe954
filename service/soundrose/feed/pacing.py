"""core: when each block is due, so that a recording is played without drift."""

from dataclasses import dataclass
from math import inf

from soundrose.errors import UsageError

__all__ = ["Pace", "parse_speed"]


def parse_speed(text: str) -> float:
    """ "max" (infinity), or a number above 0: how many times faster than real time. UsageError otherwise."""
    if text == "max":
        return inf
    try:
        speed = float(text)
    except ValueError:
        speed = -1.0
    if not 0 < speed < inf:
        raise UsageError(f"speed: got {text!r}; give a number above 0, such as 1 or 2.5, or max")
    return speed


@dataclass(frozen=True, slots=True)
class Pace:
    """The one schedule of a run, from its beginning: what is late is sent at once and the rest stays where it was.

    rate_hz : of the samples.  speed : times real time, infinity for as fast as taken.  start_ns : t of sample 0.
    """

    rate_hz: float
    speed: float
    start_ns: int

    def due_s(self, end: int) -> float:
        """Seconds after the beginning at which the block whose samples end before index `end` may be sent.

        A live array could not send it earlier: its last sample must have been taken.
        """
        return end / self.rate_hz / self.speed

    def t_ns(self, index: int) -> int:
        """Feed time of sample `index`, which is that of the recording whatever the speed."""
        return self.start_ns + round(index * 1e9 / self.rate_hz)
