"""codec: feed messages, bytes to values: one msgpack map, then for samples the raw bytes.

Whatever the bytes, `decode` returns a message or raises `WireError` with the first reason that applies, in the order
of `wire.REASONS`; it costs bounded memory and time. Nothing here knows who sent the bytes, or what came before.
"""

from collections.abc import Callable, Mapping, Sequence
from math import isfinite
from typing import Any, Final, NoReturn, TypeGuard, cast

import msgpack
import numpy as np

from soundrose.errors import WireError
from soundrose.feed.hop import Navigation, Positions, Pulse
from soundrose.feed.wire import (
    BYTES_PER_VALUE,
    DATA_LIMIT,
    FIRST_LIMIT,
    HEADER_LIMIT,
    LAYOUTS,
    NUMBERS,
    OF,
    PLACE_LIMIT_M,
    PULSE_LIMIT_S,
    TIME_LIMIT,
    UNITS,
    VERSION,
    Expected,
    Message,
    Octets,
    RunEndMessage,
    Samples,
    SampleType,
)

__all__ = ["decode"]

# Lengths that the first reading allows. A list is allocated by the length it claims, so that nested claims of 64 Ki
# elements would take half a gigabyte; within these they take 8 MiB. A longer header is proved whole before it is read.
_SHORT: Final = {"max_array_len": 1024, "max_map_len": 256}
_UNREADABLE: Final = (ValueError, TypeError, OverflowError, RecursionError, msgpack.UnpackException)


def decode(parts: Sequence[Octets], expected: Expected) -> Message:
    """One message from the frames that came.

    Raises
    ------
    WireError
        with the first of `REASONS` (up to `bytes`) that applies.
    """
    count = len(parts)
    if count != 1 and count != 2:
        raise WireError("frames", f"got {count} frames; a message has one, samples have two")
    head = _octets(parts[0])
    data = _octets(parts[1]) if count == 2 else None
    if len(head) > HEADER_LIMIT:
        raise WireError("size", f"the map has {len(head)} bytes; at most {HEADER_LIMIT}")
    try:
        header = _unpack(head)
    except WireError:
        _check_size(data)
        raise
    kind = header.get("kind")
    wanted = _FRAMES.get(kind) if isinstance(kind, str) else None
    if wanted is not None and wanted != count:
        raise WireError("frames", f"got {count} frames; {kind} has {wanted}")
    _check_size(data)
    version = header.get("v")
    if type(version) is not int or version != VERSION:
        raise WireError("version", f"v is {_shown(version)}; this service speaks the integer {VERSION}")
    if wanted is None or kind is None:
        raise WireError("kind", f"kind is {_shown(kind)}; known are {', '.join(_FRAMES)}")
    if header.get("array") != expected.array:
        raise WireError("array", f"array is {_shown(header.get('array'))}; this service listens to {expected.array!r}")
    if data is not None:
        return _samples(header, data, expected)
    return _ONE_FRAME[kind](header, expected)


def _octets(part: Octets) -> Octets:
    """The same bytes as a buffer whose length is in bytes; copied only where they do not lie in a row."""
    if type(part) is bytes:
        return part
    view = memoryview(part)
    if view.format == "B" and view.ndim == 1 and view.contiguous:
        return view
    return view.tobytes()


def _check_size(data: Octets | None) -> None:
    if data is not None and len(data) > DATA_LIMIT:
        raise WireError("size", f"the samples have {len(data)} bytes; at most {DATA_LIMIT}")


def _unpack(head: Octets) -> dict[str, Any]:
    """The map of a header; WireError `msgpack` if it is none."""
    try:
        header = msgpack.unpackb(head, **_SHORT)
    except _UNREADABLE:
        header = _unpack_long(head)
    if type(header) is not dict:
        raise WireError("msgpack", f"the first frame is {_shown(header)}; it must be a map")
    for key in header:
        if type(key) is not str:
            raise WireError("msgpack", f"the map has the key {_shown(key)}; keys are text")
    return header


def _unpack_long(head: Octets) -> Any:
    """Read a header with long lists: first walk it without building anything, so that no claimed length is believed."""
    try:
        walker = msgpack.Unpacker(max_buffer_size=HEADER_LIMIT)
        walker.feed(head)
        walker.skip()
        return msgpack.unpackb(head)
    except _UNREADABLE as error:
        text = str(error)[:100] or type(error).__name__
        raise WireError("msgpack", f"the map cannot be decoded: {text}") from None


def _shown(value: object) -> str:
    """A value for an error's text: short, and never the depths of a hostile one."""
    if value is None:
        return "missing"
    if isinstance(value, str | bytes):
        return repr(value[:40]) + ("..." if len(value) > 40 else "")
    return repr(value) if isinstance(value, bool | int | float) else f"a {type(value).__name__}"


def _bad_key(key: str, value: object, allowed: str) -> NoReturn:
    raise WireError("key", f"{key} is {_shown(value)}; it must be {allowed}")


def _text(header: Mapping[str, Any], key: str) -> str:
    value = header.get(key)
    if not isinstance(value, str):
        _bad_key(key, value, "text")
    return value


