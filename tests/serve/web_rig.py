"""A web service on loopback, fed by hand: the application as clients meet it, on real sockets, without the rest."""

import http.client
import json
import socket
import threading
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import closing, contextmanager
from dataclasses import dataclass, field
from http import HTTPStatus
from typing import Any

import numpy as np
import uvicorn

from soundrose.array.geometry import cos_grid
from soundrose.serve.app import Source, dress, make_app
from soundrose.serve.guard import host_names
from soundrose.serve.http11 import server_options
from soundrose.serve.latest import Latest, Message
from soundrose.serve.limits import Allowance
from soundrose.serve.process import listen
from soundrose.settings_types import (
    ArraySettings,
    BandSettings,
    CalibrationSettings,
    FeedSettings,
    Settings,
    WaterSettings,
)

START = "0123456789abcdef"
T = 1_796_133_600_000_000_000
CHANNELS, BEAMS, BINS = 24, 73, 300
F0_HZ, DF_HZ = 50.78125, 3.90625
LOUD_DEG, LOUD_HZ = 120.0, 800.0
WIDE_OPEN = Allowance(rate=1e6, burst=1e6)


def small_settings(calibrated: bool = True, exclude: tuple[int, ...] = ()) -> Settings:
    """24 hydrophones 0.5 m apart; two bands, the second on every other hydrophone."""
    each = (0.0,) * CHANNELS
    places = tuple((0.5 * (CHANNELS - 1) / 2 - 0.5 * m, 0.0, 0.0) for m in range(CHANNELS))
    return Settings(
        ArraySettings("aft", places, exclude, 0.5),
        FeedSettings(),
        CalibrationSettings(each, each, (1.0,) * CHANNELS, each, given=calibrated),
        WaterSettings(1500.0),
        (
            BandSettings("main", (50.0, 2400.0), 4096, BEAMS, tuple(range(CHANNELS))),
            BandSettings("low", (50.0, 700.0), 8192, 37, tuple(range(0, CHANNELS, 2)), "uniform"),
        ),
    )


def sea_levels() -> np.ndarray:
    """(beams, bins) float32 dB: noise about 60 dB, and one loud beam about LOUD_HZ."""
    levels = np.random.default_rng(5).normal(60, 4, (BEAMS, BINS))
    levels[loud_beam(), loud_bins()] = 110.0
    return levels.astype("<f4")


def loud_beam() -> int:
    return int(np.argmin(np.abs(cos_grid(BEAMS) - np.cos(np.radians(LOUD_DEG)))))


def loud_bins() -> slice:
    middle = round((LOUD_HZ - F0_HZ) / DF_HZ)
    return slice(middle - 12, middle + 13)


def map_header(seq: int = 7, **changed: Any) -> dict[str, Any]:
    """Every key of a published map of the band `main`."""
    limits = {"channels_used": 24, "channels": 24, "gap": False, "clipped": 0.0, "alias_hz": None, "masked": 0.0}
    header = {
        "v": 1, "kind": "map", "array": "aft", "seq": seq, "start": START, "band": "main", "run": "r1", "t": T,
        "t_end": T + 256_000_000, "span_s": 2.0, "averages": 20.5, "shape": [BEAMS, BINS],
        "cone_deg": np.degrees(np.arccos(cos_grid(BEAMS))).tolist(), "f0_hz": F0_HZ, "df_hz": DF_HZ,
        "quantity": "spectral density level", "unit": "dB re 1 \u00b5Pa\u00b2/Hz", "limits": limits,
        "latency_ms": 5.25,
    }  # fmt: skip
    return {**header, **changed}


def map_message(levels: np.ndarray | None = None, **changed: Any) -> Message:
    levels = sea_levels() if levels is None else np.ascontiguousarray(levels, "<f4")
    return Message("map/main", map_header(**changed), memoryview(levels.tobytes()), time.monotonic())


def health_message(states: Mapping[int, str] | None = None, seq: int = 3) -> Message:
    found = {i: (states or {}).get(i, "good") for i in range(CHANNELS)}
    channels = [{"i": i, "state": s, "level_db": 91.5, "why": None if s == "good" else s} for i, s in found.items()]
    used = sum(state not in ("dead", "excluded") for state in found.values())
    header = {"v": 1, "kind": "health", "array": "aft", "seq": seq, "start": START, "t": T, "used": used}
    return Message("health", {**header, "channels": channels}, None, time.monotonic())


