"""codec: samples and notes of an array -> frames of the feed."""

from collections.abc import Mapping
from typing import Any, Literal, cast, get_args

import msgpack
import numpy as np
from numpy.typing import ArrayLike, NDArray

from soundrose_client.errors import UsageError

__all__ = ["SampleType", "Unit", "encode_note", "encode_samples", "sample_type"]

VERSION = 1
SampleType = Literal["i2", "i3", "i4", "f4"]
Unit = Literal["count", "V", "uPa"]
WIDTH = {"i2": 2, "i3": 3, "i4": 4, "f4": 4}
STORED = {
    "i2": "<i2",
    "i3": "<i4",
    "i4": "<i4",
    "f4": "<f4",
}  # what the array given must be convertible to without loss


def sample_type(name: str, unit: str) -> SampleType:
    """`name` checked against the types of the feed, and `unit` with it. UsageError if they do not go together."""
    if name not in (types := get_args(SampleType)):
        raise UsageError(f"type is {name!r}; it must be one of {', '.join(types)}")
    if unit not in (units := get_args(Unit)):
        raise UsageError(f"unit is {unit!r}; it must be one of {', '.join(units)}")
    if unit != "count" and name != "f4":
        raise UsageError(f"unit is {unit!r} with type {name!r}: V and uPa go with f4; integers are count")
    return cast(SampleType, name)


def encode_samples(samples: ArrayLike, kind: SampleType) -> NDArray[np.generic]:
    """Samples as they go on the wire: C-contiguous (channels, n), little-endian; i3 as (channels, n, 3) bytes.

    Parameters
    ----------
    samples : (channels, n) integers for i2, i3, i4; integers or floats for f4 (float64 is rounded to float32).

    Raises
    ------
    UsageError : not two axes, empty, floats for an integer type, or integers that do not fit.
    """
    given = np.asarray(samples)
    if given.ndim != 2 or 0 in given.shape:
        raise UsageError(f"samples have shape {given.shape}; send (channels, samples), each at least 1")
    if kind == "f4":
        if given.dtype.kind not in "fiu":
            raise UsageError(f"samples are {given.dtype}; f4 takes real numbers")
        return np.ascontiguousarray(given, "<f4")
    if given.dtype.kind not in "iu":
        raise UsageError(f"samples are {given.dtype}; {kind} takes integers: round and scale them first, or send f4")
    limit = 1 << (8 * WIDTH[kind] - 1)
    if not np.can_cast(given.dtype, f"i{WIDTH[kind]}" if kind != "i3" else "i2"):
        low, high = int(given.min()), int(given.max())
        if low < -limit or high >= limit:
            raise UsageError(f"samples go from {low} to {high}; {kind} holds {-limit} to {limit - 1}")
    stored = np.ascontiguousarray(given, STORED[kind])
    if kind != "i3":
        return stored
    return np.ascontiguousarray(stored.view(np.uint8).reshape(*stored.shape, 4)[..., :3])  # the low three bytes


def encode_note(kind: str, array: str, keys: Mapping[str, Any]) -> bytes:
    """A map of the feed: `v`, `kind`, `array`, then `keys`. UsageError for a value that msgpack does not know."""
    try:
        packed = msgpack.packb({"v": VERSION, "kind": kind, "array": array, **keys})
    except (TypeError, ValueError, OverflowError) as error:
        raise UsageError(f"{kind} cannot be packed ({error}): give plain numbers, texts and lists") from None
    return cast(bytes, packed)