def _whole(header: Mapping[str, Any], key: str, below: int) -> int:
    value = header.get(key)
    if type(value) is not int or not 0 <= value < below:
        _bad_key(key, value, f"an integer from 0 to {below - 1}")
    return value


def _integers(header: Mapping[str, Any], key: str) -> list[int]:
    value = header.get(key)
    if type(value) is not list:
        _bad_key(key, value, "a list of integers")
    for n in value:
        if type(n) is not int:
            _bad_key(key, n, "a list of integers")
    return value


def _is_number(value: object) -> TypeGuard[int | float]:
    return type(value) is int or (type(value) is float and isfinite(value))


def _samples(header: Mapping[str, Any], data: Octets, expected: Expected) -> Samples:
    get = header.get
    run = _text(header, "run")
    first = _whole(header, "first", FIRST_LIMIT)
    t_ns = _whole(header, "t", TIME_LIMIT)
    rate, layout, kind, unit = get("rate"), get("layout"), get("type"), get("unit")
    if not _is_number(rate):
        _bad_key("rate", rate, "a finite number")
    shape = _integers(header, "shape")
    if layout not in LAYOUTS:
        _bad_key("layout", layout, " or ".join(LAYOUTS))
    if type(kind) is not str:
        _bad_key("type", kind, "text")
    if unit not in UNITS:
        _bad_key("unit", unit, ", ".join(UNITS))
    if unit != "count" and kind != "f4" and kind in BYTES_PER_VALUE:
        _bad_key("unit", unit, f"count for the type {kind}; V and uPa need f4")
    if rate != expected.rate_hz:
        raise WireError("rate", f"rate is {rate!r}; this feed runs at {expected.rate_hz!r} Hz")
    width = BYTES_PER_VALUE.get(kind)
    if width is None:
        raise WireError("type", f"type is {_shown(kind)}; known are {', '.join(BYTES_PER_VALUE)}")
    channels = expected.channels
    if len(shape) != 2 or shape[0] != channels or not 1 <= shape[1] <= rate:
        shown = shape if len(shape) <= 4 else f"a list of {len(shape)}"
        raise WireError("shape", f"shape is {shown}; it must be [{channels}, 1 to {int(rate)}]")
    samples = shape[1]
    if len(data) != channels * samples * width:
        raise WireError("bytes", f"got {len(data)} bytes; {shape} of {kind} has {channels * samples * width}")
    return Samples(run, first, t_ns, channels, samples, layout, cast(SampleType, kind), unit, data)


def _navigation(header: Mapping[str, Any], expected: Expected) -> Navigation:
    t_ns = _whole(header, "t", TIME_LIMIT)
    of = header.get("of")
    if of is None:
        of = "array"
    if of not in OF:
        _bad_key("of", of, " or ".join(OF))
    values: dict[str, float | str] = {}
    for key, (least, greatest) in NUMBERS.items():
        value = header.get(key)
        if value is None:
            continue
        if not _is_number(value) or not least <= value <= greatest:
            _bad_key(key, value, f"a number from {least:g} to {greatest:g}")
        values[key] = float(value)
    if header.get("heading_from") is not None:
        values["heading_from"] = _text(header, "heading_from")
    return Navigation(t_ns, of, values)


def _positions(header: Mapping[str, Any], expected: Expected) -> Positions:
    t_ns = _whole(header, "t", TIME_LIMIT)
    listed = header.get("positions_m")
    if type(listed) is not list:
        _bad_key("positions_m", listed, "a list of [x, y, z]")
    for place in listed:
        if type(place) is not list or len(place) != 3:
            _bad_key("positions_m", place, "a list of [x, y, z]")
        for metres in place:
            if not _is_number(metres) or abs(metres) > PLACE_LIMIT_M:
                _bad_key("positions_m", metres, f"metres within +-{PLACE_LIMIT_M:g}")
    if len(listed) != expected.channels:
        raise WireError("shape", f"got {len(listed)} positions; the array has {expected.channels} hydrophones")
    positions = np.array(listed, dtype=np.float64).reshape(-1, 3)
    positions.flags.writeable = False
    return Positions(t_ns, positions)


def _pulse(header: Mapping[str, Any], expected: Expected) -> Pulse:
    t_ns = _whole(header, "t", TIME_LIMIT)
    source = _text(header, "source")
    length = header.get("length_s")
    if not _is_number(length) or not 0 <= length <= PULSE_LIMIT_S:
        _bad_key("length_s", length, f"seconds from 0 to {PULSE_LIMIT_S:g}")
    return Pulse(t_ns, source, float(length))


def _end(header: Mapping[str, Any], expected: Expected) -> RunEndMessage:
    return RunEndMessage(_text(header, "run"))


_ONE_FRAME: Final[Mapping[str, Callable[[Mapping[str, Any], Expected], Message]]] = {
    "navigation": _navigation,
    "positions": _positions,
    "pulse": _pulse,
    "end": _end,
}
_FRAMES: Final[Mapping[str, int]] = {"samples": 2, **dict.fromkeys(_ONE_FRAME, 1)}
