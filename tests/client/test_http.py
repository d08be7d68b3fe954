"""HTTP calls against a server of the standard library that answers as the service does."""

import json
import pickle
import threading
from collections.abc import Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any
from urllib.parse import parse_qs, urlsplit

import msgpack
import numpy as np
import pytest

from soundrose_client import Event, MapMessage, MessageError, Service, ServiceError, Unreachable, UsageError

ITEMS = [{"cursor": f"{n}", "kind": "note" if n % 2 else "health", "t": n, "text": "x"} for n in range(1, 2501)]


class Answers(BaseHTTPRequestHandler):
    """Fixed answers; what was asked is kept in the server's `asked`."""

    def log_message(self, *_: Any) -> None:
        pass

    def do_GET(self) -> None:
        parts = urlsplit(self.path)
        query = {key: values[0] for key, values in parse_qs(parts.query).items()}
        self.server.asked.append((parts.path, query))  # type: ignore[attr-defined]
        found = self.server.answers.get(parts.path)  # type: ignore[attr-defined]
        if parts.path == "/api/v1/events":
            after, limit = int(query.get("since", 0)), int(query["limit"])
            kinds = query.get("kinds", "note,health").split(",")
            items = [item for item in ITEMS[after:] if item["kind"] in kinds][:limit]
            last = items[-1]["cursor"] if len(items) == limit else str(len(ITEMS))
            found = (200, json.dumps({"items": items, "next": last}).encode())
        self._send(*(found or (404, b'{"title":"Not Found","detail":"no such call","status":404}')))

    def do_POST(self) -> None:
        body = json.loads(self.rfile.read(int(self.headers["Content-Length"])))
        self.server.asked.append((self.path, body, self.headers["Content-Type"], self.headers["Idempotency-Key"]))  # type: ignore[attr-defined]
        self._send(201, json.dumps({"cursor": "7", "kind": "note", "t": 5, **body}).encode())

    def _send(self, status: int, body: bytes) -> None:
        self.send_response(status)
        self.send_header("Content-Length", str(len(body)))
        self.end_headers()
        self.wfile.write(body)


@pytest.fixture
def server() -> Iterator[ThreadingHTTPServer]:
    server = ThreadingHTTPServer(("127.0.0.1", 0), Answers)
    server.daemon_threads = False
    server.asked, server.answers = [], {}  # type: ignore[attr-defined]
    thread = threading.Thread(target=server.serve_forever, args=(0.01,))
    thread.start()
    yield server
    server.shutdown()
    server.server_close()
    thread.join()


@pytest.fixture
def service(server: ThreadingHTTPServer) -> Service:
    return Service(f"http://127.0.0.1:{server.server_port}")


def test_states_are_the_objects_as_they_come(server, service):
    for name in ("status", "health", "array"):
        server.answers[f"/api/v1/{name}"] = (200, json.dumps({"kind": name}).encode())
        assert getattr(service, name)() == {"kind": name}


def test_map_is_asked_for_as_msgpack_and_read_without_loss(server, service, make_map):
    _, header, data = make_map(3)
    body = msgpack.packb({**msgpack.unpackb(header), "level_db": data})
    server.answers["/api/v1/map"] = (200, body)
    message = service.map("main", bins=4, f_min=60.5, pick="max")
    assert isinstance(message, MapMessage)
    assert (message.topic, message.seq) == ("map/main", 3)
    assert np.array_equal(message.level_db, np.frombuffer(data, "<f4").reshape(3, 4))
    assert server.asked == [
        ("/api/v1/map", {"format": "msgpack", "band": "main", "bins": "4", "f_min": "60.5", "pick": "max"})
    ]


def test_spectrum_has_its_frequencies(server, service):
    found = {"cone_deg": 89.5, "f0_hz": 50.0, "df_hz": 2.5, "level_db": [1.0, 2.0, 3.0]}
    server.answers["/api/v1/spectrum"] = (200, json.dumps(found).encode())
    spectrum = service.spectrum(90)
    assert (spectrum.cone_deg, spectrum.frequency_hz.tolist()) == (89.5, [50.0, 52.5, 55.0])
    assert spectrum.level_db.tolist() == [1.0, 2.0, 3.0]


def test_events_are_read_page_by_page_to_the_end_and_on_from_there(server, service):
    pages = service.events()
    events = list(pages)
    assert [event.cursor for event in events] == [item["cursor"] for item in ITEMS]
    assert isinstance(events[0], Event)
    assert pages.cursor == "2500"
    assert [query["limit"] for _, query in server.asked] == ["1000"] * 3
    ITEMS.append({"cursor": "2501", "kind": "note", "t": 2501})
    try:
        assert [event.cursor for event in pages] == ["2501"]
    finally:
        ITEMS.pop()


def test_events_of_some_kinds_after_a_place_know_the_place_reached(service):
    pages = service.events(since="2490", kinds=["health"])
    assert [next(pages).cursor, pages.cursor] == ["2492", "2492"]
    assert [event.cursor for event in pages] == ["2494", "2496", "2498", "2500"]


def test_note_is_sent_as_json_with_its_key(server, service):
    written = service.note("second officer", "tail buoy", key="abcdefgh")
    assert (written.cursor, written.kind, written.header["note"]) == ("7", "note", "tail buoy")
    body = {"by": "second officer", "note": "tail buoy"}
    assert server.asked == [("/api/v1/notes", body, "application/json", "abcdefgh")]


def test_error_of_the_service_keeps_its_words(server, service):
    problem = {"title": "Unprocessable", "status": 422, "detail": "bins is 0", "errors": [1]}
    server.answers["/api/v1/status"] = (422, json.dumps(problem).encode())
    with pytest.raises(ServiceError, match="422: bins is 0") as error:
        service.status()
    assert error.value.problem["errors"] == [1]
    again = pickle.loads(pickle.dumps(error.value))
    assert (again.status, again.detail, again.problem) == (422, "bins is 0", problem)
    server.answers["/api/v1/status"] = (502, b"<html>")
    with pytest.raises(ServiceError, match="502: Bad Gateway"):
        service.status()


@pytest.mark.parametrize("body", [b"", b"[1]", b"{", b"[" * 100_000, b"\xff"])
def test_answer_that_is_no_object_is_told(server, service, body):
    server.answers["/api/v1/status"] = (200, body)
    with pytest.raises(MessageError):
        service.status()


@pytest.mark.parametrize("body", [b"", b"\xc1", msgpack.packb([1]), msgpack.packb({"level_db": b""})])
def test_answer_that_is_no_map_is_told(server, service, body):
    server.answers["/api/v1/map"] = (200, body)
    with pytest.raises(MessageError):
        service.map()


def test_answer_that_is_no_spectrum_or_page_is_told(server, service):
    server.answers["/api/v1/spectrum"] = (200, b'{"level_db": ["x"]}')
    with pytest.raises(MessageError, match="spectrum"):
        service.spectrum(90)
    server.answers["/api/v1/array"] = (200, b"{}")
    assert service.array() == {}


def test_nobody_there_is_unreachable():
    with pytest.raises(Unreachable, match="does not answer"):
        Service("http://127.0.0.1:9").status()


@pytest.mark.parametrize("address", ["", "127.0.0.1:8080", "ftp://x", "http://", "http://x/api"])
def test_address_that_is_none_is_refused(address):
    with pytest.raises(UsageError, match="address"):
        Service(address)
