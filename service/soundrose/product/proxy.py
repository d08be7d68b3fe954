"""process: the proxy: one published address for what many processes send (XSUB and XPUB, nothing else)."""

import zmq

from soundrose.child import Heartbeat, Orders, set_up_child
from soundrose.errors import StartError
from soundrose.product.addresses import is_ipv6

__all__ = ["bind_or_explain", "main", "subscriber_queue"]

_QUEUE_BYTES = 256 * 2**20
_POLL_MS = 100
_SUBSCRIPTION_BYTES = 64 * 1024  #: a subscriber sends topics, which are short
_BATCH = 64


def bind_or_explain(socket: "zmq.Socket[bytes]", endpoint: str, key: str) -> str:
    """Bind and return the endpoint in full (a port of 0 or * filled in). StartError says what to do if it is taken."""
    if is_ipv6(endpoint):
        socket.setsockopt(zmq.IPV6, 1)
    try:
        socket.bind(endpoint.removesuffix(":0") + ":*" if endpoint.endswith(":0") else endpoint)
    except zmq.ZMQError as error:
        raise StartError(
            f"{key}: cannot listen at {endpoint}: {error.strerror}. Is another service running there? "
            f"End it, or choose another endpoint for {key}."
        ) from None
    return socket.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\0")


def subscriber_queue(largest: int) -> int:
    """Messages that wait for one subscriber before new ones are dropped for it: 256 MiB of the largest map."""
    return max(32, min(4000, _QUEUE_BYTES // max(largest, 1)))


def main(orders: Orders) -> int:
    """Move messages from the processes of the service to subscribers until the lifeline ends.

    The incoming side is subscribed to everything for good, so that a sender never waits for a subscription to travel
    back to it: a subscriber gets the next message once its own subscription has reached this process.
    """
    lifeline = set_up_child(orders)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    heart = Heartbeat(context, orders.endpoints["control"], orders.name)
    incoming, outgoing = context.socket(zmq.XSUB), context.socket(zmq.XPUB)
    bands = orders.settings.bands
    queue = subscriber_queue(max(4 * band.beams * band.frame // 2 for band in bands))
    incoming.setsockopt(zmq.RCVHWM, queue)
    outgoing.setsockopt(zmq.SNDHWM, queue)
    for socket in (incoming, outgoing):
        socket.setsockopt(zmq.LINGER, 300)
    outgoing.setsockopt(zmq.MAXMSGSIZE, _SUBSCRIPTION_BYTES)
    try:
        bind_or_explain(incoming, orders.endpoints["collect"], "stream.collect")
        endpoint = bind_or_explain(outgoing, orders.endpoints["publish"], "publish.bind")
        incoming.send(b"\x01")
        moved = 0
        while not lifeline.ending.is_set():
            moved += _move(incoming, outgoing, _POLL_MS)
            if heart.due:
                heart.beat(ready=True, facts={"publish": endpoint, "moved": moved})
        while _move(incoming, outgoing, 50):  # what others sent before they ended
            pass
    finally:
        for closing in (incoming, outgoing, heart):
            closing.close()
        context.term()
    return 0


def _move(incoming: "zmq.Socket[bytes]", outgoing: "zmq.Socket[bytes]", wait_ms: int) -> int:
    """Forward at most a batch of messages; returns how many."""
    if outgoing.poll(0):
        while outgoing.poll(0):
            outgoing.recv()  # subscriptions: ours stands for all
    if not incoming.poll(wait_ms):
        return 0
    for moved in range(_BATCH):
        try:
            parts = incoming.recv_multipart(zmq.NOBLOCK, copy=False)
        except zmq.Again:
            return moved
        outgoing.send_multipart(parts, copy=False)
    return _BATCH
