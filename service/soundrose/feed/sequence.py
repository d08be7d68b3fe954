"""core: which blocks of samples are taken: runs, indices and times, as tables.

A run is one uninterrupted count of samples, and the index of a block's first sample alone decides on gaps. A source
can stop, start again, send twice, or send nonsense under a valid header; no single block may throw the count off for
good. So a block that does not fit changes nothing: it is dropped, and kept in mind as the candidate. Only when the
next block follows the candidate without a seam has the run restarted, from that second block on.

Who sent it (`_WHO`). `later`: its `t` is after that of the last accepted block.

    state    the block's run                          later       not later
    running  the current one                          by index    by index
    running  the one that another run has ended       old_run     old_run
    running  the one last ended by `end`              begins      old_run
    running  any other                                begins      begins       (and ends the current one)
    waiting  the one last ended by `end`              begins      time, candidate
    waiting  the one that another run has ended       begins      old_run
    waiting  any other                                begins      begins

A waiting source whose run was ended by another, longer ago, may come back; what is still on its way may not.

Within the current run, by the index (n samples from `first`, `next` expected), the first line that fits:

    first == next                                     goes on
    it follows the candidate without a seam, in time  restart: taken whole, a new epoch
    next < first <= next + 60 s                       gap, taken
    first > next + 60 s                               jump, candidate
    first < next < first + n                          overlap: the first next - first samples are trimmed
    first + n <= next                                 repeat, candidate

In time means: later, or for a candidate dropped as `time`, whenever. What would go on, after a gap or trimmed too, is
then judged by its time: if `t` of the first sample kept is before that of the last accepted block, it is dropped as
`time`, becomes the candidate, and counts neither gap nor trimming. Taking a block clears the candidate; dropping one
as jump, repeat or time replaces it; dropping one as old_run leaves it.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field
from hashlib import sha256
from typing import Final, Literal, NamedTuple

from soundrose.feed.framing import unused_samples
from soundrose.feed.wire import REASONS, TIME_LIMIT

__all__ = ["CLOCK_STEP_NS", "JUMP_S", "Candidate", "Counters", "RunState", "Runs", "Verdict"]

JUMP_S: Final = 60.0  #: a longer way forward is not believed at once
CLOCK_STEP_NS: Final = 10_000_000  #: a larger difference between clock and count is a clock jump
NAME_LIMIT: Final = 1024  #: longer names of runs are kept as digests, so that the state stays small

_Who = Literal["current", "replaced", "ended", "other"]
_Action = Literal["index", "begin", "old_run", "time"]

#: (running, whose block, later) -> what to do
_WHO: Final[dict[tuple[bool, _Who, bool], _Action]] = {
    (True, "current", True): "index", (True, "current", False): "index",
    (True, "replaced", True): "old_run", (True, "replaced", False): "old_run",
    (True, "ended", True): "begin", (True, "ended", False): "old_run",
    (True, "other", True): "begin", (True, "other", False): "begin",
    (False, "ended", True): "begin", (False, "ended", False): "time",
    (False, "replaced", True): "begin", (False, "replaced", False): "old_run",
    (False, "other", True): "begin", (False, "other", False): "begin",
}  # fmt: skip


@dataclass(slots=True)
class Counters:
    """What came, since the service started; every reason is always there. samples : instants, not times channels."""

    blocks: int = 0
    samples: int = 0
    gaps: int = 0
    lost_samples: int = 0
    trimmed_samples: int = 0
    unused_samples: int = 0
    restarts: int = 0
    clock_jumps: int = 0
    late: int = 0
    dropped: dict[str, int] = field(default_factory=lambda: dict.fromkeys(REASONS, 0))

    @property
    def dropped_total(self) -> int:
        """Messages dropped for whatever reason."""
        return sum(self.dropped.values())


class Candidate(NamedTuple):
    """A dropped block that the next one may follow. end : index just after it; whenever : its follower's t is free."""

    end: int
    whenever: bool


@dataclass(slots=True)
class RunState:
    """run : the current run's name (digest of a long one), or the last one's while waiting.  epoch : -1 before the
    first run.  next : expected index.  first, t_ns : of the first sample kept of the last accepted block.  stretch :
    first index of the unbroken stretch.  ended, replaced : runs last ended by `end` and by another run."""

    running: bool = False
    run: str | None = None
    epoch: int = -1
    next: int = 0
    first: int = 0
    t_ns: int = -1
    stretch: int = 0
    ended: str | None = None
    replaced: str | None = None
    candidate: Candidate | None = None


class Verdict(NamedTuple):
    """reason : why the block is dropped, None: it is taken.  skip : samples of it to leave out.  breaks : a new
    stretch begins with it.  ended : epoch that is over with it, before any sample of it."""

    reason: str | None = None
    skip: int = 0
    breaks: bool = False
    ended: int | None = None
    detail: str = ""


GOES_ON: Final = Verdict()


