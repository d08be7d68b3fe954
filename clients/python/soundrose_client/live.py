"""process: the live socket: maps, states and events as they come, through every restart of the service.

Needs the package `websockets` besides what the rest of this client needs.
"""

import asyncio
import contextlib
import random
import time
from collections.abc import AsyncIterator, Callable, Iterable, Iterator
from typing import TYPE_CHECKING, Any

from soundrose_client.errors import ClientError, ReceiveTimeout, ServiceError, UsageError
from soundrose_client.events import Event
from soundrose_client.live_session import RECONNECT, LiveCounters, LiveSession, live_request
from soundrose_client.messages import Message
from soundrose_client.reader import Hole

if TYPE_CHECKING:
    from websockets.asyncio.client import ClientConnection as AsyncConnection
    from websockets.sync.client import ClientConnection

__all__ = ["AsyncLive", "Live"]

PATH, PROTOCOL = "/api/v1/live", "soundrose.v1"
FIRST_WAIT_S, LONGEST_WAIT_S = 0.2, 10.0
OPEN_S = 10.0
FRAME_MOST = 256 * 2**20


def wait_s(failures: int, share: float) -> float:
    """Wait before attempt `failures` in a row: 0.2 s doubled each time, at most 10 s, times `share` in [0.5, 1].

    The share is drawn: clients that lost the same service must not all come back in the same moment.
    """
    return share * min(FIRST_WAIT_S * 2.0 ** min(failures - 1, 10), LONGEST_WAIT_S)


class _Live:
    """What both clients share.

    address : of the service, "ws://127.0.0.1:8080".
    topics : of map, detection, track, alert, health, status, levels, note.
    bands, bins, beams, f_min, f_max, rate_hz, encoding, pick : of maps; see docs/live.md.  since : cursor or RFC 3339
    time; events after it come first.  timeout_s : of silence, before ReceiveTimeout; None waits for ever.
    on_hole : called for what was lost between two connections.
    """

    def __init__(
        self, address: str = "ws://127.0.0.1:8080", topics: str | Iterable[str] = ("map", "status"), *,
        bands: Iterable[str] | None = None, bins: int | None = None, beams: int | None = None,
        f_min: float | None = None, f_max: float | None = None, rate_hz: float | None = None,
        encoding: str | None = None, pick: str | None = None, since: str | None = None,
        timeout_s: float | None = None, on_hole: Callable[[Hole], None] | None = None,
    ) -> None:  # fmt: skip
        if not address.startswith(("ws://", "wss://")):
            raise UsageError(f"address is {address!r}; give one such as ws://127.0.0.1:8080")
        request = live_request(
            topics, bands=bands, bins=bins, beams=beams, f_min=f_min, f_max=f_max, rate_hz=rate_hz, encoding=encoding,
            pick=pick,
        )  # fmt: skip
        self._address = address.rstrip("/") + PATH
        self._timeout_s = timeout_s
        self._session = LiveSession(request, since, on_hole)
        self._failures = 0
        self._stack = contextlib.ExitStack()  # closes the connection there is

    @property
    def cursor(self) -> str | None:
        """Place after the last event seen: `since` of a later client, or of `Service.events`."""
        return self._session.cursor

    @property
    def counters(self) -> LiveCounters:
        return self._session.counters

    @property
    def hello(self) -> dict[str, Any]:
        """The service's greeting on the newest connection; empty before the first."""
        return self._session.hello

    def _deadline(self) -> float | None:
        return None if self._timeout_s is None else time.monotonic() + self._timeout_s

    def _next_wait(self, deadline: float | None, cause: BaseException) -> float:
        """Seconds to wait before the next attempt. ReceiveTimeout if the deadline comes first."""
        self._failures += 1
        pause = wait_s(self._failures, random.uniform(0.5, 1.0))
        if deadline is not None and time.monotonic() + pause > deadline:
            raise ReceiveTimeout(f"nothing from {self._address} in {self._timeout_s} s; last: {cause}") from cause
        return pause

    def _silence(self) -> ReceiveTimeout:
        return ReceiveTimeout(f"nothing from {self._address} in {self._timeout_s} s")

    @staticmethod
    def _left(deadline: float | None) -> float | None:
        return None if deadline is None else max(deadline - time.monotonic(), 0.0)


