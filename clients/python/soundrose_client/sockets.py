"""process: options of the client's sockets, set before they connect (most act only then)."""

from collections.abc import Callable, Iterable
from typing import Any

import zmq

from soundrose_client.errors import UsageError

__all__ = ["Configure", "connect", "high_water", "prepare", "prepare_patient", "topic_list"]

#: gets the socket just before it connects: keys (CURVE), a user name or token, a proxy ...
Configure = Callable[[zmq.Socket[Any]], None]

HEARTBEAT_MS = 2_000
SILENCE_MS = 6_000  # three heartbeats: a peer that is gone without a word is noticed, and the socket reconnects
RECONNECT_MS, RECONNECT_MAX_MS = 100, 5_000


def high_water(queue_bytes: int, message_bytes: int) -> int:
    """Messages that a queue of `queue_bytes` may hold, at least 1. UsageError unless both are positive."""
    if queue_bytes <= 0 or message_bytes <= 0:
        raise UsageError(f"queue_bytes is {queue_bytes!r} and message_bytes {message_bytes!r}: both must be above 0")
    return max(1, queue_bytes // message_bytes)


def topic_list(topics: str | Iterable[str]) -> tuple[bytes, ...]:
    """Topics as prefixes in bytes. One text is one topic. UsageError if there is none or one is not ASCII."""
    listed = (topics,) if isinstance(topics, str) else tuple(topics)
    if not listed:
        raise UsageError('topics is empty: name at least one, such as "map/main"; "" takes all')
    try:
        return tuple(topic.encode("ascii") for topic in listed)
    except UnicodeEncodeError:
        raise UsageError(f"topics are ASCII; got {listed!r}") from None


def prepare_patient(socket: zmq.Socket[Any], linger_ms: int, message_limit: int) -> None:
    """As `prepare`, for a socket whose peer may make it wait: the kernel asks whether it is there, not ZeroMQ.

    A peer that does not read answers no heartbeat; the connection would be cut, and what is in flight lost.
    """
    prepare(socket, linger_ms, message_limit)
    for option in (zmq.HEARTBEAT_IVL, zmq.HEARTBEAT_TIMEOUT, zmq.HEARTBEAT_TTL):
        socket.setsockopt(option, 0)
    socket.setsockopt(zmq.TCP_KEEPALIVE, 1)
    socket.setsockopt(zmq.TCP_KEEPALIVE_IDLE, 5)
    socket.setsockopt(zmq.TCP_KEEPALIVE_INTVL, 5)
    socket.setsockopt(zmq.TCP_KEEPALIVE_CNT, 3)


def prepare(socket: zmq.Socket[Any], linger_ms: int, message_limit: int) -> None:
    """Heartbeats, reconnection and limits; nothing of it can be changed once connected."""
    socket.setsockopt(zmq.LINGER, linger_ms)
    socket.setsockopt(zmq.MAXMSGSIZE, message_limit)
    socket.setsockopt(zmq.HEARTBEAT_IVL, HEARTBEAT_MS)
    socket.setsockopt(zmq.HEARTBEAT_TIMEOUT, SILENCE_MS)
    socket.setsockopt(zmq.HEARTBEAT_TTL, SILENCE_MS)
    socket.setsockopt(zmq.RECONNECT_IVL, RECONNECT_MS)
    socket.setsockopt(zmq.RECONNECT_IVL_MAX, RECONNECT_MAX_MS)


def connect(socket: zmq.Socket[Any], address: str, configure: Configure | None) -> None:
    """`configure`, then connect. UsageError for an address that ZeroMQ does not take; the socket is closed then."""
    try:
        if configure is not None:
            configure(socket)
        socket.connect(address)
    except zmq.ZMQError as error:
        socket.close(0)
        raise UsageError(
            f"cannot connect to {address!r} ({error}): give an endpoint such as tcp://127.0.0.1:5511"
        ) from None
    except BaseException:
        socket.close(0)
        raise
