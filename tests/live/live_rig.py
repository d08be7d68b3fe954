"""A real server on loopback whose published messages a test puts in, and a log of events kept in memory."""

import asyncio
import contextlib
import json
import socket
import struct
import time
from collections.abc import AsyncIterator
from typing import Any

import msgpack
import numpy as np
import uvicorn
from fastapi import FastAPI
from websockets.asyncio.client import ClientConnection, connect
from websockets.exceptions import ConnectionClosedError

from soundrose.serve.app import Source
from soundrose.serve.latest import Latest, Message
from soundrose.serve.live import add_live
from soundrose.serve.problems import Problem
from soundrose.serve.websocket import WEBSOCKET_OPTIONS
from soundrose.settings import parse_settings

LIMIT_S = 20.0
START = "00000000000000aa"
SETTINGS = {
    "array": {"id": "aft", "hydrophones": 48, "spacing_m": 0.375},
    "feed": {"rate_hz": 16000.0},
    "calibration": {"sensitivity_db": -180.0, "gain_db": 20.0, "full_scale_v": 2.5},
    "water": {"sound_speed_m_s": 1500.0},
    "bands": [
        {"name": "main", "band_hz": [50.0, 2000.0], "frame": 1024, "beams": 19},
        {"name": "low", "band_hz": [50.0, 500.0], "frame": 1024, "beams": 9},
    ],
}


