"""What a client may send, as bytes on a socket: a table of requests and answers, and clients that misbehave."""

import json
import re
import socket
import struct
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest
from web_rig import Served, serving, until

from soundrose.serve import http11
from soundrose.serve.guard import host_names
from soundrose.serve.limits import Allowance, Buckets

HOST = b"Host: 127.0.0.1:%PORT"
JSON = b"Content-Type: application/json"
UPGRADE = (
    b"Connection: Upgrade\r\nUpgrade: websocket\r\nSec-WebSocket-Version: 13\r\n"
    b"Sec-WebSocket-Key: AAAAAAAAAAAAAAAAAAAAAA=="
)


def request(start: bytes, *headers: bytes, body: bytes = b"") -> bytes:
    """Request line, headers as they are, body; HTTP/1.1 unless it says otherwise."""
    line = start if b" HTTP" in start else start + b" HTTP/1.1"
    return b"\r\n".join([line, *headers, b"Connection: close", b"", body])


def get(*headers: bytes) -> bytes:
    return request(b"GET /livez", *headers)


def post(*headers: bytes, body: bytes = b"{}", path: bytes = b"/livez") -> bytes:
    return request(b"POST " + path, HOST, *headers, b"Content-Length: %d" % len(body), body=body)


#: name -> (bytes, status)
TABLE: dict[str, tuple[bytes, int]] = {
    # Host: the names of the address it is bound to, with the port
    "own address": (get(HOST), 200),
    "localhost": (get(b"Host: localhost:%PORT"), 200),
    "localhost in capitals": (get(b"HOST: LocalHost:%PORT"), 200),
    "loopback v6": (get(b"Host: [::1]:%PORT"), 200),
    "no host": (get(), 400),
    "no host in HTTP/1.0": (request(b"GET /livez HTTP/1.0"), 403),
    "empty host": (get(b"Host:"), 403),
    "two hosts": (get(HOST, HOST), 400),
    "host of elsewhere": (get(b"Host: somewhere.example"), 403),
    "host of elsewhere with our port": (get(b"Host: somewhere.example:%PORT"), 403),
    "host without port": (get(b"Host: 127.0.0.1"), 403),
    "host with another port": (get(b"Host: 127.0.0.1:1"), 403),
    "host that begins as ours": (get(b"Host: 127.0.0.1:%PORT.somewhere.example"), 403),
    "host with a user": (get(b"Host: me@127.0.0.1:%PORT"), 403),
    "host with another loopback address": (get(b"Host: 127.0.0.2:%PORT"), 403),
    "host as a number": (get(b"Host: 2130706433:%PORT"), 403),
    "host with a dot behind": (get(b"Host: localhost.:%PORT"), 403),
    "host in bytes that are no text": (get(b"Host: \xff\xfe"), 403),
    # Origin: the same origin, if there is any
    "same origin": (get(HOST, b"Origin: http://127.0.0.1:%PORT"), 200),
    "same origin behind TLS": (get(HOST, b"Origin: https://127.0.0.1:%PORT"), 200),
    "origin of elsewhere": (get(HOST, b"Origin: http://somewhere.example"), 403),
    "origin null": (get(HOST, b"Origin: null"), 403),
    "origin empty": (get(HOST, b"Origin:"), 403),
    "origin with another port": (get(HOST, b"Origin: http://127.0.0.1:1"), 403),
    "origin by our other name": (get(HOST, b"Origin: http://localhost:%PORT"), 403),
    "origin of another scheme": (get(HOST, b"Origin: ftp://127.0.0.1:%PORT"), 403),
    "two origins, one of them ours": (
        get(HOST, b"Origin: http://127.0.0.1:%PORT", b"Origin: http://somewhere.example"), 403),
    "two origins in one": (get(HOST, b"Origin: http://127.0.0.1:%PORT http://somewhere.example"), 403),
    "origin of elsewhere on HEAD": (request(b"HEAD /livez", HOST, b"Origin: http://somewhere.example"), 403),
    "preflight of elsewhere": (
        request(b"OPTIONS /livez", HOST, b"Origin: http://x.example", b"Access-Control-Request-Method: POST"), 403),
    "delete from elsewhere": (request(b"DELETE /livez", HOST, b"Origin: http://somewhere.example"), 403),
    # content type of POST
    "post without type": (post(), 403),
    "post as text": (post(b"Content-Type: text/plain"), 403),
    "post as a form": (post(b"Content-Type: application/x-www-form-urlencoded"), 403),
    "post as parts": (post(b"Content-Type: multipart/form-data; boundary=x"), 403),
    "post as two types": (post(JSON, b"Content-Type: text/plain"), 403),
    "post as nearly json": (post(b"Content-Type: application/jsonx"), 403),
    "post of json where there is none": (post(JSON), 405),
    "post of json with a charset": (post(b"Content-Type: Application/JSON; charset=utf-8"), 405),
    "post of json to nowhere": (post(JSON, path=b"/nothing"), 404),
    # size
    "body declared too large": (request(b"POST /livez", HOST, JSON, b"Content-Length: 65537"), 413),
    "body declared absurdly large": (request(b"POST /livez", HOST, JSON, b"Content-Length: 999999999999999"), 413),
    "body as large as allowed": (post(JSON, body=b" " * 65536), 405),
    "body in pieces too large": (
        request(b"POST /livez", HOST, JSON, b"Transfer-Encoding: chunked", body=b"10000\r\n" + b"x" * 65536 +
                b"\r\n10000\r\n" + b"x" * 65536 + b"\r\n0\r\n\r\n"), 413),
    "get with a small body": (request(b"GET /livez", HOST, b"Content-Length: 4", body=b"body"), 200),
    "get with a large body": (request(b"GET /livez", HOST, b"Content-Length: 100000", body=b"x" * 1000), 413),
    "get of data with a large body": (request(b"GET /api/v1/map", HOST, b"Content-Length: 100000"), 413),
    "long path": (request(b"GET /" + b"a" * 8000, HOST), 404),
    "endless path": (request(b"GET /" + b"a" * 20000, HOST), 431),
    "endless header": (get(HOST, b"X-Long: " + b"a" * 20000), 431),
    "many headers": (get(HOST, *[b"X-%d: 1" % i for i in range(3000)]), 431),
    "long query": (request(b"GET /api/v1/map?bins=" + b"9" * 7000, HOST), 422),
    # malformed
    "negative length": (request(b"POST /livez", HOST, JSON, b"Content-Length: -1"), 400),
    "length that is no number": (request(b"POST /livez", HOST, JSON, b"Content-Length: ten"), 400),
    "two lengths": (request(b"POST /livez", HOST, JSON, b"Content-Length: 1", b"Content-Length: 2", body=b"xx"), 400),
    "unknown transfer coding": (request(b"POST /livez", HOST, JSON, b"Transfer-Encoding: gzip"), 501),
    "chunk without a size": (request(b"POST /livez", HOST, JSON, b"Transfer-Encoding: chunked", body=b"zz\r\n"), 400),
    "header without a name": (get(HOST, b": x"), 400),
    "header with a space in its name": (get(HOST, b"X Y: x"), 400),
    "header folded over lines": (get(HOST, b"X-A: 1\r\n 2"), 200),
    "header with a zero byte": (get(HOST, b"X-A: \x00"), 400),
    "no method": (request(b" /livez", HOST), 400),
    "unknown method": (request(b"BREW /livez", HOST), 405),
    "method in small letters": (request(b"get /livez", HOST), 405),
    "HTTP/9.9": (request(b"GET /livez HTTP/9.9", HOST), 505),
    "HTTP/2 preface": (b"PRI * HTTP/2.0\r\n\r\nSM\r\n\r\n", 505),
    "TLS hello": (b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03" + bytes(range(64)), 400),
    "SSH greeting": (b"SSH-2.0-client\r\n\r\n", 400),
    "lines of nothing": (b"\r\n\r\n\r\n\r\n", 400),
    "random bytes": (bytes((i * 89 + 41) % 251 for i in range(600)) + b"\r\n\r\n", 400),
    "absolute target": (request(b"GET http://somewhere.example/livez", HOST), 404),
    "target *": (request(b"OPTIONS *", HOST), 404),
    "percent that is no percent": (request(b"GET /%zz", HOST), 404),
    "path out of the tree": (request(b"GET /../../etc/passwd", HOST), 404),
    "query in bytes that are no text": (request(b"GET /api/v1/map?band=%ff%fe", HOST), 404),
    # unknown things
    "unknown band": (request(b"GET /api/v1/map?band=nothing", HOST), 404),
    "unknown format": (request(b"GET /api/v1/map?format=bmp", HOST), 422),
    "unknown parameter": (request(b"GET /api/v1/map?bins=2&beams=2&colour=red", HOST), 200),
    "unknown upgrade": (get(HOST, b"Connection: Upgrade", b"Upgrade: h2c"), 200),
    # a websocket, before it is open
    "websocket from elsewhere": (request(b"GET /api/v1/live", HOST, b"Origin: http://x.example", UPGRADE), 403),
    "websocket with a foreign host": (request(b"GET /api/v1/live", b"Host: x.example", UPGRADE), 403),
}  # fmt: skip


def answered(got: bytes) -> tuple[int, dict[str, str], bytes]:
    """The first answer in what came back."""
    head, _, body = got.partition(b"\r\n\r\n")
    first, *lines = head.decode("latin-1").split("\r\n")
    status = re.fullmatch(r"HTTP/1\.1 (\d{3}) .*", first)
    assert status, got[:200]
    headers = {name.lower(): value.strip() for name, _, value in (line.partition(":") for line in lines)}
    return int(status[1]), headers, body


@pytest.mark.parametrize("name", TABLE)
def test_request_and_answer(served: Served, name: str) -> None:
    sent, status = TABLE[name]
    got_status, headers, body = answered(served.raw(sent.replace(b"%PORT", b"%d" % served.port)))
    assert got_status == status
    if status >= 400 and not sent.startswith(b"HEAD"):
        assert headers["content-type"] == "application/problem+json"
        problem: Any = json.loads(body)
        assert (problem["status"], problem["type"]) == (status, "about:blank")
        assert problem["title"]
        assert problem["detail"]
        assert len(body) < 2000  # nothing long is sent back


def test_table_is_long_enough() -> None:
    assert len(TABLE) >= 40


@pytest.mark.parametrize(
    ("host", "port", "own", "names"),
    [
        ("127.0.0.1", 8080, (), {"127.0.0.1:8080", "localhost:8080", "[::1]:8080"}),
        ("::1", 8080, (), {"127.0.0.1:8080", "localhost:8080", "[::1]:8080"}),
        ("192.0.2.7", 8080, ("Box",), {"192.0.2.7:8080"}),
        ("2001:db8::7", 8080, (), {"[2001:db8::7]:8080"}),
        ("Box.Example", 80, (), {"box.example", "box.example:80"}),
        ("0.0.0.0", 9, ("Box", "192.0.2.7"), {"127.0.0.1:9", "localhost:9", "[::1]:9", "box:9", "192.0.2.7:9"}),
    ],
)
def test_names_it_answers_to(host: str, port: int, own: tuple[str, ...], names: set[str]) -> None:
    assert host_names(host, port, own) == names


def test_port_scan_leaves_nothing_behind(served: Served) -> None:
    """Connections that are closed or reset at once, say half a thing, or nothing: the next client is answered."""
    pieces = [b"", b"G", b"GET / HT", b"GET / HTTP/1.1\r\nHo", b"\x00" * 100, b"\x16\x03\x01", b"*1\r\n$4\r\nPING\r\n"]
    for reset in (False, True):
        for piece in pieces * 3:
            with socket.create_connection(("127.0.0.1", served.port), timeout=20) as link:
                link.sendall(piece)
                if reset:
                    link.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
    assert served.get("/livez").status == 200


def test_half_a_request_ends_in_bounded_time(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(http11, "HEAD_S", 0.2)
    monkeypatch.setattr(http11, "IDLE_S", 1)  # an idle connection is no half request
    with serving() as served:
        assert served.raw() == b""
        assert served.raw(b"GET /livez HTTP/1.1\r\nHost: ") == b""
        ours = b"Host: 127.0.0.1:%d\r\n" % served.port
        got = served.raw(b"GET /livez HTTP/1.1\r\n" + ours + b"\r\n", b"GET /livez HTTP/1.1\r\n")
        assert got.count(b"HTTP/1.1 200") == 1  # the second never came whole
        with socket.create_connection(("127.0.0.1", served.port), timeout=20) as link:
            link.sendall(b"GET /livez HTTP/1.1\r\n" + ours + b"\r\n")
            got = b""
            while not got.endswith(b'{"status":"ok"}'):
                got += link.recv(4096)
            link.sendall(b"GET /livez HT")  # half a request long after a whole one
            assert link.recv(4096) == b""
        assert served.get("/livez").status == 200


def test_body_that_does_not_come_is_408() -> None:
    with serving(allowance=Allowance(body_s=0.2)) as served:
        head = b"POST /livez HTTP/1.1\r\nHost: 127.0.0.1:%d\r\n" % served.port + JSON
        status, headers, body = answered(served.raw(head + b"\r\nContent-Length: 10\r\n\r\n123"))
        assert (status, headers["content-type"]) == (408, "application/problem+json")
        assert "0.2 s" in json.loads(body)["detail"]


def test_client_that_does_not_read_is_cut_off(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(http11, "SEND_S", 0.3)
    with serving() as served:
        served.fill()
        ask = b"GET /api/v1/map?format=npy HTTP/1.1\r\nHost: 127.0.0.1:%d\r\n\r\n" % served.port
        link = socket.socket()
        link.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
        link.settimeout(20)
        with link:
            link.connect(("127.0.0.1", served.port))
            link.sendall(ask * 100)

            def cut_off() -> bool:
                try:
                    link.send(b" ")
                except OSError:
                    return True
                return False

            until(cut_off, "the connection is cut")
        assert served.get("/livez").status == 200


def test_connections_over_the_bound_are_closed(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(http11, "CONNECTIONS", 3)
    with serving() as served:
        open_links = [socket.create_connection(("127.0.0.1", served.port), timeout=20) for _ in range(3)]
        ask = b"GET /livez HTTP/1.1\r\nHost: 127.0.0.1:%d\r\n\r\n" % served.port
        for link in open_links:
            link.sendall(ask)
            assert link.recv(4096).startswith(b"HTTP/1.1 200")
        assert served.raw(ask) == b""
        open_links.pop().close()
        until(lambda: served.raw(ask.replace(b"\r\n\r\n", b"\r\nConnection: close\r\n\r\n")) != b"", "there is room")
        for link in open_links:
            link.close()


def test_rate_over_the_allowance_is_429_and_others_go_on() -> None:
    with serving(allowance=Allowance(rate=0.5, burst=5)) as served:
        found = [served.get("/api/v1/array") for _ in range(8)]
        assert [answer.status for answer in found] == [200] * 5 + [429] * 3
        assert found[-1].headers["retry-after"] == "2"
        assert "0.5 requests a second" in found[-1].problem()["detail"]
        assert served.get("/livez").status == 200  # watchers are not counted
        host = b"Host: 127.0.0.1:%d" % served.port
        assert answered(served.raw(request(b"GET /api/v1/live", host, UPGRADE)))[0] == 429


def test_requests_at_once_over_the_allowance_are_503() -> None:
    with serving(allowance=Allowance(rate=1e6, burst=1e6, at_once_each=2)) as served:
        head = (
            b"POST /livez2 HTTP/1.1\r\nHost: 127.0.0.1:%d\r\nContent-Length: 2\r\n" % served.port + JSON + b"\r\n\r\n"
        )
        waiting = [socket.create_connection(("127.0.0.1", served.port), timeout=20) for _ in range(2)]
        for link in waiting:
            link.sendall(head)
        until(lambda: served.get("/api/v1/array").status == 503, "both count")
        answer = served.get("/api/v1/array")
        assert answer.headers["retry-after"] == "1"
        answer.problem()
        for link in waiting:
            link.sendall(b"{}")
            assert link.recv(4096).startswith(b"HTTP/1.1 404")
            link.close()
        assert served.get("/api/v1/array").status == 200


def test_bucket_fills_with_time_and_remembers_a_bounded_number() -> None:
    buckets = Buckets(Allowance(rate=2.0, burst=3.0, addresses=10))
    assert [buckets.take("a", 0.0) for _ in range(5)] == [0, 0, 0, 0.5, 0.5]
    assert buckets.take("b", 0.0) == 0
    assert buckets.take("a", 0.5) == 0
    assert buckets.take("a", 0.5) > 0
    assert [buckets.take("a", 100.0) > 0 for _ in range(4)] == [False, False, False, True]
    for i in range(50):
        buckets.take(f"c{i}", 100.0)
    assert len(buckets) == 10


def test_many_clients_at_once_are_all_answered(served: Served) -> None:
    with ThreadPoolExecutor(24) as pool:
        found = list(pool.map(lambda i: served.get(f"/api/v1/map?bins={1 + i % 7}").status, range(150)))
    assert set(found) == {200}
