"""process: subscribe to what a service publishes; blocking, and the same for asyncio."""

from collections.abc import AsyncIterator, Callable, Iterable, Iterator
from math import ceil, inf
from time import monotonic
from types import TracebackType
from typing import Any, Self

import zmq
import zmq.asyncio

from soundrose_client.errors import ReceiveTimeout, UsageError
from soundrose_client.messages import Message
from soundrose_client.reader import NEWEST_KINDS, Counters, Hole, Mailbox, Reader
from soundrose_client.sockets import Configure, connect, high_water, prepare, topic_list

__all__ = ["AsyncSubscriber", "Subscriber"]

ADDRESS = "tcp://127.0.0.1:5511"
QUEUE_BYTES = 64 << 20
MESSAGE_BYTES = 1 << 20  # a map of 145 beams and 1000 bins is 0.6 MB
MESSAGE_LIMIT = 256 << 20  # a larger one ends the connection
DRAIN = 1024  # messages read in one go, so that a fast sender cannot keep us reading for ever


class _Base:
    """What both share: an opened socket, the reader, the mailbox, the time limit."""

    _socket: zmq.Socket[Any]

    def __init__(
        self,
        address: str = ADDRESS,
        topics: str | Iterable[str] = ("map/",),
        *,
        timeout_s: float | None = None,
        newest_only: bool = False,
        queue_bytes: int = QUEUE_BYTES,
        message_bytes: int = MESSAGE_BYTES,
        on_hole: Callable[[Hole], None] | None = None,
        configure: Configure | None = None,
        context: zmq.Context[Any] | None = None,
    ) -> None:
        wanted, depth = topic_list(topics), high_water(queue_bytes, message_bytes)
        self.address, self.timeout_s = address, timeout_s
        self._reader = Reader(on_hole)
        self._mailbox = Mailbox(self._reader.counters, NEWEST_KINDS if newest_only else ())
        self._ahead = DRAIN if newest_only else 1
        self._own_context = context is None
        self._context = self._make_context() if context is None else context
        try:
            self._socket = self._open(wanted, depth, configure)
        except BaseException:
            if self._own_context:
                self._context.term()
            raise

    def _make_context(self) -> zmq.Context[Any]:
        raise NotImplementedError

    def _open(self, topics: Iterable[bytes], depth: int, configure: Configure | None) -> zmq.Socket[Any]:
        socket: zmq.Socket[Any] = self._context.socket(zmq.SUB)
        prepare(socket, linger_ms=0, message_limit=MESSAGE_LIMIT)
        socket.setsockopt(zmq.RCVHWM, depth)
        for topic in topics:
            socket.setsockopt(zmq.SUBSCRIBE, topic)
        connect(socket, self.address, configure)
        return socket

    @property
    def counters(self) -> Counters:
        """Messages, holes, what was skipped and what could not be read, since this subscriber was made."""
        return self._reader.counters

    @property
    def closed(self) -> bool:
        return bool(self._socket.closed)

    def close(self) -> None:
        """Ends the connection; may be called twice."""
        if not self._socket.closed:
            self._socket.close(0)
            if self._own_context:
                self._context.term()

    def _take(self, parts: list[bytes]) -> None:
        message = self._reader.push(parts)
        if message is not None:
            self._mailbox.put(message)

    def _limit_s(self, timeout_s: float | None) -> float:
        if self._socket.closed:
            raise UsageError("this subscriber is closed: make a new one")
        limit = self.timeout_s if timeout_s is None else timeout_s
        return inf if limit is None else max(0.0, limit)

    def _nothing(self, limit_s: float) -> ReceiveTimeout:
        return ReceiveTimeout(
            f"nothing came from {self.address} within {limit_s:g} s: is the service running, is it publishing there "
            "(publish.bind), and does it have samples?"
        )


def _left_ms(deadline: float) -> int | None:
    """Milliseconds to `deadline`, rounded up; None for ever."""
    return None if deadline == inf else max(0, ceil((deadline - monotonic()) * 1000))


class Subscriber(_Base):
    """Blocking subscriber: context manager and iterator. One thread at a time.

    Parameters
    ----------
    address : endpoint the service publishes at.
    topics : prefixes, or one text; "map/main", "map/", "health" ...; "" takes all.
    timeout_s : longest wait of `receive` and of the iterator; None waits for ever.
    newest_only : of maps, health, levels and status only the newest that has come is handed out (`skipped` counts
        the rest); detections, tracks, alerts and unknown kinds come one by one all the same.
    queue_bytes, message_bytes : the queue holds queue_bytes // message_bytes messages; what is over is dropped by
        the service for this subscriber, and shows as `missed`.
    on_hole : called with each hole as it is found.
    configure : gets the socket before it connects (keys, tokens).
    context : a ZeroMQ context to use; by default one of its own, ended by `close`.

    Raises
    ------
    UsageError : an address, topic or number that cannot be.

    >>> with Subscriber(topics="map/main") as maps:     # doctest: +SKIP
    ...     for m in maps:
    ...         print(m.time, m.loudest().cone_deg, m.missed)
    """

    def _make_context(self) -> zmq.Context[Any]:
        return zmq.Context()

    def receive(self, timeout_s: float | None = None) -> Message:
        """The next message. ReceiveTimeout if none comes in `timeout_s` (None: the subscriber's own)."""
        limit_s = self._limit_s(timeout_s)
        deadline = monotonic() + limit_s
        self._drain()
        while (message := self._mailbox.take()) is None:  # what cannot be read does not prolong the wait
            if not self._socket.poll(_left_ms(deadline)):
                raise self._nothing(limit_s)
            self._drain()
        return message

    def _drain(self) -> None:
        """Reads what has come, without waiting."""
        for _ in range(self._ahead):
            if self._mailbox.full:
                return
            try:
                self._take(self._socket.recv_multipart(zmq.NOBLOCK))
            except zmq.Again:
                return

    def __iter__(self) -> Iterator[Message]:
        while not self.closed:
            yield self.receive()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()


class AsyncSubscriber(_Base):
    """The same for asyncio: `async with`, `async for`, `await receive()`. Stays in the loop that made it.

    Parameters and errors are those of `Subscriber`.
    """

    _socket: zmq.asyncio.Socket

    def _make_context(self) -> zmq.Context[Any]:
        return zmq.asyncio.Context()

    async def receive(self, timeout_s: float | None = None) -> Message:
        """The next message. ReceiveTimeout if none comes in `timeout_s` (None: the subscriber's own)."""
        limit_s = self._limit_s(timeout_s)
        deadline = monotonic() + limit_s
        await self._drain()
        while (message := self._mailbox.take()) is None:  # what cannot be read does not prolong the wait
            if not await self._socket.poll(_left_ms(deadline)):
                raise self._nothing(limit_s)
            await self._drain()
        return message

    async def _drain(self) -> None:
        for _ in range(self._ahead):
            if self._mailbox.full:
                return
            try:
                self._take(await self._socket.recv_multipart(zmq.NOBLOCK))
            except zmq.Again:
                return

    async def __aiter__(self) -> AsyncIterator[Message]:
        while not self.closed:
            yield await self.receive()

    async def __aenter__(self) -> Self:
        return self

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()