def levels(seed: int, beams: int = 19, bins: int = 125) -> np.ndarray:
    """(beams, bins) float32 of a noisy map with one loud source, dB."""
    rng = np.random.default_rng(seed)
    noise = 60 + 10 * np.log10(rng.gamma(8, 1 / 8, (beams, bins)))
    noise[beams // 3] += 25
    return noise.astype("<f4")


def map_message(seq: int, *, band: str = "main", heard_s: float = 0.0, start: str = START, level_db=None) -> Message:
    """A published map as the service's own subscriber sees it."""
    data = levels(seq) if level_db is None else np.asarray(level_db, "<f4")
    beams = len(data)
    header = {
        "v": 1, "kind": "map", "array": "aft", "seq": seq, "start": start, "band": band, "run": "r",
        "t": 1_796_133_600_000_000_000 + seq * 32_000_000, "t_end": 1_796_133_600_064_000_000 + seq * 32_000_000,
        "span_s": 2.0, "averages": 11.5, "shape": list(data.shape),
        "cone_deg": [float(v) for v in np.degrees(np.arccos(np.linspace(1, -1, beams)))], "f0_hz": 62.5,
        "df_hz": 15.625, "quantity": "spectral density level", "unit": "dB re 1 \u00b5Pa\u00b2/Hz",
        "limits": {"channels_used": 48, "gap": False}, "latency_ms": 12.5,
    }  # fmt: skip
    return Message(f"map/{band}", header, memoryview(data.tobytes()), heard_s)


def text_message(topic: str, seq: int = 0, **keys: Any) -> Message:
    header = {"v": 1, "kind": topic, "array": "aft", "seq": seq, "start": START, **keys}
    return Message(topic, header, None, 0.0)


class MemoryLog:
    """Events in a list, behind the interface of the event log's reader: newest_cursor, since, subscribe.

    pause : awaited inside `since` after the page was read, so that a test can let things happen meanwhile.
    """

    def __init__(self) -> None:
        self.items: list[dict[str, Any]] = []
        self._followers: list[Any] = []
        self._given = 0
        self.floor = 0
        self.pause: Any = None

    def add(self, kind: str, *, hand_on: bool = True, **payload: Any) -> str:
        cursor = f"{1:016x}-{len(self.items) + 1}"
        self.items.append({"cursor": cursor, "kind": kind, "t": len(self.items), **payload})
        if hand_on:
            self.hand_on()
        return cursor

    def hand_on(self) -> None:
        items, self._given = self.items[self._given :], len(self.items)
        for follower in self._followers if items else ():
            follower(items)

    def newest_cursor(self) -> str:
        return f"{1:016x}-{self._given}"

    async def since(self, cursor, kinds=None, limit=100, until=None):
        await asyncio.sleep(0)
        try:
            after = 0 if cursor in (None, "begin") else int(cursor.split("-")[1])
        except (IndexError, ValueError):
            raise Problem(422, f"since is {cursor!r}; send a cursor as it was given") from None
        if after < self.floor:
            raise Problem(410, "events after this cursor have been deleted by retention")
        last = len(self.items) if until is None else int(until.split("-")[1])
        found = [(i + 1, item) for i, item in enumerate(self.items) if after <= i < last]
        wanted = [(row, item) for row, item in found if kinds is None or item["kind"] in kinds][:limit]
        row = wanted[-1][0] if len(wanted) == limit else max(after, last)
        if self.pause is not None:
            await self.pause()
        return [item for _, item in wanted], f"{1:016x}-{row}"

    def subscribe(self, follower: Any) -> Any:
        self._followers.append(follower)
        return lambda: self._followers.remove(follower)


class Rig:
    """The server, its newest messages, its log and its hub."""

    def __init__(self, log: MemoryLog | None, port: int = 0) -> None:
        self.settings = parse_settings(SETTINGS)
        self.latest, self.log = Latest(), log
        app = FastAPI()
        self.hub = add_live(app, Source(self.settings, self.latest, time.monotonic), log)
        self.server = uvicorn.Server(
            uvicorn.Config(app, log_config=None, lifespan="off", timeout_graceful_shutdown=1, **WEBSOCKET_OPTIONS)
        )
        self.listener = socket.create_server(("127.0.0.1", port))
        self.port = self.listener.getsockname()[1]
        self.address = f"ws://127.0.0.1:{self.port}/api/v1/live"

    def put(self, *messages: Message) -> None:
        for message in messages:
            self.latest.put(message)

    @contextlib.asynccontextmanager
    async def client(self, **options: Any) -> AsyncIterator["Client"]:
        """A stock client that has read the greeting."""
        async with connect(self.address, max_size=None, compression=None, **options) as connection:
            client = Client(connection)
            client.hello = await client.text()
            yield client


class Client:
    """Frames of the stock client as values, each under a time limit."""

    def __init__(self, connection: ClientConnection) -> None:
        self.connection = connection
        self.hello: dict[str, Any] = {}

    async def ask(self, *topics: str, since: str | None = None, **keys: Any) -> None:
        request = {"subscribe": list(topics), **({"map": keys} if keys else {})}
        await self.send(request | ({"since": since} if since else {}))

    async def send(self, request: Any) -> None:
        await self.connection.send(request if isinstance(request, str | bytes) else json.dumps(request))

    async def frame(self) -> str | bytes:
        return await asyncio.wait_for(self.connection.recv(), LIMIT_S)

    async def text(self) -> dict[str, Any]:
        frame = await self.frame()
        assert isinstance(frame, str), "a text frame was expected, a binary one came"
        return json.loads(frame)

    async def map(self) -> tuple[dict[str, Any], np.ndarray, bytes]:
        """(header, values as sent, the whole frame)."""
        frame = await self.frame()
        assert isinstance(frame, bytes), f"a map was expected, got {frame}"
        return (*parse_map(frame), frame)

    async def closed(self) -> tuple[int, str]:
        """Read to the end: the close code and reason."""
        await asyncio.wait_for(self._drain(), LIMIT_S)
        return self.connection.close_code or 1006, self.connection.close_reason or ""

    async def _drain(self) -> None:
        with contextlib.suppress(ConnectionClosedError):
            async for _ in self.connection:
                pass


def parse_map(frame: bytes) -> tuple[dict[str, Any], np.ndarray]:
    """Header and values (float32 or uint8) of a binary frame; the values share the frame's memory."""
    (length,) = struct.unpack_from("<I", frame)
    assert (4 + length) % 8 == 0
    header = msgpack.unpackb(frame[4 : 4 + length])
    kind = {"f4": "<f4", "u1": "u1"}[header["encoding"]]
    return header, np.frombuffer(frame, kind, offset=4 + length).reshape(header["shape"])


@contextlib.asynccontextmanager
async def running(log: MemoryLog | None = None, port: int = 0) -> AsyncIterator[Rig]:
    rig = Rig(log, port)
    serving = asyncio.create_task(rig.server.serve(sockets=[rig.listener]))
    try:
        while not rig.server.started:
            await asyncio.sleep(0.005)
        yield rig
    finally:
        rig.server.should_exit = True
        await asyncio.wait_for(serving, LIMIT_S)
        rig.listener.close()
