"""codec: published messages as JSON objects."""

from collections.abc import Mapping
from typing import Any

from soundrose.product.codec import rfc3339

__all__ = ["plain"]

_TEXTS = (("t", "time"), ("t_end", "time_end"), ("service_start", "service_start_time"))


def plain(header: Mapping[str, Any]) -> dict[str, Any]:
    """The keys of a message, with RFC 3339 texts beside integer nanoseconds, which browsers would round."""
    texts = {text: rfc3339(header[key]) for key, text in _TEXTS if isinstance(header.get(key), int)}
    return {**header, **texts}
