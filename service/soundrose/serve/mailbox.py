"""core: what waits to be sent to one client: every event in order, and of all else only the newest."""

from collections import deque
from collections.abc import Callable
from typing import Generic, TypeVar

__all__ = ["EVENTS_MOST", "Mailbox", "Pace"]

EVENTS_MOST = 4096  #: four of the largest batches the event log hands on; a client this far behind does not keep up

T = TypeVar("T")


class Mailbox(Generic[T]):
    """Bounded by construction: `events_most` events and one entry for each key of `put_newest`.

    Events and the rest take turns, so that neither a long catch-up nor a fast map holds up the other.
    """

    def __init__(self, events_most: int = EVENTS_MOST) -> None:
        self._most = events_most
        self._events: deque[tuple[str, T]] = deque()
        self._newest: dict[str, T] = {}  # insertion order: the key that has waited longest is first
        self._event_turn = True

    @property
    def waiting(self) -> int:
        """Events that wait."""
        return len(self._events)

    def __len__(self) -> int:
        return len(self._events) + len(self._newest)

    def put_event(self, kind: str, value: T) -> bool:
        """Queue an event; False, and nothing is queued, if there is no room: the client must be told."""
        if len(self._events) >= self._most:
            return False
        self._events.append((kind, value))
        return True

    def put_newest(self, key: str, value: T) -> None:
        """Put a value in the place of the older one of the same key, if that still waits."""
        self._newest[key] = value

    def take(self) -> T | None:
        """What is sent next, or None."""
        event = bool(self._events) and (self._event_turn or not self._newest)
        self._event_turn = not event
        if event:
            return self._events.popleft()[1]
        if self._newest:
            return self._newest.pop(next(iter(self._newest)))
        return None

    def keep(self, wanted: Callable[[str], bool]) -> None:
        """Forget what waits under a kind or key that is not wanted any more."""
        self._events = deque(entry for entry in self._events if wanted(entry[0]))
        self._newest = {key: value for key, value in self._newest.items() if wanted(key)}


class Pace:
    """At most `rate_hz` a second on average, whatever the rate of what comes; None lets everything through.

    The share not used carries over, one entry at most: of 8 a second with a pace of 5, five pass and not four.
    """

    def __init__(self, rate_hz: float | None) -> None:
        self._rate_hz = rate_hz
        self._credit = 1.0
        self._last_s: float | None = None

    def passes(self, now_s: float) -> bool:
        """Whether one that comes now passes. now_s : any clock that does not go back, seconds."""
        if self._rate_hz is None:
            return True
        if self._last_s is not None:
            self._credit = min(self._credit + max(now_s - self._last_s, 0.0) * self._rate_hz, 2.0)
        self._last_s = now_s
        if self._credit < 1.0 - 1e-9:
            return False
        self._credit -= 1.0
        return True
