"""codec: maps and spectra as answers: what was asked, its tag, and its bytes as JSON, msgpack and npy."""

import json
from collections.abc import Mapping
from dataclasses import dataclass
from io import BytesIO
from typing import Any, Literal

import msgpack
import numpy as np
from numpy.typing import NDArray
from pydantic_core import to_json

from soundrose.errors import UsageError, WireError
from soundrose.product.reduce import Pick, ReducedMap, reduce_levels
from soundrose.serve.conditional import reduction_tag
from soundrose.serve.latest import Message
from soundrose.serve.plain import plain

__all__ = [
    "JSON_BEAMS", "JSON_BINS", "Format", "MapAsk", "encode", "header_line", "levels_of", "reduced", "reduced_header",
    "spectrum_answer",
]  # fmt: skip

Format = Literal["json", "msgpack", "npy", "png"]

JSON_BINS = 512  #: of a map as JSON, unless asked for otherwise
JSON_BEAMS = 181
_DECIMALS = 3  #: of levels as text: off by at most 0.0005 dB
_ANGLE_DECIMALS = 6  #: of cone angles as text; a response header of 181 of them stays under 2.5 kB


@dataclass(frozen=True, slots=True)
class MapAsk:
    """The query of one call for a map, as checked. width, height : of a picture, pixels; levels : its scale, dB."""

    format: Format = "json"
    f_min: float | None = None
    f_max: float | None = None
    bins: int | None = None
    beams: int | None = None
    pick: Pick = "mean"
    width: int = 1000
    height: int = 620
    level_min: float | None = None
    level_max: float | None = None

    def __post_init__(self) -> None:
        if self.f_min is not None and self.f_max is not None and self.f_min > self.f_max:
            raise UsageError(f"f_min is {self.f_min:g} and f_max {self.f_max:g}; f_min must not be above f_max")
        low, high = self.level_min, self.level_max
        if low is not None and high is not None and high - low < 1:
            raise UsageError(f"level_min is {low:g} and level_max {high:g}; they must be at least 1 dB apart, rising")

    @property
    def limits(self) -> tuple[int | None, int | None]:
        """(bins, beams) in force: JSON is long, so it has limits of its own unless others are asked for."""
        if self.format != "json":
            return self.bins, self.beams
        return self.bins or JSON_BINS, self.beams or JSON_BEAMS

    def tag(self, message: Message) -> str:
        """The entity tag of the answer made of this message."""
        asked: list[Any] = [self.format, self.f_min, self.f_max, *self.limits, self.pick]
        if self.format == "png":
            asked += [self.width, self.height, self.level_min, self.level_max]
        return reduction_tag(message.header["start"], message.header["seq"], asked)


def levels_of(message: Message) -> NDArray[np.float32]:
    """(beams, bins) float32 of a published map, dB; shares its memory. WireError where data and shape disagree."""
    shape = tuple(message.header["shape"])
    data = b"" if message.data is None else message.data
    if len(shape) != 2 or len(memoryview(data).cast("B")) != 4 * shape[0] * shape[1]:
        raise WireError("published", f"a map of shape {shape} came with {len(data)} bytes; 4 for each value are due")
    return np.frombuffer(data, "<f4").reshape(shape)


def reduced(message: Message, ask: MapAsk, bins: int | None = None, beams: int | None = None) -> ReducedMap:
    """The map as asked for; bins, beams : further upper limits (of a picture's pixels). UsageError: no bin inside."""
    header, limits = message.header, ask.limits
    return reduce_levels(
        levels_of(message), header["cone_deg"], header["f0_hz"], header["df_hz"],
        bins=min((v for v in (limits[0], bins) if v is not None), default=None),
        beams=min((v for v in (limits[1], beams) if v is not None), default=None),
        f_min=ask.f_min, f_max=ask.f_max, pick=ask.pick,
    )  # fmt: skip


def reduced_header(message: Message, made: ReducedMap) -> dict[str, Any]:
    """The published keys with what the reduction changed."""
    return {
        **message.header,
        "shape": list(made.values.shape),
        "cone_deg": list(made.cone_deg),
        "f0_hz": made.f0_hz,
        "df_hz": made.df_hz,
    }


def encode(message: Message, ask: MapAsk) -> tuple[bytes, str, dict[str, str]]:
    """(body, media type, headers) of a map as json, msgpack or npy. UsageError: no bin inside what was asked."""
    made = reduced(message, ask)
    header = reduced_header(message, made)
    values = np.ascontiguousarray(made.values, "<f4")
    if ask.format == "msgpack":
        return bytes(msgpack.packb({**header, "level_db": values.tobytes()})), "application/msgpack", {}
    if ask.format == "npy":
        out = BytesIO()
        np.save(out, values, allow_pickle=False)
        return out.getvalue(), "application/x-npy", {"Soundrose-Map": header_line(header)}
    rows = np.round(values.astype(np.float64), _DECIMALS).tolist()
    return to_json({**_texts(header), "level_db": rows}), "application/json", {}


def header_line(header: Mapping[str, Any]) -> str:
    """A map's header as one line of JSON in ASCII, fit for a response header."""
    return json.dumps(_texts(header), ensure_ascii=True, allow_nan=False, separators=(",", ":"))


def spectrum_answer(message: Message, cone_deg: float) -> bytes:
    """JSON of the beam that looks nearest to `cone_deg`: nearest in cosine, in which all beams are equally wide."""
    header = message.header
    beam = int(np.argmin(np.abs(np.cos(np.radians(header["cone_deg"])) - np.cos(np.radians(cone_deg)))))
    kept = {key: value for key, value in header.items() if key not in ("shape", "cone_deg")}
    used = round(float(header["cone_deg"][beam]), _ANGLE_DECIMALS)
    levels = np.round(levels_of(message)[beam].astype(np.float64), _DECIMALS).tolist()
    return to_json({**plain(kept), "kind": "spectrum", "cone_deg": used, "level_db": levels})


def _texts(header: Mapping[str, Any]) -> dict[str, Any]:
    """The header as JSON has it: times as text too, angles without digits that mean nothing."""
    return {**plain(header), "cone_deg": [round(float(angle), _ANGLE_DECIMALS) for angle in header["cone_deg"]]}
