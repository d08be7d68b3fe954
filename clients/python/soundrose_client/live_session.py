"""codec: one subscription over the live socket across its connections: requests out, frames in as messages."""

import json
import struct
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from typing import Any

import msgpack
import numpy as np

from soundrose_client.errors import MessageError, ServiceError, UsageError
from soundrose_client.events import Event, event
from soundrose_client.messages import HEADER_BYTES, MapMessage, Message, decode
from soundrose_client.reader import Hole

__all__ = ["EVENTS", "RECONNECT", "LiveCounters", "LiveSession", "live_request", "read_map"]

RECONNECT = frozenset({1001, 1005, 1006, 1011, 1012, 1013})  #: closed so, a client comes back
EVENTS = "events"  #: topic of a Hole in the events


@dataclass(slots=True)
class LiveCounters:
    """What a live client saw since it was made.

    messages : read.  skipped : maps the service left out, as asked for by rate or because this client was slow.
    missed : maps lost between two connections, where it is known.  connections : made.
    """

    messages: int = 0
    skipped: int = 0
    missed: int = 0
    connections: int = 0
    malformed: dict[str, int] = field(default_factory=dict)


def live_request(topics: str | Iterable[str], **map_keys: Any) -> dict[str, Any]:
    """The request for `topics`; map_keys that are None are left out. UsageError without a topic."""
    listed = [topics] if isinstance(topics, str) else list(topics)
    if not listed:
        raise UsageError('topics is empty: name at least one, such as "map" or "alert"')
    asked = {key: list(v) if key == "bands" else v for key, v in map_keys.items() if v is not None}
    return {"subscribe": listed, **({"map": asked} if asked else {})}


class LiveSession:
    """Frames of one connection after the other in, messages out.

    on_hole : called for maps or events lost between two connections; `missed` None where the number is not known.
    """

    def __init__(
        self, request: dict[str, Any], since: str | None = None, on_hole: Callable[[Hole], None] | None = None
    ) -> None:
        self._request, self._on_hole = request, on_hole
        self.cursor = since  # place after the last event seen
        self.hello: dict[str, Any] = {}
        self.counters = LiveCounters()
        self._last: dict[str, tuple[str, int]] = {}  # band -> start and seq of its last map

    def first(self, frame: str | bytes) -> str:
        """Take the greeting of a new connection; the request to send. MessageError if it is no greeting."""
        hello = _object(frame)
        if hello.get("kind") != "hello" or hello.get("v") != 1:
            raise MessageError("version", f"the greeting is {str(hello)[:200]}; this client speaks version 1")
        self.hello = hello
        self.counters.connections += 1
        if self.cursor is None and isinstance(hello.get("cursor"), str):
            self.cursor = hello["cursor"]  # what is logged while the request is on its way is asked for, too
        return self.request_text()

    def request_text(self) -> str:
        """The request, with the place to go on from."""
        return json.dumps(self._request | ({} if self.cursor is None else {"since": self.cursor}))

    def push(self, frame: str | bytes) -> tuple[Message | Event | None, str | None]:
        """(message or None, a request to send or None).

        ServiceError if the service refuses the request. What cannot be read is counted and passed over.
        """
        try:
            return self._map(frame) if isinstance(frame, bytes) else self._text(frame)
        except MessageError as error:
            malformed = self.counters.malformed
            malformed[error.reason] = malformed.get(error.reason, 0) + 1
            return None, None

    def _text(self, frame: str) -> tuple[Message | Event | None, str | None]:
        found = _object(frame)
        kind = found.get("kind")
        if kind == "error":
            return None, self._refused(found)
        if not isinstance(kind, str):
            raise MessageError("key", f"kind is {kind!r}; it must be str")
        self.counters.messages += 1
        if "cursor" in found:
            logged = event(found)
            self.cursor = logged.cursor
            return logged, None
        return Message(kind, found), None

    def _refused(self, error: dict[str, Any]) -> str:
        status = error.get("status")
        if status in (410, 503) and self.cursor is not None:  # the place is gone: go on from here, and say so
            self.cursor = None
            if self._on_hole is not None:
                self._on_hole(Hole(EVENTS, None, "", 0))
            return self.request_text()
        raise ServiceError(int(status or 0), str(error.get("detail")), error)

    def _map(self, frame: bytes) -> tuple[Message | Event | None, str | None]:
        message = read_map(frame)
        last = self._last.get(message.band)
        if last == (message.start, message.seq):
            return None, None  # the newest map once more, after a new connection
        self._last[message.band] = message.start, message.seq
        self.counters.messages += 1
        self.counters.skipped += message.skipped
        missed: int | None = 0
        if last is not None:
            missed = max(message.seq - last[1] - 1 - message.skipped, 0) if last[0] == message.start else None
        if missed != 0:
            self.counters.missed += missed or 0
            if self._on_hole is not None:
                self._on_hole(Hole(message.topic, missed, message.start, message.seq))
        return replace(message, missed=missed), None


def read_map(frame: bytes) -> MapMessage:
    """A binary frame as a map; u1 levels are turned into float32. MessageError if it cannot be read."""
    if len(frame) < 4:
        raise MessageError("frames", f"a frame of {len(frame)} bytes; it must begin with its header's length")
    (length,) = struct.unpack_from("<I", frame)
    if length > min(HEADER_BYTES, len(frame) - 4):
        raise MessageError("bytes", f"the header is said to have {length} bytes; the frame has {len(frame)}")
    try:
        header = msgpack.unpackb(frame[4 : 4 + length])
        header.pop("pad", None)
        encoding, skipped, band = header["encoding"], header["skipped"], header["band"]
        data = frame[4 + length :]
        if encoding == "u1":
            coarse = np.frombuffer(data, np.uint8).astype(np.float32)
            data = (np.float32(header["floor_db"]) + np.float32(header["step_db"]) * coarse).astype("<f4").tobytes()
        elif encoding != "f4":
            raise MessageError("key", f"encoding is {encoding!r}; this client reads f4 and u1")
        parts = [f"map/{band}".encode("ascii"), msgpack.packb(header), data]
    except (ValueError, KeyError, TypeError, AttributeError, RecursionError, OverflowError) as error:
        if isinstance(error, MessageError):
            raise
        raise MessageError("msgpack", f"the header cannot be used: {error!r}") from None
    message = decode(parts)
    if not isinstance(message, MapMessage) or isinstance(skipped, bool) or not isinstance(skipped, int) or skipped < 0:
        raise MessageError("key", f"a binary frame of kind {message.kind!r}, skipped {skipped!r}; it must be a map")
    return replace(message, skipped=skipped)


def _object(frame: str | bytes) -> dict[str, Any]:
    try:
        found = json.loads(frame)
    except (ValueError, RecursionError) as error:
        raise MessageError("json", f"a text frame is no JSON: {error}") from None
    if not isinstance(found, dict):
        raise MessageError("json", f"a text frame is {type(found).__name__}; it must be an object")
    return found
