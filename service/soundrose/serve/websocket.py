"""process: the websocket connection under the live socket: small buffers, close codes that arrive, an end to all."""

import asyncio
import socket
from asyncio.transports import BaseTransport
from dataclasses import dataclass
from typing import Any, cast

from uvicorn.protocols.websockets.websockets_sansio_impl import WebSocketsSansIOProtocol
from websockets.frames import CloseCode
from websockets.http11 import Request
from websockets.server import ServerProtocol

from soundrose.serve.live_request import REQUEST_MOST_BYTES

__all__ = ["CANNOT_KEEP_UP", "LINGER_S", "LINK", "PING_S", "WEBSOCKET_OPTIONS", "Link", "LiveProtocol"]

CANNOT_KEEP_UP = 1013
LINK = "soundrose.link"  #: name of the ASGI extension that carries the Link
PING_S = 10.0  #: a ping this often; the answer is waited for as long
CLOSE_S = 10.0  #: wait for the peer's side of the closing handshake
LINGER_S = 60.0  #: the same for a peer that was too slow: it has more to read before it sees why it was closed
_TCP = (socket.AF_INET, socket.AF_INET6)
_SEND_BUFFER = 64 * 1024  #: kernel buffer: what lies in it is stale by the time a slow client reads it
#: At the end: room for what is left and the close frame. Linux grants this much by default, and takes more data only
#: when a third of a buffer is free: with the one above at 128 KiB, 8 of 20 clients that did not read missed their code.
_LAST_BUFFER = 208 * 1024


@dataclass(frozen=True, slots=True)
class Link:
    """writable : set while what was sent last has left for the kernel.  gone : set when the connection is lost."""

    writable: asyncio.Event
    gone: asyncio.Event


class _Requests(ServerProtocol):
    """A message that is too large breaks this service's rules: 1008, not 1009."""

    def fail(self, code: CloseCode | int, reason: str = "") -> None:
        too_big = code == CloseCode.MESSAGE_TOO_BIG
        limit = f"a request may have at most {REQUEST_MOST_BYTES} bytes"
        super().fail(CloseCode.POLICY_VIOLATION if too_big else code, limit if too_big else reason)


class LiveProtocol(WebSocketsSansIOProtocol):
    """uvicorn's websocket, with three things it leaves open.

    A client that does not read must still be closed: the close frame goes out although earlier data wait, the kernel
    gets room for all of it and delivers it when the client reads again, and this process is free of the connection
    after LINGER_S. A client that does not answer pings is closed with 1013, for it most often is one that does not
    read. The end of a connection after a mistake of the peer is half a close first: with bytes of the peer unread,
    a full one would be a reset, and the peer would never see the code.
    """

    def __init__(self, *args: Any, **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.conn = _Requests(extensions=[], max_size=self.config.ws_max_size, logger=self.logger)
        self._link = Link(self.writable, asyncio.Event())

    def connection_made(self, transport: BaseTransport) -> None:
        super().connection_made(transport)
        self.transport.set_write_buffer_limits(high=0)  # `writable` means that everything sent is in the kernel
        self._set_option(socket.SOL_SOCKET, socket.SO_SNDBUF, _SEND_BUFFER)
        # asyncio does it for sockets that say they are TCP; accepted ones do not, and a second event waited for 40 ms
        self._set_option(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def connection_lost(self, exc: Exception | None) -> None:
        super().connection_lost(exc)
        self._link.gone.set()

    def handle_connect(self, event: Request) -> None:
        super().handle_connect(event)
        if not self.close_sent:
            cast(dict[str, Any], self.scope["extensions"])[LINK] = self._link

    async def send(self, message: Any) -> None:
        closing = message["type"] == "websocket.close" and self.handshake_complete
        if closing and not (self.close_sent or self.disconnected or self.transport.is_closing()):
            self._set_option(socket.SOL_SOCKET, socket.SO_SNDBUF, _LAST_BUFFER)
            self.writable.set()  # nothing but the close frame is sent any more, and that must not wait for a reader
            await super().send(message)
            self._await_end(message.get("code", 1000))
            return
        await super().send(message)

    def keepalive_timeout(self) -> None:
        self.pong_timer = None
        if self.close_sent or self.transport.is_closing():
            return
        self.conn.fail(CANNOT_KEEP_UP, f"no answer to a ping within {PING_S:g} s")
        self.handle_parser_exception()

    def handle_parser_exception(self) -> None:
        if self.close_sent:
            return  # more bytes of a peer that was told: read and forgotten
        assert self.conn.close_sent is not None
        code, reason = self.conn.close_sent.code, self.conn.close_sent.reason
        self.queue.put_nowait({"type": "websocket.disconnect", "code": code, "reason": reason})
        self._set_option(socket.SOL_SOCKET, socket.SO_SNDBUF, _LAST_BUFFER)
        self.transport.write(b"".join(self.conn.data_to_send()))
        self.close_sent = True
        self.stop_keepalive()
        if self.read_paused:
            self.read_paused = False
            self.transport.resume_reading()
        self._await_end(code)
        if self.transport.can_write_eof():
            self.transport.write_eof()

    def _await_end(self, code: int) -> None:
        if self.close_timer is not None:
            self.close_timer.cancel()
        self.close_timer = self.loop.call_later(LINGER_S if code == CANNOT_KEEP_UP else CLOSE_S, self._cut)

    def _cut(self) -> None:
        if self.transport.get_write_buffer_size():
            self.transport.abort()
        else:
            self.transport.close()  # the kernel goes on delivering what it has

    def _set_option(self, level: int, option: int, value: int) -> None:
        own = self.transport.get_extra_info("socket")
        if own is not None and own.family in _TCP:
            own.setsockopt(level, option, value)


#: of uvicorn.Config, for every server that carries the live socket
WEBSOCKET_OPTIONS: dict[str, Any] = {
    "ws": LiveProtocol,
    "ws_max_size": REQUEST_MOST_BYTES,
    "ws_per_message_deflate": False,
    "ws_ping_interval": PING_S,
    "ws_ping_timeout": PING_S,
}
