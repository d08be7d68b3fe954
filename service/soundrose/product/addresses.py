"""codec: addresses of sockets as the other side needs them."""

__all__ = ["connect_address"]


def connect_address(endpoint: str) -> str:
    """Where to connect to reach a socket bound at `endpoint` on this machine."""
    for everywhere in ("0.0.0.0", "*"):
        endpoint = endpoint.replace(f"//{everywhere}:", "//127.0.0.1:")
    return endpoint
