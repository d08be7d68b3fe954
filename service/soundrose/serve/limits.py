"""codec: what one client may ask of this service: requests at a time, rate, size; and what every answer carries (ASGI).

Every number here is stated in docs/http.md. Tables are bounded: the oldest address gives way.
"""

import asyncio
from collections import OrderedDict
from collections.abc import Callable
from dataclasses import dataclass
from math import ceil

from starlette.types import ASGIApp, Message, Receive, Scope, Send

from soundrose.serve.problems import refuse

__all__ = ["Allowance", "Buckets", "Headed", "Limited"]

#: scripts, styles and pictures from this service alone; no frames, forms or plug-ins
_POLICY = (
    "default-src 'self'; img-src 'self' blob:; base-uri 'none'; form-action 'none'; frame-ancestors 'none'; "
    "object-src 'none'"
)
_HEADERS = (
    (b"content-security-policy", _POLICY.encode()),
    (b"x-content-type-options", b"nosniff"),
    (b"referrer-policy", b"no-referrer"),
    (b"cross-origin-resource-policy", b"same-origin"),
)
#: answers to watchers of the service, which must not be starved by others at the same address
_FREE = frozenset({"/livez", "/readyz"})
_SAFE = frozenset({"GET", "HEAD", "OPTIONS"})


@dataclass(frozen=True, slots=True)
class Allowance:
    """rate, burst : requests a second and at once, per client address. at_once, at_once_each : being answered, in all
    and per address. head_bytes : of request line and headers. body_bytes, body_s : of a body. addresses :
    remembered."""

    rate: float = 200.0
    burst: float = 400.0
    at_once: int = 128
    at_once_each: int = 64
    head_bytes: int = 16 * 1024
    body_bytes: int = 64 * 1024
    body_s: float = 10.0
    addresses: int = 1024


class Buckets:
    """A bucket of tokens per address: `burst` deep, filled with `rate` a second; one request takes one."""

    def __init__(self, allowance: Allowance) -> None:
        self._allowance = allowance
        self._left: OrderedDict[str, tuple[float, float]] = OrderedDict()

    def __len__(self) -> int:
        return len(self._left)

    def take(self, address: str, now: float) -> float:
        """0 if a token was there, else the seconds until there is one. now : monotonic clock."""
        rate, burst = self._allowance.rate, self._allowance.burst
        tokens, seen = self._left.pop(address, (burst, now))
        tokens = min(burst, tokens + rate * max(0.0, now - seen))
        wait = 0.0 if tokens >= 1 else (1 - tokens) / rate
        self._left[address] = (tokens if wait else tokens - 1, now)
        while len(self._left) > self._allowance.addresses:
            self._left.popitem(last=False)
        return wait


class Limited:
    """Answers 429, 503, 413 or 408 in place of the app when a limit is passed. now : monotonic clock, seconds."""

    def __init__(self, app: ASGIApp, now: Callable[[], float], allowance: Allowance) -> None:
        self._app, self._now, self._allowance = app, now, allowance
        self._buckets = Buckets(allowance)
        self._running: dict[str, int] = {}
        self._all = 0

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] not in ("http", "websocket"):
            await self._app(scope, receive, send)
            return
        if scope["http_version"] not in ("1.0", "1.1"):
            await refuse(scope, receive, send, 505, f"this is HTTP/{scope['http_version']}; HTTP/1.1 is spoken", _CLOSE)
            return
        if _head_bytes(scope) > self._allowance.head_bytes:
            detail = f"request line and headers are over {self._allowance.head_bytes} bytes"
            await refuse(scope, receive, send, 431, detail, _CLOSE)
            return
        address = scope["client"][0] if scope.get("client") else ""
        free = scope["path"] in _FREE
        if not free and (wait := self._buckets.take(address, self._now())):
            allowed = f"{self._allowance.rate:g} requests a second and {self._allowance.burst:g} at once"
            retry = {"Retry-After": str(ceil(wait))}
            await refuse(scope, receive, send, 429, f"more than {allowed} from one address; ask less often", retry)
        elif scope["type"] == "websocket":
            await self._app(scope, receive, send)
        elif free:
            await self._with_body(scope, receive, send)
        else:
            await self._counted(address, scope, receive, send)

    async def _counted(self, address: str, scope: Scope, receive: Receive, send: Send) -> None:
        mine = self._running.get(address, 0)
        if self._all >= self._allowance.at_once or mine >= self._allowance.at_once_each:
            detail = (
                f"{self._allowance.at_once} requests, or {self._allowance.at_once_each} from one address, are being "
                "answered now; ask again"
            )
            await refuse(scope, receive, send, 503, detail, {"Retry-After": "1"})
            return
        self._all, self._running[address] = self._all + 1, mine + 1
        try:
            await self._with_body(scope, receive, send)
        finally:
            self._all -= 1
            if self._running[address] == 1:
                del self._running[address]
            else:
                self._running[address] -= 1

    async def _with_body(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Takes a body in whole, within its bounds, before the app sees the request; that of a GET is never read."""
        most, patience = self._allowance.body_bytes, self._allowance.body_s
        declared = next((value for name, value in scope["headers"] if name == b"content-length"), b"0")
        if not declared.isdigit() or len(declared) > 18 or int(declared) > most:
            await refuse(scope, receive, send, 413, f"the body is over {most} bytes", _CLOSE)
            return
        if scope["method"] in _SAFE:
            await self._app(scope, receive, send)
            return
        try:
            async with asyncio.timeout(patience):
                body = await _read(receive, most)
        except TimeoutError:
            await refuse(scope, receive, send, 408, f"the body did not come within {patience:g} s", _CLOSE)
            return
        if body is None:
            await refuse(scope, receive, send, 413, f"the body is over {most} bytes", _CLOSE)
            return
        await self._app(scope, _replay(body, receive), send)


_CLOSE = {"Connection": "close"}


def _head_bytes(scope: Scope) -> int:
    """About the bytes that came: names, values and target, with their separators."""
    headers = sum(len(name) + len(value) + 4 for name, value in scope["headers"])
    return headers + len(scope.get("raw_path") or b"") + len(scope["query_string"])


async def _read(receive: Receive, most: int) -> bytes | None:
    """The whole body, or None where it is over `most` bytes. A client that left has an empty one."""
    body = bytearray()
    while True:
        message = await receive()
        if message["type"] == "http.disconnect":
            return b""
        body += message.get("body", b"")
        if len(body) > most:
            return None
        if not message.get("more_body", False):
            return bytes(body)


def _replay(body: bytes, receive: Receive) -> Receive:
    given = False

    async def again() -> Message:
        nonlocal given
        if given:
            return await receive()
        given = True
        return {"type": "http.request", "body": body, "more_body": False}

    return again


class Headed:
    """Puts the security headers on every answer, and answers HEAD as GET without its body."""

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        head = scope["type"] == "http" and scope["method"] == "HEAD"

        async def with_headers(message: Message) -> None:
            if message["type"] in ("http.response.start", "websocket.http.response.start"):
                have = {name.lower() for name, _ in message.get("headers", ())}
                added = [(name, value) for name, value in _HEADERS if name not in have]
                if b"cache-control" not in have:
                    added.append((b"cache-control", b"no-store"))
                message = {**message, "headers": [*message.get("headers", ()), *added]}
            elif head and message["type"] == "http.response.body":
                message = {**message, "body": b""}
            await send(message)

        await self._app({**scope, "method": "GET"} if head else scope, receive, with_headers)
