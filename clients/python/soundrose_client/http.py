"""process: the service's HTTP calls, with nothing but the standard library."""

import http.client
import json
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any
from urllib.parse import urlencode, urlsplit

import msgpack
import numpy as np
from numpy.typing import NDArray

from soundrose_client.errors import MessageError, ServiceError, Unreachable, UsageError
from soundrose_client.events import Event, event
from soundrose_client.messages import MapMessage, decode

__all__ = ["EventPages", "Service", "Spectrum"]

_ANSWER_MOST = 256 * 2**20
_PAGE = 1000


@dataclass(frozen=True, eq=False)
class Spectrum:
    """One beam of the newest map.

    level_db : (bins,) float64, dB re 1 µPa²/Hz.  frequency_hz : (bins,).  cone_deg : of the beam used.
    """

    level_db: NDArray[np.float64] = field(repr=False)
    frequency_hz: NDArray[np.float64] = field(repr=False)
    cone_deg: float
    header: Mapping[str, Any] = field(repr=False)


class Service:
    """Calls to one service. Each is a connection of its own; an instance may be shared between threads.

    address : such as "http://127.0.0.1:8080".  timeout_s : for each step of a call.

    Every call raises Unreachable if nothing answers and ServiceError for an answer that is an error.
    """

    def __init__(self, address: str = "http://127.0.0.1:8080", *, timeout_s: float = 10.0) -> None:
        parts = urlsplit(address)
        if parts.scheme not in ("http", "https") or not parts.hostname or parts.path not in ("", "/"):
            raise UsageError(f"address is {address!r}; give one such as http://127.0.0.1:8080")
        self._https, self._host, self._port = parts.scheme == "https", parts.hostname, parts.port
        self.address, self._timeout_s = address.rstrip("/"), timeout_s

    def status(self) -> dict[str, Any]:
        """The newest status message, `version` and `versions` added."""
        return self._json("/api/v1/status")

    def health(self) -> dict[str, Any]:
        """The newest health message."""
        return self._json("/api/v1/health")

    def array(self) -> dict[str, Any]:
        """Hydrophones, bands, beams and the limits of what the array can tell."""
        return self._json("/api/v1/array")

    def map(
        self, band: str | None = None, *, f_min: float | None = None, f_max: float | None = None,
        bins: int | None = None, beams: int | None = None, pick: str | None = None,
    ) -> MapMessage:  # fmt: skip
        """The newest map of a band (the first configured by default), reduced to at most `bins` x `beams`.

        Levels come as float32, unrounded.
        """
        query = {"band": band, "f_min": f_min, "f_max": f_max, "bins": bins, "beams": beams, "pick": pick}
        body = self._call("GET", "/api/v1/map", {"format": "msgpack", **query})
        try:
            header = msgpack.unpackb(body)
            levels = header.pop("level_db")
        except (ValueError, KeyError, AttributeError, TypeError) as error:
            raise MessageError("msgpack", f"the answer is no map: {error!r}") from None
        message = decode([f"map/{header.get('band', '')}".encode(), msgpack.packb(header), levels])
        if not isinstance(message, MapMessage):
            raise MessageError("key", f"kind is {message.kind!r}; it must be map")
        return message

    def spectrum(self, cone_deg: float, band: str | None = None) -> Spectrum:
        """The beam of the newest map that looks nearest to `cone_deg` in cosine."""
        found = self._json("/api/v1/spectrum", {"cone_deg": cone_deg, "band": band})
        try:
            levels = np.asarray(found.pop("level_db"), np.float64)
            frequency = np.asarray(found["f0_hz"] + found["df_hz"] * np.arange(len(levels)), np.float64)
            return Spectrum(levels, frequency, float(found["cone_deg"]), found)
        except (KeyError, TypeError, ValueError) as error:
            raise MessageError("key", f"the answer is no spectrum: {error!r}") from None

    def events(self, since: str | None = None, kinds: Iterable[str] | None = None) -> "EventPages":
        """Events after `since` (a cursor, or an RFC 3339 time; from the oldest if not given) to the newest there is."""
        return EventPages(self, since, None if kinds is None else ",".join(kinds))

    def note(self, by: str, text: str, *, key: str | None = None) -> Event:
        """Write an operator's note into the event log.

        key : chosen by the caller, 8 characters or more; asked again with the same key, it is written once.
        """
        headers = {} if key is None else {"Idempotency-Key": key}
        body = json.dumps({"by": by, "note": text}).encode()
        return event(_object(self._call("POST", "/api/v1/notes", {}, body, headers)))

    def page(self, since: str | None, kinds: str | None, limit: int) -> tuple[list[Event], str]:
        """One page of events and the cursor of the next."""
        found = self._json("/api/v1/events", {"since": since, "kinds": kinds, "limit": limit})
        if not isinstance(found.get("items"), list) or not isinstance(found.get("next"), str):
            raise MessageError("key", "a page of events must have `items` and `next`")
        return [event(item) for item in found["items"]], found["next"]

    def _json(self, path: str, query: Mapping[str, Any] | None = None) -> dict[str, Any]:
        return _object(self._call("GET", path, query or {}))

    def _call(
        self, method: str, path: str, query: Mapping[str, Any],
        body: bytes | None = None, headers: Mapping[str, str] | None = None,
    ) -> bytes:  # fmt: skip
        asked = urlencode({key: value for key, value in query.items() if value is not None})
        kind = http.client.HTTPSConnection if self._https else http.client.HTTPConnection
        connection = kind(self._host, self._port, timeout=self._timeout_s)
        sent = {"Accept": "application/json, application/msgpack, application/problem+json", **(headers or {})}
        if body is not None:
            sent["Content-Type"] = "application/json"
        try:
            connection.request(method, f"{path}?{asked}" if asked else path, body, sent)
            answer = connection.getresponse()
            data = answer.read(_ANSWER_MOST + 1)
        except (OSError, http.client.HTTPException) as error:
            raise Unreachable(f"{self.address} does not answer: {error!r}") from error
        finally:
            connection.close()
        if len(data) > _ANSWER_MOST:
            raise MessageError("bytes", f"the answer has over {_ANSWER_MOST} bytes")
        if answer.status >= 400:
            raise _service_error(answer.status, answer.reason, data)
        return data


class EventPages:
    """Iterator over events, read page by page; `cursor` is the place after the last one given."""

    def __init__(self, service: Service, since: str | None, kinds: str | None) -> None:
        self._service, self._kinds = service, kinds
        self.cursor = since
        self._page: Iterator[Event] = iter(())
        self._next = since
        self._last = False

    def __iter__(self) -> "EventPages":
        return self

    def __next__(self) -> Event:
        found = next(self._page, None)
        while found is None:
            self.cursor = self._next
            if self._last:
                self._last = False  # asked again later, it goes on with what has come since
                raise StopIteration
            items, self._next = self._service.page(self._next, self._kinds, _PAGE)
            self._page, self._last = iter(items), len(items) < _PAGE
            found = next(self._page, None)
        self.cursor = found.cursor
        return found


def _object(data: bytes) -> dict[str, Any]:
    try:
        found = json.loads(data)
    except (ValueError, RecursionError) as error:
        raise MessageError("json", f"the answer is no JSON: {error}") from None
    if not isinstance(found, dict):
        raise MessageError("json", f"the answer is {type(found).__name__}; it must be an object")
    return found


def _service_error(status: int, reason: str, data: bytes) -> ServiceError:
    try:
        problem = _object(data)
    except MessageError:
        problem = {}
    return ServiceError(status, str(problem.get("detail", reason)), problem)
