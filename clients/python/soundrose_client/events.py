"""codec: logged events as values."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from soundrose_client.errors import MessageError
from soundrose_client.messages import rfc3339

__all__ = ["Event", "event"]


@dataclass(frozen=True, eq=False)
class Event:
    """One event of the service's log.

    cursor : the place after it; events after it are asked for with `since`.  header : the whole object as it came.
    """

    cursor: str
    kind: str
    t_ns: int
    header: Mapping[str, Any]

    @property
    def time(self) -> str:
        """`t_ns` as RFC 3339 text in UTC."""
        return rfc3339(self.t_ns)


def event(item: Mapping[str, Any]) -> Event:
    """An event from its JSON object. MessageError if `cursor`, `kind` or `t` is not there."""
    for key, kind in (("cursor", str), ("kind", str), ("t", int)):
        if not isinstance(item.get(key), kind) or isinstance(item.get(key), bool):
            raise MessageError("key", f"{key} of an event is {item.get(key)!r}; it must be {kind.__name__}")
    return Event(item["cursor"], item["kind"], item["t"], item)
