"""Messages made by stock msgpack and sockets that are tracked, as any other program would make them."""

import threading
import time
from collections.abc import Callable, Iterator
from typing import Any

import msgpack
import numpy as np
import pytest
import zmq

LIMIT_MS = 10_000


def map_parts(
    seq: int = 0, start: str = "00000000000000aa", topic: str = "map/main", level_db: Any = None, **keys: Any
) -> list[bytes]:
    """Frames of a map of 3 beams and 4 bins with stock msgpack."""
    levels = np.arange(12, dtype="<f4").reshape(3, 4) if level_db is None else np.asarray(level_db, "<f4")
    header = {
        "v": 1, "kind": "map", "array": "aft", "seq": seq, "start": start, "band": topic.partition("/")[2],
        "run": "r", "t": 1_796_133_600_000_000_000 + seq, "t_end": 1_796_133_600_256_000_000 + seq, "span_s": 2.0,
        "averages": 11.5, "shape": list(levels.shape), "cone_deg": [0.0, 90.0, 180.0][: len(levels)], "f0_hz": 50.0,
        "df_hz": 2.5, "quantity": "spectral density level", "unit": "dB re 1 \u00b5Pa\u00b2/Hz",
        "limits": {"channels_used": 48, "gap": False}, "latency_ms": 12.5,
    } | keys  # fmt: skip
    return [topic.encode(), msgpack.packb(header), levels.tobytes()]


def plain_parts(topic: str, seq: int = 0, start: str = "00000000000000bb", **keys: Any) -> list[bytes]:
    """Frames of a message without data."""
    header = {"v": 1, "kind": topic, "array": "aft", "seq": seq, "start": start} | keys
    return [topic.encode(), msgpack.packb(header)]


class Publisher:
    """XPUB socket that tells when a subscriber is there, so that no test has to wait a guessed time."""

    def __init__(self, context: zmq.Context[Any], address: str = "tcp://127.0.0.1:*") -> None:
        self.socket = context.socket(zmq.XPUB)
        self.socket.setsockopt(zmq.LINGER, 0)
        self.socket.setsockopt(zmq.XPUB_VERBOSE, 1)
        self.socket.setsockopt(zmq.RCVTIMEO, LIMIT_MS)
        self._bind(address)
        self.address = self.socket.getsockopt_string(zmq.LAST_ENDPOINT)

    def _bind(self, address: str) -> None:
        """A socket closed before gives its port back from a thread of ZeroMQ's, some time after `close` returned."""
        until = time.monotonic() + LIMIT_MS / 1000
        while True:
            try:
                self.socket.bind(address)
                return
            except zmq.ZMQError as error:
                if error.errno != zmq.EADDRINUSE or time.monotonic() > until:
                    raise
                threading.Event().wait(0.01)

    def wait(self) -> bytes:
        """The next subscription, or its end: b"\\x01topic", b"\\x00topic"."""
        return self.socket.recv()

    def send(self, *messages: list[bytes]) -> None:
        for parts in messages:
            self.socket.send_multipart(parts)

    def close(self) -> None:
        self.socket.close(0)


@pytest.fixture
def context() -> Iterator[zmq.Context[Any]]:
    with zmq.Context() as context:
        yield context
        context.destroy(linger=0)


@pytest.fixture
def publisher(context: zmq.Context[Any]) -> Iterator[Publisher]:
    publisher = Publisher(context)
    yield publisher
    publisher.close()


@pytest.fixture
def make_publisher(context: zmq.Context[Any]) -> Callable[[str], Publisher]:
    return lambda address: Publisher(context, address)


@pytest.fixture
def make_map() -> Callable[..., list[bytes]]:
    return map_parts


@pytest.fixture
def make_plain() -> Callable[..., list[bytes]]:
    return plain_parts


@pytest.fixture
def pull(context: zmq.Context[Any]) -> zmq.Socket[bytes]:
    """A feed's PULL socket; `LAST_ENDPOINT` says where."""
    socket = context.socket(zmq.PULL)
    socket.setsockopt(zmq.RCVTIMEO, LIMIT_MS)
    socket.bind("tcp://127.0.0.1:*")
    return socket
