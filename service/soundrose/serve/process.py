"""process: serve: subscribes to what the service publishes and answers HTTP."""

import asyncio
import contextlib
import socket
import time
from pathlib import Path
from urllib.parse import urlsplit

import uvicorn
import zmq
import zmq.asyncio

from soundrose.child import HEARTBEAT_S, Heartbeat, Lifeline, Orders, SlowLog, set_up_child
from soundrose.errors import StartError, WireError
from soundrose.product.codec import decode_published
from soundrose.product.connecting import connect_to
from soundrose.serve.app import Source, dress, make_app
from soundrose.serve.commands import CommandClient
from soundrose.serve.event_calls import add_events
from soundrose.serve.events import EventTap
from soundrose.serve.guard import host_names
from soundrose.serve.http11 import server_options
from soundrose.serve.latest import Latest, Message, not_ready
from soundrose.serve.live import add_live
from soundrose.serve.metrics import add_metrics
from soundrose.serve.websocket import WEBSOCKET_OPTIONS

__all__ = ["listen", "main"]

_GRACE_S = 1


def listen(host: str, port: int) -> socket.socket:
    """A listening socket. StartError if the address is taken or not ours."""
    family = socket.AF_INET6 if ":" in host else socket.AF_INET
    listener = socket.socket(family, socket.SOCK_STREAM)
    listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    listener.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)  # those accepted inherit it; without, 40 ms a write
    try:
        listener.bind((host, port))
    except OSError as error:
        listener.close()
        raise StartError(
            f"serve.port: cannot listen at {host}:{port}: {error.strerror}. Is another service running there? "
            f"End it, or choose another serve.port."
        ) from None
    listener.listen(256)
    return listener


async def _collect(subscriber: zmq.asyncio.Socket, latest: Latest) -> None:
    log = SlowLog()
    while True:
        frames = await subscriber.recv_multipart(copy=False)
        try:
            topic, header, data = decode_published([frame.buffer for frame in frames])
        except WireError as error:
            log.warn("published", str(error))
            continue
        latest.put(Message(topic, header, data, time.monotonic()))


async def _beat(orders: Orders, server: uvicorn.Server, latest: Latest, address: str) -> None:
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    heart = Heartbeat(context, orders.endpoints["control"], orders.name)
    elsewhere = {f"band:{band.name}" for band in orders.settings.bands if band.place == "elsewhere"}
    try:
        while True:
            status = latest.get("status")
            ready = server.started and status is not None
            sees_all = ready and not set(not_ready(status, time.monotonic())) - elsewhere
            heart.beat(ready=ready, facts={"http": address, "sees_all": sees_all})
            await asyncio.sleep(HEARTBEAT_S / 5 if not sees_all else HEARTBEAT_S)
    finally:
        heart.close()
        context.term()


async def _end_with(lifeline: Lifeline, server: uvicorn.Server) -> None:
    while not lifeline.ending.is_set():
        await asyncio.sleep(0.05)
    server.should_exit = True


async def _serve(orders: Orders, lifeline: Lifeline, listener: socket.socket, host: str) -> None:
    port = listener.getsockname()[1]
    latest = Latest()
    context = zmq.asyncio.Context()
    subscriber = context.socket(zmq.SUB)
    subscriber.setsockopt(zmq.RCVHWM, 64)
    subscriber.setsockopt(zmq.LINGER, 0)
    subscriber.setsockopt(zmq.RECONNECT_IVL, 20)
    subscriber.setsockopt(zmq.RECONNECT_IVL_MAX, 200)
    subscriber.setsockopt(zmq.SUBSCRIBE, b"")
    source = Source(orders.settings, latest, time.monotonic)
    app = make_app(source)
    tap = EventTap(Path(orders.settings.store.path))
    commands = CommandClient(context, orders.endpoints["commands"])
    add_events(app, tap, commands)
    add_metrics(app, latest)
    add_live(app, source, tap)
    config = uvicorn.Config(
        dress(app, host_names(host, port, _own_names()), time.monotonic),
        **server_options(),
        timeout_graceful_shutdown=_GRACE_S,
        **WEBSOCKET_OPTIONS,
    )
    server = uvicorn.Server(config)
    shown = f"[{host}]" if ":" in host else host
    try:
        connect_to(subscriber, orders.endpoints["publish"])
        await tap.start()
        await commands.start()
        async with asyncio.TaskGroup() as tasks:
            running = [
                tasks.create_task(_collect(subscriber, latest)),
                tasks.create_task(_beat(orders, server, latest, f"http://{shown}:{port}")),
                tasks.create_task(_end_with(lifeline, server)),
            ]
            await server.serve(sockets=[listener])
            for task in running:
                task.cancel()
    finally:
        await tap.stop()
        await commands.stop()
        subscriber.close()
        context.term()


def _own_names() -> list[str]:
    names = {socket.gethostname(), socket.getfqdn()}
    with contextlib.suppress(OSError):
        names.update(str(found[4][0]) for found in socket.getaddrinfo(socket.gethostname(), None))
    return sorted(names)


def main(orders: Orders) -> int:
    """Serve until the lifeline ends."""
    lifeline = set_up_child(orders)
    address = urlsplit(orders.endpoints["http"])
    host = address.hostname or "127.0.0.1"
    listener = listen(host, address.port or 0)
    asyncio.run(_serve(orders, lifeline, listener, host))
    return 0
