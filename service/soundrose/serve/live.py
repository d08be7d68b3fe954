"""process: `WS /api/v1/live`: greets a client, reads what it asks for, sends what waits for it, closes it."""

import asyncio
import contextlib
from collections.abc import Collection, MutableMapping
from http import HTTPStatus
from typing import Any, Protocol

from fastapi import FastAPI
from starlette.routing import WebSocketRoute
from starlette.types import Receive, Scope, Send

from soundrose.errors import UsageError
from soundrose.serve.app import Source
from soundrose.serve.live_client import BAD_MOST, Closing, LiveClient, error_body
from soundrose.serve.live_frames import object_frame
from soundrose.serve.live_hub import CLIENTS_MOST, Hub
from soundrose.serve.live_request import REQUEST_MOST_BYTES, LiveRequest, parse_request
from soundrose.serve.mailbox import EVENTS_MOST
from soundrose.serve.problems import Problem
from soundrose.serve.websocket import CANNOT_KEEP_UP, LINGER_S, LINK, Link
from soundrose.store.cursors import BEGIN

__all__ = ["PATH", "PROTOCOL", "Log", "add_live"]

PATH = "/api/v1/live"
PROTOCOL = "soundrose.v1"  #: websocket subprotocol, if the client offers it
SEND_S = 5.0  #: a frame that has not left for the kernel by then: the client does not keep up
REQUESTS_HZ, REQUESTS_BURST = 10.0, 20  #: read from one client; more wait in its own socket
_PAGE = 200  #: events read from the log at once
_NO_LOG_S = 0.25
_TOO_SLOW = Closing(CANNOT_KEEP_UP, f"what was sent was not taken for {SEND_S:g} s; go on from your last `cursor`")


class Log(Protocol):
    """What is needed of the event log (`EventTap`)."""

    def newest_cursor(self) -> str: ...

    async def since(
        self, cursor: str | None, kinds: Collection[str] | None = None, limit: int = 100, until: str | None = None
    ) -> tuple[list[dict[str, Any]], str]: ...

    def subscribe(self, follower: Any) -> Any: ...


class _Closed(Exception):
    """The connection is to be closed, or (closing None) is closed."""

    def __init__(self, closing: Closing | None) -> None:
        self.closing = closing
        super().__init__()


def add_live(app: FastAPI, source: Source, log: Log | None = None) -> Hub:
    """Add the live socket to an application. log : the event log, if there is one."""
    bands = {band.name: band.band_hz for band in source.settings.bands}
    hub = Hub(source.latest, tuple(bands), logged=log is not None)
    source.latest.listen(hub.on_message)
    if log is not None:
        log.subscribe(hub.on_events)

    async def live(scope: Scope, receive: Receive, send: Send) -> None:
        await receive()  # websocket.connect
        offered = PROTOCOL in scope.get("subprotocols", ())
        await send({"type": "websocket.accept", "subprotocol": PROTOCOL if offered else None})
        await _Connection(hub, log, bands, scope, receive, send).run()

    app.router.routes.append(WebSocketRoute(PATH, _Endpoint(live), name="live"))
    return hub


class _Endpoint:
    """An ASGI application as an object: a plain function would be taken for a handler of another kind."""

    def __init__(self, app: Any) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        await self._app(scope, receive, send)


