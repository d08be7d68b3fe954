"""core: from frames to messages with their holes, whatever carried them; both subscribers stand on this.

A hole is of one of two kinds. Under one `start` the messages of a topic are numbered: a number left out is a message
missed, and how many is known. A new `start` means that the sending process began anew: an unknown number was missed.
"""

from collections import deque
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field, replace

from soundrose_client.errors import MessageError
from soundrose_client.messages import Message, decode

__all__ = ["NEWEST_KINDS", "Counters", "Hole", "Mailbox", "Reader"]

TOPICS = 4096  # topics followed at once; a service has tens, and a peer must not make our table grow
WAITING = 4096  # messages that wait in the mailbox
NEWEST_KINDS = frozenset({"map", "health", "levels", "status"})  #: a newer one replaces the older; all else are events


@dataclass(frozen=True, slots=True)
class Hole:
    """Messages of `topic` were lost before number `seq` under `start`. missed : how many; None = unknown."""

    topic: str
    missed: int | None
    start: str
    seq: int


@dataclass(slots=True)
class Counters:
    """What a subscriber saw since it was made.

    messages : read.  missed : sum of the holes of known size.  restarts : new `start` of a topic (unknown size).
    disordered : a number that came twice or late.  skipped : left out as newer ones had come.
    malformed : could not be read, by reason.
    """

    messages: int = 0
    missed: int = 0
    restarts: int = 0
    disordered: int = 0
    skipped: int = 0
    malformed: dict[str, int] = field(default_factory=dict)


class Reader:
    """Frames in, messages out. `push` gives None for what cannot be read: counted, never fatal."""

    def __init__(self, on_hole: Callable[[Hole], None] | None = None) -> None:
        self.counters = Counters()
        self._on_hole = on_hole
        self._expected: dict[str, tuple[str, int]] = {}  # topic -> (start, next seq), least recently heard first

    def push(self, parts: Sequence[bytes]) -> Message | None:
        """One multipart message; the value with `missed` filled in, or None."""
        try:
            message = decode(parts)
        except MessageError as error:
            malformed = self.counters.malformed
            malformed[error.reason] = malformed.get(error.reason, 0) + 1
            return None
        self.counters.messages += 1
        missed = self._follow(message)
        if missed == 0:
            return message
        if self._on_hole is not None:
            self._on_hole(Hole(message.topic, missed, message.start, message.seq))
        return replace(message, missed=missed)

    def _follow(self, message: Message) -> int | None:
        """Size of the hole before `message`, None if unknown; what is expected next is brought up to date."""
        known = self._expected.pop(message.topic, None)
        start, seq = message.start, message.seq
        following = seq + 1
        missed: int | None = 0
        if known is not None and known[0] != start:
            self.counters.restarts += 1
            missed = None
        elif known is not None and seq < known[1]:
            self.counters.disordered += 1
            following = known[1]
        elif known is not None:
            missed = seq - known[1]
            self.counters.missed += missed
        if len(self._expected) >= TOPICS:
            del self._expected[next(iter(self._expected))]
        self._expected[message.topic] = (start, following)
        return missed


class Mailbox:
    """Messages read but not yet taken. For `newest` kinds only the newest of a topic stays, in the older one's place.

    newest : kinds of which the newest replaces the older; `missed` and `skipped` of those left out go over to it.
    """

    def __init__(self, counters: Counters, newest: Iterable[str] = ()) -> None:
        self._counters = counters
        self._newest = frozenset(newest)
        self._order: deque[Message | str] = deque()  # a message, or the topic whose newest takes that place
        self._latest: dict[str, Message] = {}

    @property
    def full(self) -> bool:
        return len(self._order) >= WAITING

    def put(self, message: Message) -> None:
        if message.kind not in self._newest:
            self._order.append(message)
            return
        older = self._latest.get(message.topic)
        if older is None:
            self._order.append(message.topic)
        else:
            self._counters.skipped += 1
            message = replace(message, missed=_sum(older.missed, message.missed), skipped=older.skipped + 1)
        self._latest[message.topic] = message

    def take(self) -> Message | None:
        """The next message; None if there is none."""
        if not self._order:
            return None
        entry = self._order.popleft()
        return self._latest.pop(entry) if isinstance(entry, str) else entry


def _sum(older: int | None, newer: int | None) -> int | None:
    return None if older is None or newer is None else older + newer