def status_message(state: str = "up") -> Message:
    names = ("ingest", "band:main", "band:low", "proxy", "serve")
    latency = {"p50": 5.0, "p99": 9.0}
    header = {
        "v": 1, "kind": "status", "array": "aft", "seq": 11, "start": START, "state": "running", "service_start": T,
        "run": "r1", "next": 4096, "blocks": 4, "samples": 4096, "gaps": 0, "lost_samples": 0, "trimmed_samples": 0,
        "unused_samples": 0, "restarts": 0, "clock_jumps": 0, "late": 0, "dropped": {}, "load": 0.1,
        "latency_ms": latency,
        "processes": [{"name": n, "state": state, "pid": 9, "restarts": 0, "since": T} for n in names],
        "bands": {"main": {"load": 0.1, "latency_ms": latency, "maps": 3, "dropped_hops": 0, "gaps": 0,
                           "stale": False, "kernel": "pairs"}},
    }  # fmt: skip
    return Message("status", header, None, time.monotonic())


def levels_message() -> Message:
    header = {"v": 1, "kind": "levels", "array": "aft", "seq": 2, "start": START, "t": T}
    return Message("levels", header, None, time.monotonic())


@dataclass
class Answered:
    """status, headers (names in lower case) and body of an answer."""

    status: int
    headers: dict[str, str]
    body: bytes

    def json(self) -> Any:
        return json.loads(self.body)

    def problem(self) -> Any:
        """The body of an error, its members checked against RFC 9457, 3.1."""
        assert self.headers["content-type"] == "application/problem+json"
        found = self.json()
        assert found["type"] == "about:blank"
        assert found["status"] == self.status
        assert found["title"] == HTTPStatus(self.status).phrase
        assert isinstance(found["detail"], str)
        assert found["detail"]
        return found


@dataclass
class Served:
    """A server that runs, and the messages it answers from."""

    port: int
    latest: Latest = field(default_factory=Latest)

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.port}"

    def fill(self) -> None:
        for message in (map_message(), health_message(), status_message(), levels_message()):
            self.latest.put(message)

    def get(self, path: str, headers: Mapping[str, str] | None = None, method: str = "GET") -> Answered:
        connection = http.client.HTTPConnection("127.0.0.1", self.port, timeout=20)
        try:
            connection.request(method, path, headers=dict(headers or {}))
            answer = connection.getresponse()
            return Answered(answer.status, {k.lower(): v for k, v in answer.getheaders()}, answer.read())
        finally:
            connection.close()

    def raw(self, *pieces: bytes, wait_s: float = 20.0) -> bytes:
        """Send bytes as they are on one connection, and read until the server ends it; it must within `wait_s`."""
        with socket.create_connection(("127.0.0.1", self.port), timeout=wait_s) as link:
            for piece in pieces:
                link.sendall(piece)
            got = b""
            try:
                while part := link.recv(65536):
                    got += part
            except ConnectionResetError:
                pass
            return got


@contextmanager
def serving(settings: Settings | None = None, allowance: Allowance = WIDE_OPEN) -> Iterator[Served]:
    """Serve on a port of the system's choice until the block ends."""
    with closing(listen("127.0.0.1", 0)) as listener:
        served = Served(listener.getsockname()[1])
        source = Source(settings or small_settings(), served.latest, time.monotonic)
        hosts = host_names("127.0.0.1", served.port)
        config = uvicorn.Config(dress(make_app(source), hosts, time.monotonic, allowance), **server_options())
        server = uvicorn.Server(config)
        thread = threading.Thread(target=server.run, kwargs={"sockets": [listener]})
        thread.start()
        try:
            until(lambda: server.started, "the server is up")
            yield served
        finally:
            server.should_exit = True
            thread.join(20)
            assert not thread.is_alive()


def until(true: Callable[[], bool], what: str, seconds: float = 20.0) -> None:
    """Wait for something to become true; fails after `seconds`."""
    deadline = time.monotonic() + seconds
    while not true():
        assert time.monotonic() < deadline, f"waited {seconds:g} s for: {what}"
        time.sleep(0.005)
