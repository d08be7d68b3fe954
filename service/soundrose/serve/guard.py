"""codec: which requests are let in: Host, Origin and content type, for HTTP and websocket alike (pure ASGI)."""

from collections.abc import Iterable

from starlette.types import ASGIApp, Receive, Scope, Send

from soundrose.serve.problems import refuse

__all__ = ["Guard", "host_names"]

SHOWN = 120  #: characters of a header that an answer repeats
_LOOPBACK = ("localhost", "127.0.0.1", "[::1]")


def host_names(host: str, port: int, own_names: Iterable[str] = ()) -> frozenset[str]:
    """Values of the Host header that name this service.

    host, port : what it is bound to. A service bound to loopback or to every address answers to the loopback names;
    one bound to every address to `own_names` (names and addresses of this machine) too.
    """
    bracketed = f"[{host}]" if ":" in host and not host.startswith("[") else host
    names = {bracketed}
    if host in ("localhost", "::1") or host.startswith("127."):
        names.update(_LOOPBACK)
    if host in ("0.0.0.0", "::", ""):
        names = {*_LOOPBACK, *own_names}
    with_port = {f"{name}:{port}" for name in names}
    return frozenset({name.lower() for name in with_port | (names if port == 80 else set())})


class Guard:
    """Refuse with 403 a Host that is not ours, an Origin that is not the same origin, a POST that is not JSON.

    A page from elsewhere can make a browser send requests here; these three checks are what it cannot forge.
    """

    def __init__(self, app: ASGIApp, hosts: frozenset[str]) -> None:
        self._app, self._hosts = app, hosts

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] not in ("http", "websocket"):
            await self._app(scope, receive, send)
            return
        fault = self._fault(scope)
        if fault is None:
            await self._app(scope, receive, send)
        else:
            await refuse(scope, receive, send, 403, fault)

    def _fault(self, scope: Scope) -> str | None:
        headers: dict[bytes, list[str]] = {}
        for name, value in scope["headers"]:
            headers.setdefault(name, []).append(value.decode("latin-1"))
        hosts = headers.get(b"host", [])
        if len(hosts) != 1 or hosts[0].lower() not in self._hosts:
            return f"Host is {_shown(hosts)}; this service answers to {', '.join(sorted(self._hosts))}"
        for origin in headers.get(b"origin", []):
            if origin.lower() not in (f"http://{hosts[0].lower()}", f"https://{hosts[0].lower()}"):
                return f"Origin is {origin[:SHOWN]}; only pages from this service itself ({hosts[0]}) may ask"
        if scope["type"] == "http" and scope["method"] == "POST":
            kinds = [kind.split(";")[0].strip().lower() for kind in headers.get(b"content-type", [])]
            if kinds != ["application/json"]:
                return f"Content-Type is {_shown(kinds)}; send application/json"
        return None


def _shown(values: list[str]) -> str:
    return ", ".join(values)[:SHOWN] or "missing"