class Live(_Live):
    """Messages and events one by one: `for message in Live(...)`. For one thread."""

    _connection: "ClientConnection | None" = None

    def __enter__(self) -> "Live":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def __iter__(self) -> Iterator[Message | Event]:
        while True:
            yield self.receive()

    def receive(self) -> Message | Event:
        """The next message or event.

        ReceiveTimeout after `timeout_s` of silence; ServiceError if the service refuses the request.
        """
        exceptions = _websockets().exceptions
        deadline = self._deadline()
        while True:
            try:
                connection = self._connection or self._open(deadline)
                message, answer = self._session.push(connection.recv(self._left(deadline)))
                self._failures = 0
                if answer is not None:
                    connection.send(answer)
            except exceptions.ConnectionClosed as error:
                self.close()
                _come_back(error)
                time.sleep(self._next_wait(deadline, error))
            except TimeoutError as error:
                if self._connection is not None:
                    raise self._silence() from None
                time.sleep(self._next_wait(deadline, error))
            except (OSError, exceptions.InvalidHandshake, exceptions.InvalidMessage) as error:
                self.close()
                _may_be_over(error)
                time.sleep(self._next_wait(deadline, error))
            else:
                if message is not None:
                    return message

    def _open(self, deadline: float | None) -> "ClientConnection":
        left = self._left(deadline)
        opening = _websockets().sync.client.connect(
            self._address, subprotocols=[PROTOCOL], max_size=FRAME_MOST, compression=None,
            open_timeout=OPEN_S if left is None else min(left, OPEN_S), close_timeout=1,
        )  # fmt: skip
        with contextlib.ExitStack() as stack:
            connection: ClientConnection = stack.enter_context(opening)
            connection.send(self._session.first(connection.recv(OPEN_S)))
            self._connection, self._stack = connection, stack.pop_all()
        return connection

    def close(self) -> None:
        self._connection = None
        with contextlib.suppress(OSError):
            self._stack.close()


class AsyncLive(_Live):
    """The same for asyncio: `async for message in AsyncLive(...)`. For one task."""

    _connection: "AsyncConnection | None" = None

    async def __aenter__(self) -> "AsyncLive":
        return self

    async def __aexit__(self, *_: object) -> None:
        await self.close()

    async def __aiter__(self) -> AsyncIterator[Message | Event]:
        while True:
            yield await self.receive()

    async def receive(self) -> Message | Event:
        """The next message or event; raises as `Live.receive`."""
        exceptions = _websockets().exceptions
        deadline = self._deadline()
        while True:
            try:
                connection = self._connection or await self._open(deadline)
                async with asyncio.timeout(self._left(deadline)):
                    frame = await connection.recv()
                message, answer = self._session.push(frame)
                self._failures = 0
                if answer is not None:
                    await connection.send(answer)
            except exceptions.ConnectionClosed as error:
                await self.close()
                _come_back(error)
                await asyncio.sleep(self._next_wait(deadline, error))
            except TimeoutError as error:
                if self._connection is not None:
                    raise self._silence() from None
                await asyncio.sleep(self._next_wait(deadline, error))
            except (OSError, exceptions.InvalidHandshake, exceptions.InvalidMessage) as error:
                await self.close()
                _may_be_over(error)
                await asyncio.sleep(self._next_wait(deadline, error))
            else:
                if message is not None:
                    return message

    async def _open(self, deadline: float | None) -> "AsyncConnection":
        left = self._left(deadline)
        connection: AsyncConnection = await _websockets().asyncio.client.connect(
            self._address, subprotocols=[PROTOCOL], max_size=FRAME_MOST, compression=None,
            open_timeout=OPEN_S if left is None else min(left, OPEN_S), close_timeout=1,
        )  # fmt: skip
        try:
            async with asyncio.timeout(OPEN_S):
                await connection.send(self._session.first(await connection.recv()))
        except BaseException:
            await connection.close()
            raise
        self._connection = connection
        return connection

    async def close(self) -> None:
        connection, self._connection = self._connection, None
        if connection is not None:
            with contextlib.suppress(OSError):
                await connection.close()


def _websockets() -> Any:
    try:
        import websockets
        import websockets.asyncio.client
        import websockets.exceptions
        import websockets.sync.client
    except ImportError:
        raise ClientError("the live socket needs the package websockets: python -m pip install websockets") from None
    return websockets


def _come_back(error: Any) -> None:
    """Raise unless the service closed in a way after which a client comes back."""
    received = error.rcvd
    code = 1006 if received is None else received.code
    if code not in RECONNECT:
        raise ServiceError(code, f"the service closed the live socket: {code} {received.reason if received else ''}")


def _may_be_over(error: BaseException) -> None:
    """Raise if the handshake was refused for good: an answer below 500 is about the request, not the moment."""
    answer = getattr(error, "response", None)
    if answer is not None and answer.status_code < 500 and answer.status_code != 429:
        raise ServiceError(answer.status_code, f"the live socket is refused: {error}") from error
