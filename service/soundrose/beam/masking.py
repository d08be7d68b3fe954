"""core: how much of a frame lies under own active sources."""

from soundrose.feed.hop import Pulse

__all__ = ["PulseShadow"]


class PulseShadow:
    """Pulses told so far that may still lie on a frame; at most `limit`, the oldest gives way."""

    def __init__(self, limit: int = 256) -> None:
        self._limit = limit
        self._pulses: list[tuple[int, int]] = []  # (from, until) ns, by start

    def add(self, pulse: Pulse) -> None:
        """An own source fires; a pulse of no length changes nothing."""
        length = round(pulse.length_s * 1e9)
        if length > 0:
            self._pulses.append((pulse.t_ns, pulse.t_ns + length))
            self._pulses.sort()
            del self._pulses[: -self._limit]

    def share(self, t_ns: int, length_ns: int) -> float:
        """Share 0..1 of [t, t + length) under pulses (time under two counts once). Those over by t are forgotten."""
        self._pulses = [pulse for pulse in self._pulses if pulse[1] > t_ns]
        covered, reached = 0, t_ns
        for begin, end in self._pulses:
            begin, end = max(begin, reached), min(end, t_ns + length_ns)
            if end > begin:
                covered, reached = covered + end - begin, end
        return covered / length_ns
