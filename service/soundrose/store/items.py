"""core: events as they go into the log and as they come out of it."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from soundrose.product.codec import rfc3339
from soundrose.store.cursors import Cursor

__all__ = ["RESERVED", "NewEvent", "event_item"]

RESERVED = frozenset({"cursor", "kind", "t", "time", "recorded"})  #: keys of an item that no payload may have


@dataclass(frozen=True, slots=True)
class NewEvent:
    """An event to be written. t_ns : feed time or host time, as its kind says.  payload : plain values (JSON)."""

    kind: str
    t_ns: int
    payload: Mapping[str, Any]


def event_item(place: Cursor, kind: str, t_ns: int, recorded_ns: int, payload: Mapping[str, Any]) -> dict[str, Any]:
    """One event as JSON answers have it. place : the cursor after it.  t_ns, recorded_ns : ns since 1970 UTC."""
    return {
        "cursor": str(place),
        "kind": kind,
        "t": t_ns,
        "time": rfc3339(t_ns),
        "recorded": recorded_ns,
        **payload,
    }
