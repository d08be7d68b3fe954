"""codec: what the live socket sends: text frames, and maps reduced and encoded once for all who ask for the same."""

import json
import struct
from collections.abc import Mapping
from typing import Any

import msgpack
import numpy as np
from numpy.typing import NDArray

from soundrose.product.reduce import reduce_levels
from soundrose.serve.latest import Message
from soundrose.serve.live_request import Reduction
from soundrose.serve.maps import levels_of, reduced_header
from soundrose.serve.plain import plain

__all__ = ["MapFrames", "map_frame", "object_frame", "quantised", "text_frame"]

STEPS_DB = (0.25, 0.5)  #: half a step is 0.125 dB, or 0.25 dB for a map of more than 63.75 dB from lowest to highest
_TOP = 255
_KEPT_REDUCTIONS = 16
_KEPT_BYTES = 16 * 2**20


def object_frame(value: Mapping[str, Any]) -> str:
    """One JSON object, in ASCII: whatever a text of it holds, it can be sent."""
    return json.dumps(value, allow_nan=False, separators=(",", ":"))


def text_frame(message: Message) -> str:
    """A published map without data as one JSON object, as the HTTP call answers it."""
    return object_frame(plain(message.header))


def quantised(level_db: NDArray[np.float32]) -> tuple[float, float, NDArray[np.uint8]]:
    """(floor_db, step_db, bytes) with level = floor_db + step_db * byte.

    The top, byte 255, is the highest level of the map, rounded up to a whole step; the floor is 255 steps lower, and
    what lies below it reads 0. The step is 0.25 dB where that covers the map, else 0.5 dB: 127.5 dB below the
    highest level, each within 0.25 dB. Floors are whole steps, so that a steady level has a steady value from map to
    map whatever the loudest does.
    """
    highest, lowest = float(level_db.max()), float(level_db.min())
    for step in STEPS_DB:
        floor = (np.ceil(highest / step) - _TOP) * step
        if floor <= lowest:
            break
    steps = np.rint((level_db - np.float32(floor)) * np.float32(1 / step))
    return float(floor), step, np.clip(steps, 0, _TOP).astype(np.uint8)


def map_frame(header: Mapping[str, Any], data: bytes, skipped: int) -> bytes:
    """One binary frame: uint32 L, L bytes of msgpack map, data at 4 + L, which `pad` makes a multiple of 8."""
    return _Encoded(header, data).frame(skipped)


class _Encoded:
    """Header and data of a reduced map; what differs between clients is joined to it without packing it anew."""

    def __init__(self, header: Mapping[str, Any], data: bytes) -> None:
        pairs = b"".join(msgpack.packb(key) + msgpack.packb(value) for key, value in header.items())
        self._head = b"\xde" + struct.pack(">H", len(header) + 2) + pairs + msgpack.packb("skipped")  # map 16
        self._data = data

    def frame(self, skipped: int) -> bytes:
        head = self._head + msgpack.packb(skipped) + msgpack.packb("pad")
        head += msgpack.packb(" " * (-(4 + len(head) + 1) % 8))
        return b"".join((struct.pack("<I", len(head)), head, self._data))


class MapFrames:
    """Frames of the newest map of one band: each reduction is worked out once, each frame packed once.

    Bounded: the newest map alone, 16 reductions of it and 16 MiB of frames; what is more is worked out anew.
    """

    def __init__(self) -> None:
        self._message: Message | None = None
        self._encoded: dict[Reduction, _Encoded] = {}
        self._frames: dict[tuple[Reduction, int], bytes] = {}
        self._bytes = 0

    def frame(self, message: Message, reduction: Reduction, skipped: int) -> bytes:
        """The frame of a map. Raises UsageError where the reduction leaves nothing of it."""
        if message is not self._message:
            self._message, self._bytes = message, 0
            self._encoded.clear()
            self._frames.clear()
        frame = self._frames.get((reduction, skipped))
        if frame is None:
            frame = self._reduced(message, reduction).frame(skipped)
            if self._bytes + len(frame) <= _KEPT_BYTES:
                self._frames[reduction, skipped] = frame
                self._bytes += len(frame)
        return frame

    def _reduced(self, message: Message, reduction: Reduction) -> _Encoded:
        encoded = self._encoded.get(reduction)
        if encoded is None:
            encoded = _encode(message, reduction)
            if len(self._encoded) < _KEPT_REDUCTIONS:
                self._encoded[reduction] = encoded
        return encoded


def _encode(message: Message, reduction: Reduction) -> _Encoded:
    header = message.header
    reduced = reduce_levels(
        levels_of(message), header["cone_deg"], header["f0_hz"], header["df_hz"], bins=reduction.bins,
        beams=reduction.beams, f_min=reduction.f_min, f_max=reduction.f_max, pick=reduction.pick,
    )  # fmt: skip
    own = {**reduced_header(message, reduced), "encoding": reduction.encoding}
    if reduction.encoding == "f4":
        return _Encoded(own, np.ascontiguousarray(reduced.values, "<f4").tobytes())
    own["floor_db"], own["step_db"], data = quantised(reduced.values)
    return _Encoded(own, data.tobytes())
