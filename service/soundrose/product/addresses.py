"""codec: addresses of sockets as the other side needs them."""

__all__ = ["connect_address", "is_ipv6"]

_EVERYWHERE = (("0.0.0.0", "127.0.0.1"), ("*", "127.0.0.1"), ("[::]", "[::1]"))


def connect_address(endpoint: str) -> str:
    """Where to connect to reach a socket bound at `endpoint` on this machine."""
    for everywhere, here in _EVERYWHERE:
        endpoint = endpoint.replace(f"//{everywhere}:", f"//{here}:")
    return endpoint


def is_ipv6(endpoint: str) -> bool:
    """Whether it is an IPv6 address, which a ZeroMQ socket must be told to use."""
    return endpoint.startswith("tcp://[")
