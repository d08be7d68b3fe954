"""process: connecting to an endpoint as the settings name it."""

from typing import Any

import zmq

from soundrose.product.addresses import connect_address, is_ipv6

__all__ = ["connect_to"]


def connect_to(socket: "zmq.Socket[Any]", endpoint: str) -> None:
    """Connect to what is bound at `endpoint`, on this machine if that says everywhere."""
    if is_ipv6(endpoint):
        socket.setsockopt(zmq.IPV6, 1)
    socket.connect(connect_address(endpoint))