class Runs:
    """Judges blocks one after the other, and counts.

    Parameters
    ----------
    rate_hz : nominal sampling rate.
    frames : frame lengths of all bands, which say what is unused.
    counters : where to count.
    state : where to go on; changed in place.
    """

    def __init__(self, rate_hz: float, frames: Sequence[int], counters: Counters, state: RunState) -> None:
        self._rate_hz, self._period_ns = rate_hz, 1e9 / rate_hz
        self._frames, self.counters, self.state = tuple(frames), counters, state

    @property
    def newest_t_ns(self) -> int:
        """Time of the newest sample taken, -1 before the first."""
        state = self.state
        return state.t_ns + round(max(state.next - 1 - state.first, 0) * self._period_ns)

    def block(self, run: str, first: int, samples: int, t_ns: int) -> Verdict:
        """Judge one valid block of `samples` instants; if it is taken, `state` stands after it."""
        state, name = self.state, _short(run)
        if first == state.next and name == state.run and state.running:
            return self._in_time(first, samples, t_ns)
        who: _Who = "other"
        if name == state.run and state.running:
            who = "current"
        elif name == state.ended:
            who = "ended"
        elif name == state.replaced:
            who = "replaced"
        later = t_ns > state.t_ns
        action = _WHO[state.running, who, later]
        if action == "index":
            return self._by_index(first, samples, t_ns, later)
        if action == "begin":
            return self._begin(name, first, samples, t_ns)
        if action == "old_run":
            return Verdict("old_run", detail=f"run {name!r} is over")
        if self._follows(first, later):
            self.counters.restarts += 1
            return self._begin(name, first, samples, t_ns)
        detail = f"run {name!r} was ended; to begin anew its t must be after {state.t_ns}, got {t_ns}"
        return self._drop("time", first + samples, detail)

    def end(self, run: str) -> Verdict:
        """Judge an `end`; if it is taken, the source is waited for."""
        state, name = self.state, _short(run)
        if not state.running or name != state.run:
            return Verdict("old_run", detail=f"end names {name!r}, which is not the current run")
        self._end_stretch()
        state.running, state.ended, state.candidate = False, name, None
        return Verdict(breaks=True, ended=state.epoch)

    def _by_index(self, first: int, samples: int, t_ns: int, later: bool) -> Verdict:
        state = self.state
        if self._follows(first, later):
            self.counters.restarts += 1
            return self._begin(state.run, first, samples, t_ns)
        if first > state.next:
            if first - state.next > JUMP_S * self._rate_hz:
                return self._drop("jump", first + samples, f"first is {first}; expected {state.next}")
            return self._in_time(first, samples, t_ns)
        if first + samples <= state.next:
            return self._drop("repeat", first + samples, f"first is {first}; expected {state.next}")
        return self._in_time(first, samples, t_ns)

    def _follows(self, first: int, later: bool) -> bool:
        candidate = self.state.candidate
        return candidate is not None and candidate.end == first and (candidate.whenever or later)

    def _in_time(self, first: int, samples: int, t_ns: int) -> Verdict:
        """Take a block of the current run, from the expected index on or after a gap, unless time goes back."""
        state, counters = self.state, self.counters
        skip = max(state.next - first, 0)
        kept_first, kept_t = first + skip, t_ns
        if skip:
            kept_t = min(t_ns + round(skip * self._period_ns), TIME_LIMIT - 1)
        if kept_t < state.t_ns:
            detail = f"t of the first sample kept is {kept_t}; the last accepted block began at {state.t_ns}"
            return self._drop("time", first + samples, detail)
        counted_t = state.t_ns + round((kept_first - state.first) * self._period_ns)
        if not -CLOCK_STEP_NS <= kept_t - counted_t <= CLOCK_STEP_NS:
            counters.clock_jumps += 1
        verdict = GOES_ON
        if kept_first > state.next:
            counters.gaps += 1
            counters.lost_samples += kept_first - state.next
            self._end_stretch()
            state.stretch = kept_first
            verdict = Verdict(breaks=True)
        elif skip:
            counters.trimmed_samples += skip
            verdict = Verdict(skip=skip)
        self._take(kept_first, first + samples, kept_t)
        return verdict

    def _begin(self, name: str | None, first: int, samples: int, t_ns: int) -> Verdict:
        """A new run, or the same one anew, from this block on."""
        state, ended = self.state, None
        if state.running:
            self._end_stretch()
            ended = state.epoch
        if name != state.run:
            state.replaced = state.run if state.running else None
        if name == state.ended:
            state.ended = None
        state.running, state.run, state.stretch = True, name, first
        state.epoch += 1
        self._take(first, first + samples, t_ns)
        return Verdict(breaks=True, ended=ended)

    def _take(self, first: int, end: int, t_ns: int) -> None:
        state, counters = self.state, self.counters
        state.first, state.next, state.t_ns, state.candidate = first, end, t_ns, None
        counters.blocks += 1
        counters.samples += end - first

    def _drop(self, reason: str, end: int, detail: str) -> Verdict:
        self.state.candidate = Candidate(end, whenever=reason == "time")
        return Verdict(reason, detail=detail)

    def _end_stretch(self) -> None:
        self.counters.unused_samples += unused_samples(self.state.next - self.state.stretch, self._frames)


def _short(name: str) -> str:
    """The name itself, or of a long one its digest, which no name can be by chance."""
    return name if len(name) <= NAME_LIMIT else "sha256 " + sha256(name.encode()).hexdigest()