class _Connection:
    """One client: a task that reads, a task that writes, and one that catches up while it is asked for."""

    def __init__(
        self, hub: Hub, log: Log | None, bands: dict[str, tuple[float, float]],
        scope: Scope, receive: Receive, send: Send,
    ) -> None:  # fmt: skip
        self._hub, self._log, self._bands = hub, log, bands
        self._receive, self._send = receive, send
        self._link: Link | None = scope.get("extensions", {}).get(LINK)
        self._waiting, self._room = asyncio.Event(), asyncio.Event()
        self._client = LiveClient(self._waiting.set)
        self._catching_up: asyncio.Task[None] | None = None

    async def run(self) -> None:
        if self._hub.full:
            await self._close(Closing(CANNOT_KEEP_UP, f"{CLIENTS_MOST} clients are connected; try again later"))
            return
        self._hub.clients.add(self._client)
        try:
            closing = await self._serve()
            if closing is not None:
                await self._close(closing)
        finally:
            self._hub.clients.discard(self._client)

    async def _serve(self) -> Closing | None:
        """Until the connection is gone (None) or is to be closed."""
        self._client.answer(self._hub.hello(None if self._log is None else self._log.newest_cursor()))
        closing: Closing | None = None
        try:
            async with asyncio.TaskGroup() as tasks:
                tasks.create_task(self._write())
                tasks.create_task(self._read(tasks))
        except* _Closed as ended:
            found = [error for error in ended.exceptions if isinstance(error, _Closed)]
            closing = None if any(error.closing is None for error in found) else found[0].closing
        return closing

    async def _close(self, closing: Closing) -> None:
        """Close, and keep the client's place taken until its connection is gone: what it holds counts till then."""
        self._client.request = LiveRequest(frozenset())
        with contextlib.suppress(OSError, RuntimeError):  # it was quicker
            await self._send({"type": "websocket.close", "code": closing.code, "reason": closing.reason})
        if self._link is not None:
            with contextlib.suppress(TimeoutError):
                await asyncio.wait_for(self._link.gone.wait(), LINGER_S + 1)

    async def _write(self) -> None:
        while True:
            await self._until_writable()
            if self._client.behind:
                raise _Closed(Closing(CANNOT_KEEP_UP, f"{EVENTS_MOST} events wait; go on from your last `cursor`"))
            try:
                frame = self._client.take(self._hub.frame)
            except UsageError as error:
                self._client.answer(object_frame(error_body(422, HTTPStatus(422).phrase, str(error))))
                continue
            if frame is None:
                self._waiting.clear()
                await self._waiting.wait()
                continue
            if isinstance(frame, Closing):
                raise _Closed(frame)
            await self._send_frame(frame)
            self._room.set()

    async def _until_writable(self) -> None:
        """Wait until what was sent has left, so that the next map taken is the newest there is by then."""
        if self._link is not None and not self._link.writable.is_set():
            try:
                await asyncio.wait_for(self._link.writable.wait(), SEND_S)
            except TimeoutError:
                raise _Closed(_TOO_SLOW) from None

    async def _send_frame(self, frame: str | bytes) -> None:
        try:
            async with asyncio.timeout(SEND_S):
                await self._send({"type": "websocket.send", "text" if isinstance(frame, str) else "bytes": frame})
        except TimeoutError:
            raise _Closed(_TOO_SLOW) from None
        except OSError:  # the peer is gone
            raise _Closed(None) from None

    async def _read(self, tasks: asyncio.TaskGroup) -> None:
        loop, credit, last = asyncio.get_running_loop(), float(REQUESTS_BURST), 0.0
        while True:
            message = await self._receive()
            if message["type"] == "websocket.disconnect":
                raise _Closed(None)
            now = loop.time()
            credit = min(credit + (now - last) * REQUESTS_HZ, REQUESTS_BURST) - 1
            last = now
            if credit < 0:
                await asyncio.sleep(-credit / REQUESTS_HZ)
            if self._client.bad < BAD_MOST:
                await self._take_request(message, tasks)

    async def _take_request(self, message: MutableMapping[str, Any], tasks: asyncio.TaskGroup) -> None:
        text = message.get("text")
        if text is not None and len(text.encode()) > REQUEST_MOST_BYTES:
            raise _Closed(Closing(1008, f"a request may have at most {REQUEST_MOST_BYTES} bytes"))
        try:
            if text is None:
                raise UsageError("the request is a binary frame; send JSON in a text frame")
            request = parse_request(text, self._bands)
            await self._check_since(request)
        except (UsageError, Problem) as error:
            self._refuse(error)
            return
        self._apply(request, tasks)

    async def _check_since(self, request: LiveRequest) -> None:
        """Raises UsageError or Problem if the log cannot be followed from there."""
        if request.since is None:
            return
        if self._log is None:
            raise Problem(503, "there is no event log to catch up from; leave out since")
        await self._log.since(request.since, request.kinds, 1)

    def _refuse(self, error: UsageError | Problem) -> None:
        status = error.status if isinstance(error, Problem) else 422
        body = object_frame(error_body(status, HTTPStatus(status).phrase, str(error)))
        if status == 422:
            self._client.refuse(body)
        else:
            self._client.answer(body)

    def _apply(self, request: LiveRequest, tasks: asyncio.TaskGroup) -> None:
        if request.since is not None and self._catching_up is not None:
            self._catching_up.cancel()
        self._client.apply(request)
        if request.since is not None:
            self._client.follows = False
            self._catching_up = tasks.create_task(self._catch_up(request.since))
        self._hub.greet(self._client)

    async def _catch_up(self, place: str) -> None:
        """Queue the events after `place`, page by page as the client takes them, then let new ones reach it.

        The log is followed from exactly where the pages end: the last page was read up to the cursor up to which
        followers had been given everything, and that cursor has not moved since.
        """
        assert self._log is not None
        while True:
            until = self._log.newest_cursor()
            kinds = self._client.request.kinds
            try:
                if until == BEGIN:
                    raise Problem(503, "followers have been given nothing yet")
                items, place = await self._log.since(place, kinds, _PAGE, until)
            except Problem as error:
                if error.status == 503:
                    await asyncio.sleep(_NO_LOG_S)
                    continue
                self._refuse(error)
                self._client.follows = True
                return
            for item in items:
                self._client.offer_event(item["kind"], object_frame(item))
            if len(items) < _PAGE and until == self._log.newest_cursor():
                self._client.follows = True
                return
            while self._client.waiting > _PAGE:
                self._room.clear()
                await self._room.wait()
