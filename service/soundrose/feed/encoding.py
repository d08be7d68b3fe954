"""codec: feed messages as an array sends them, values to bytes; the mirror of `decoding.decode`."""

from collections.abc import Sequence
from typing import Any, Final

import msgpack
import numpy as np
from numpy.typing import ArrayLike, NDArray

from soundrose.errors import UsageError
from soundrose.feed.wire import BYTES_PER_VALUE, NUMBERS, VERSION, Layout, SampleType, Unit

__all__ = ["encode_end", "encode_navigation", "encode_positions", "encode_pulse", "encode_samples"]

_BITS: Final = {"i2": 16, "i3": 24, "i4": 32}


def encode_samples(
    array: str,
    run: str,
    first: int,
    t_ns: int,
    rate_hz: float,
    samples: ArrayLike,
    *,
    type: SampleType = "f4",
    layout: Layout = "channel",
    unit: Unit = "count",
) -> list[bytes]:
    """The two frames of one block.

    Parameters
    ----------
    samples : (channels, samples); integers within the range of `type`, or for `f4` any real numbers.

    Raises
    ------
    UsageError
        if `samples` is not two-dimensional, does not fit `type`, or a word is not known.
    """
    values = np.asarray(samples)
    if values.ndim != 2:
        raise UsageError(f"samples have shape {values.shape}; give (channels, samples)")
    if type not in BYTES_PER_VALUE or layout not in ("channel", "sample"):
        raise UsageError(
            f"type {type!r}, layout {layout!r}: use one of {', '.join(BYTES_PER_VALUE)}; channel or sample"
        )
    header = {
        "v": VERSION, "kind": "samples", "array": array, "run": run, "first": int(first), "t": int(t_ns),
        "rate": rate_hz, "shape": list(values.shape), "layout": layout, "type": type, "unit": unit,
    }  # fmt: skip
    return [_packed(header), _raw(values if layout == "channel" else values.T, type)]


def _raw(values: NDArray[Any], type: SampleType) -> bytes:
    """Little-endian bytes of `values`, in C order."""
    if type == "f4":
        return values.astype("<f4").tobytes()
    half = 2 ** (_BITS[type] - 1)
    if values.dtype.kind not in "iu" or (values.size and (values.min() < -half or values.max() >= half)):
        raise UsageError(f"samples of dtype {values.dtype} do not fit {type}; give integers from {-half} to {half - 1}")
    if type == "i3":
        return np.ascontiguousarray(values, dtype="<i4").view(np.uint8).reshape(*values.shape, 4)[..., :3].tobytes()
    return values.astype("<" + type).tobytes()


def encode_navigation(array: str, t_ns: int, *, of: str = "array", **values: float | str) -> list[bytes]:
    """The one frame of a navigation message. values : its optional keys. UsageError for a key that is not one."""
    for key in values:
        if key not in NUMBERS and key != "heading_from":
            raise UsageError(f"navigation has no key {key!r}; its keys are {', '.join(NUMBERS)}, heading_from")
    return [_note("navigation", array, t_ns, of=of, **values)]


def encode_positions(array: str, t_ns: int, positions_m: ArrayLike | Sequence[Sequence[float]]) -> list[bytes]:
    """The one frame of a positions message. positions_m : (channels, 3), metres. UsageError for another shape."""
    positions = np.asarray(positions_m, dtype=np.float64)
    if positions.ndim != 2 or positions.shape[1] != 3:
        raise UsageError(f"positions have shape {positions.shape}; give (channels, 3)")
    return [_note("positions", array, t_ns, positions_m=positions.tolist())]


def encode_pulse(array: str, t_ns: int, source: str, length_s: float) -> list[bytes]:
    """The one frame that says: our own `source` fires at `t_ns` for `length_s`."""
    return [_note("pulse", array, t_ns, source=source, length_s=length_s)]


def encode_end(array: str, run: str) -> list[bytes]:
    """The one frame that ends a run."""
    return [_packed({"v": VERSION, "kind": "end", "array": array, "run": run})]


def _note(kind: str, array: str, t_ns: int, **keys: Any) -> bytes:
    return _packed({"v": VERSION, "kind": kind, "array": array, "t": int(t_ns), **keys})


def _packed(header: dict[str, Any]) -> bytes:
    return bytes(msgpack.packb(header))
