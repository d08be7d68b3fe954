"""codec: published messages as ZeroMQ frames: topic, msgpack map, data where there are any."""

from collections.abc import Mapping, Sequence
from datetime import UTC, datetime, timedelta
from typing import Any

import msgpack
import numpy as np

from soundrose.errors import WireError
from soundrose.product.messages import VERSION, MapProduct

__all__ = ["Envelope", "decode_published", "encode_map", "encode_plain", "rfc3339"]

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


class Envelope:
    """The keys that every published map has; counts `seq` per topic under one `start`.

    array : id of the array.  start : 16 hex digits that name the start of the sending process.
    """

    def __init__(self, array: str, start: str) -> None:
        self.array, self.start = array, start
        self._next: dict[str, int] = {}

    def wrap(self, topic: str, kind: str, header: Mapping[str, Any]) -> dict[str, Any]:
        """header with `v`, `kind`, `array`, `seq`, `start` in front; takes the topic's next number."""
        seq = self._next.get(topic, 0)
        self._next[topic] = seq + 1
        return {"v": VERSION, "kind": kind, "array": self.array, "seq": seq, "start": self.start, **header}


def encode_map(envelope: Envelope, product: MapProduct, latency_ms: float | None) -> list[Any]:
    """Frames of a map; the data frame shares memory with the product."""
    header = envelope.wrap(product.topic, "map", {**product.header, "latency_ms": latency_ms})
    data = np.ascontiguousarray(product.level_db, "<f4")
    return [product.topic.encode("ascii"), msgpack.packb(header), data.data]


def encode_plain(envelope: Envelope, topic: str, header: Mapping[str, Any]) -> list[bytes]:
    """Frames of a message without data; its kind is the topic's name."""
    return [topic.encode("ascii"), bytes(msgpack.packb(envelope.wrap(topic, topic, header)))]


def decode_published(parts: Sequence[bytes | memoryview]) -> tuple[str, dict[str, Any], memoryview | None]:
    """(topic, map, data or None). Raises WireError("published") for anything else."""
    try:
        topic = bytes(parts[0]).decode("ascii")
        header = msgpack.unpackb(parts[1])
    except (ValueError, TypeError, IndexError) as error:
        raise WireError("published", f"a published message cannot be read: {error!r}") from error
    if not isinstance(header, dict):
        raise WireError("published", f"a published message holds {type(header).__name__}; it must be a map")
    return topic, header, memoryview(parts[2]) if len(parts) > 2 else None


def rfc3339(t_ns: int) -> str:
    """RFC 3339 UTC with microseconds, as JSON answers add beside integer nanoseconds."""
    moment = _EPOCH + timedelta(microseconds=t_ns // 1000)
    return moment.strftime("%Y-%m-%dT%H:%M:%S.%f") + "Z"
