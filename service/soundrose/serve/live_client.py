"""core: one live client: what it asked for, what waits for it, what it has been sent."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from soundrose.errors import UsageError
from soundrose.serve.latest import Message
from soundrose.serve.live_request import LiveRequest, Reduction
from soundrose.serve.mailbox import Mailbox, Pace

__all__ = ["BAD_MOST", "BandMap", "Closing", "LiveClient", "MapCounter", "Text", "error_body"]

BAD_MOST = 10  #: bad requests of one client; with this one it is closed


@dataclass(frozen=True, slots=True)
class Closing:
    """In the mailbox: close here. code : of RFC 6455."""

    code: int
    reason: str


@dataclass(frozen=True, slots=True)
class BandMap:
    """A map and its place among the maps of its band, holes counted."""

    message: Message
    place: int


@dataclass(frozen=True, slots=True)
class Text:
    """A text frame, shared by all who get it."""

    text: str


Entry = BandMap | Text | Closing
Framer = Callable[[BandMap, Reduction, int], bytes]


class MapCounter:
    """Gives the maps of one band their places: `seq` tells how many never came, until its sender began anew."""

    def __init__(self) -> None:
        self._place = 0
        self._last: tuple[str, int] | None = None

    def count(self, message: Message) -> BandMap:
        start, seq = message.header["start"], message.header["seq"]
        step = 1
        if self._last is not None and self._last[0] == start:
            step = max(seq - self._last[1], 1)
        self._last = (start, seq)
        self._place += step
        return BandMap(message, self._place)


class _BandView:
    def __init__(self, rate_hz: float | None) -> None:
        self.pace = Pace(rate_hz)
        self.sent: int | None = None  # place of the last map sent

    def skipped(self, place: int) -> int:
        return 0 if self.sent is None else max(place - self.sent - 1, 0)


class LiveClient:
    """Everything about one client but its connection.

    wake : called when there is something to send.
    """

    def __init__(self, wake: Callable[[], None]) -> None:
        self.request = LiveRequest(frozenset())
        self.behind = False  # an event found no room: it must be closed
        self.follows = True  # new events reach it as they come; False while it catches up
        self.bad = 0
        self._wake = wake
        self._views: dict[str, _BandView] = {}
        self._mailbox: Mailbox[Entry] = Mailbox()

    @property
    def waiting(self) -> int:
        """Events and answers that wait to be sent."""
        return self._mailbox.waiting

    def apply(self, request: LiveRequest) -> None:
        """Follow `request` in place of the last one; what waits and is not asked for any more is forgotten."""
        self.request = request
        old, self._views = self._views, {}
        for band in request.bands:
            view = self._views[band] = _BandView(request.rate_hz)
            if band in old:
                view.sent = old[band].sent
        wanted = {"answer", *request.topics, *(f"map/{band}" for band in request.bands)}
        if request.since is None:  # else what waits comes again, in its order
            wanted.update(f"event/{kind}" for kind in request.kinds)
        self._mailbox.keep(lambda key: key in wanted)

    def answer(self, text: str) -> None:
        """Queue a text that belongs to the connection itself: the greeting, an error."""
        self._event("answer", Text(text))

    def refuse(self, text: str) -> bool:
        """Answer a bad request; False if that was the last one allowed, and the client is closed after it."""
        self.answer(text)
        self.bad += 1
        if self.bad < BAD_MOST:
            return True
        self._event("answer", Closing(1008, f"{BAD_MOST} bad requests"))
        return False

    def offer_event(self, kind: str, text: str) -> None:
        if kind in self.request.topics:
            self._event(f"event/{kind}", Text(text))

    def offer_state(self, topic: str, text: str, key: str = "") -> None:
        """A text of which only the newest of the same key (the topic, if not given) is worth sending."""
        if topic in self.request.topics:
            self._mailbox.put_newest(key or topic, Text(text))
            self._wake()

    def offer_map(self, band: str, found: BandMap, *, at_once: bool = False) -> None:
        """at_once : whatever the rate asked for; it counts all the same."""
        view = self._views.get(band)
        if view is not None and (view.pace.passes(found.message.heard_s) or at_once):
            self._mailbox.put_newest(f"map/{band}", found)
            self._wake()

    def take(self, framer: Framer) -> str | bytes | Closing | None:
        """The next frame to send, a Closing, or None. Raises UsageError if a map cannot be reduced as asked for."""
        entry = self._mailbox.take()
        if isinstance(entry, BandMap):
            return self._frame(entry, framer)
        return entry.text if isinstance(entry, Text) else entry

    def _frame(self, found: BandMap, framer: Framer) -> bytes:
        band = found.message.header["band"]
        view = self._views[band]
        try:
            frame = framer(found, self.request.reduction, view.skipped(found.place))
        except UsageError:
            del self._views[band]
            raise
        view.sent = found.place
        return frame

    def _event(self, kind: str, entry: Entry) -> None:
        self.behind = not self._mailbox.put_event(kind, entry) or self.behind
        self._wake()


def error_body(status: int, title: str, detail: str) -> Mapping[str, Any]:
    return {"kind": "error", "status": status, "title": title, "detail": detail}
