"""process: the HTTP server's protocol, with deadlines and bounds that uvicorn leaves open."""

import asyncio
import json
import sys
from http import HTTPStatus
from typing import Any

import h11
from uvicorn.protocols.http.h11_impl import H11Protocol

from soundrose.serve.problems import MEDIA_TYPE, problem_body

__all__ = ["CONNECTIONS", "HEAD_BYTES", "HEAD_S", "SEND_S", "PatientProtocol", "server_options"]

CONNECTIONS = 512  #: open at once, websockets counted; further ones are closed unanswered
HEAD_BYTES = 16 * 1024  #: of request line and headers together
HEAD_S = 10.0  #: from the first byte of a request, or from the connection, to the end of its headers
SEND_S = 30.0  #: for a client to take what has been sent: one that has not is cut off
IDLE_S = 15  #: between two requests on one connection

_WHY = {
    400: "this is not HTTP/1.1",
    431: f"request line and headers are over {HEAD_BYTES} bytes",
    501: "a body may come whole or in chunks; no other transfer coding is known",
}


class PatientProtocol(H11Protocol):
    """HTTP/1.1 by h11. What is no HTTP is answered with a problem; half requests and full pipes end in bounded time."""

    _head_timer: asyncio.TimerHandle | None = None
    _send_timer: asyncio.TimerHandle | None = None

    def connection_made(self, transport: asyncio.Transport) -> None:  # type: ignore[override]
        super().connection_made(transport)
        if len(self.connections) > CONNECTIONS:
            transport.abort()
            return
        self._await_head()

    def data_received(self, data: bytes) -> None:
        super().data_received(data)
        if self.transport.get_protocol() is not self:
            self._stop_timers()  # a websocket now
        elif self.cycle is not None and not self.cycle.response_complete:
            self._stop_head()
        elif self._head_timer is None and not self.transport.is_closing():
            self._await_head()

    def on_response_complete(self) -> None:
        self._stop_head()
        super().on_response_complete()
        if self._send_timer is None and self.transport.get_write_buffer_size() > 0:
            self._send_timer = self.loop.call_later(SEND_S, self._cut_if_full)

    def connection_lost(self, exc: Exception | None) -> None:
        self._stop_timers()
        super().connection_lost(exc)

    def send_400_response(self, msg: str) -> None:
        """What h11 cannot read: a problem like every other error, and the end of the connection."""
        self._stop_head()
        if self.conn.our_state not in (h11.IDLE, h11.SEND_RESPONSE):
            self.transport.close()  # in the middle of an answer: there is no place for another
            return
        error = sys.exc_info()[1]  # of h11, which knows more than its caller hands on
        status = error.error_status_hint if isinstance(error, h11.RemoteProtocolError) else 400
        body = json.dumps(problem_body(status, _WHY.get(status, _WHY[400]))).encode()
        headers = [
            ("content-type", MEDIA_TYPE),
            ("content-length", str(len(body))),
            ("connection", "close"),
            ("x-content-type-options", "nosniff"),
            ("cache-control", "no-store"),
        ]
        for event in (
            h11.Response(status_code=status, headers=headers, reason=HTTPStatus(status).phrase),
            h11.Data(data=body),
            h11.EndOfMessage(),
        ):
            self.transport.write(self.conn.send(event) or b"")
        self.transport.close()

    def _await_head(self) -> None:
        self._head_timer = self.loop.call_later(HEAD_S, self._give_up)

    def _give_up(self) -> None:
        self._head_timer = None
        self.transport.abort()

    def _cut_if_full(self) -> None:
        self._send_timer = None
        if self.transport.get_write_buffer_size() > 0:
            self.transport.abort()

    def _stop_head(self) -> None:
        if self._head_timer is not None:
            self._head_timer.cancel()
            self._head_timer = None

    def _stop_timers(self) -> None:
        self._stop_head()
        if self._send_timer is not None:
            self._send_timer.cancel()
            self._send_timer = None


def server_options() -> dict[str, Any]:
    """Keyword arguments of `uvicorn.Config` that make the above hold."""
    return {
        "http": PatientProtocol,
        "h11_max_incomplete_event_size": HEAD_BYTES,
        "timeout_keep_alive": IDLE_S,
        "server_header": False,
        "access_log": False,
        "log_config": None,
        "log_level": "warning",
    }
