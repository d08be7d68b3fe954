"""process: `GET /api/v1/history`: levels over bearing of the last hour, for a screen that was not there."""

import struct
from functools import partial
from secrets import token_hex
from typing import Annotated, Any, Literal

import msgpack
import numpy as np
from fastapi import FastAPI, Query, Response
from pydantic import BaseModel, ConfigDict, Field
from pydantic_core import to_json

from soundrose.errors import WireError
from soundrose.product.codec import rfc3339
from soundrose.product.messages import MAP_QUANTITY, MAP_UNIT, VERSION
from soundrose.serve.latest import Message
from soundrose.serve.live_frames import quantised
from soundrose.serve.maps import levels_of
from soundrose.serve.problems import Problem
from soundrose.serve.record_ring import KEPT_S, PARTS, ROW_NS, BandRing, Rows, rows_within
from soundrose.serve.shapes import problems, with_example
from soundrose.serve.source import Source
from soundrose.serve.work import Answer, Workshop

__all__ = ["HISTORY_EXAMPLE", "History", "HistoryAnswer", "add_history"]

MEMORY_BYTES = 24 * 2**20  #: for all bands together
ROWS_MOST = KEPT_S * 10**9 // ROW_NS
_JSON_ROWS = 600  #: five minutes, unless asked for otherwise
_CURSOR = r"^[0-9a-f]{8}-(0|[1-9][0-9]{0,14})$"

HISTORY_EXAMPLE: dict[str, Any] = {
    "v": VERSION, "kind": "history", "array": "aft", "band": "main", "quantity": MAP_QUANTITY, "unit": MAP_UNIT,
    "range_hz": [50.78125, 4000.0], "ranges_hz": [[50.78125, 148.4375], [152.34375, 445.3125]],
    "cone_deg": [0.0, 90.0, 180.0], "shape": [1, 3], "t_end": [1796133600500000000],
    "holes": [{"row": 0, "t": 1796133598000000000, "t_end": 1796133600000000000, "why": "gap",
               "time": "2026-12-01T13:59:58.000000Z", "time_end": "2026-12-01T14:00:00.000000Z"}],
    "next": "5f0c2f5d-1", "first": "5f0c2f5d-0", "newest_age_s": 0.4, "row_s": 0.5,
    "level_db": [[58.0, 71.5, 57.5]],
}  # fmt: skip


class History:
    """The rings of all bands, fed from what is published."""

    def __init__(self, source: Source) -> None:
        bands = source.settings.bands
        self.start = token_hex(4)
        self.rings = {b.name: BandRing(rows_within(MEMORY_BYTES, len(bands), b.beams)) for b in bands}
        source.latest.listen(self.on_message)

    def on_message(self, message: Message) -> None:
        """Take a published message; what is no readable map of a configured band is passed over."""
        ring = self.rings.get(message.topic.removeprefix("map/")) if message.topic.startswith("map/") else None
        if ring is None:
            return
        try:
            ring.add(message.header, levels_of(message))
        except WireError:
            return  # said once already, by whoever asks for the map itself

    def place(self, since: str | None) -> int:
        """The row a cursor stands before; 0 for none, or for one of another start of this process."""
        start, _, number = (since or "-0").partition("-")
        return int(number) if start == self.start else 0


class HistoryHole(BaseModel):
    """Nothing is known from `t` to `t_end`; `row` is the place in this answer of the row after it."""

    model_config = ConfigDict(extra="allow")
    row: int
    t: int
    t_end: int
    why: str


class HistoryAnswer(BaseModel):
    """Rows in the order of data time: mean power over bearing in `range_hz`, about half a second each."""

    model_config = ConfigDict(extra="allow")
    v: int
    kind: str
    array: str
    band: str
    unit: str
    range_hz: list[float] | None
    ranges_hz: list[list[float]]
    cone_deg: list[float]
    shape: list[int] = Field(min_length=2, max_length=2, description="[rows, beams]")
    t_end: list[int] = Field(description="of each row, ns since 1970 UTC, data time")
    holes: list[HistoryHole]
    first: str = Field(description="cursor of the first row here")
    next: str = Field(description="cursor behind the last row here: `since` of the next call")
    newest_age_s: float | None = Field(description="host seconds since the newest map came; null: none yet")
    row_s: float
    level_db: list[list[float]]


def add_history(app: FastAPI, source: Source, workshop: Workshop) -> History:
    """`/api/v1/history`."""
    history = History(source)
    names = list(history.rings)

    @app.get(
        "/api/v1/history",
        operation_id="get_history",
        summary="Levels over bearing of the last hour, two rows a second",
        response_class=Response,
        responses={200: _documented(), **problems(404, 422)},
    )
    async def get_history(
        band: Annotated[str | None, Query(description="name of a band; the first configured by default")] = None,
        since: Annotated[str | None, Query(pattern=_CURSOR, description="a `next` of an earlier answer")] = None,
        part: Annotated[
            int | None, Query(ge=0, lt=PARTS, description="of `ranges_hz`; the whole band by default")
        ] = None,
        span_s: Annotated[
            float | None, Query(gt=0, le=KEPT_S, allow_inf_nan=False, description="none older than this")
        ] = None,
        limit: Annotated[
            int | None, Query(ge=1, le=ROWS_MOST, description="at most so many rows, the oldest first; json: 600")
        ] = None,
        format: Annotated[Literal["json", "msgpack"], Query(description="msgpack: levels as bytes")] = "json",
    ) -> Response:
        if band is not None and band not in history.rings:
            raise Problem(404, f"band is {band[:64]!r}; the bands are {', '.join(names)}", bands=names)
        name = band or names[0]
        ring = history.rings[name]
        most = limit or (_JSON_ROWS if format == "json" else ROWS_MOST)
        if part is not None and ring.ranges_hz and part >= len(ring.ranges_hz):
            raise Problem(422, f"part is {part}; band {name} has {len(ring.ranges_hz)} ranges, counted from 0")
        span_ns = None if span_s is None else round(span_s * 1e9)
        place = history.place(since)
        rows = ring.rows(place, most, part, span_ns)
        head = _head(source, history, ring, name, part, rows)
        key = f"history {head['first']} {head['next']} {ring.count} {name} {part} {format}"
        answer = await workshop.make(key, partial(_make, head, rows, format))
        message = source.latest.get(f"map/{name}")
        age_s = None if message is None else round(source.now() - message.heard_s, 3)
        return Response(_with_age(answer.body, format, age_s), media_type=answer.media_type)

    return history


def _documented() -> dict[str, Any]:
    found: dict[str, Any] = {**with_example(HISTORY_EXAMPLE, "Rows, oldest first"), "model": HistoryAnswer}
    packed = {"schema": {"type": "string", "format": "binary"}}
    return {**found, "content": {**found["content"], "application/msgpack": packed}}


def _head(source: Source, history: History, ring: BandRing, band: str, part: int | None, rows: Rows) -> dict[str, Any]:
    ranges = [list(pair) for pair in ring.ranges_hz]
    whole = [ranges[0][0], ranges[-1][1]] if ranges else None
    return {
        "v": VERSION, "kind": "history", "array": source.settings.array.id, "band": band,
        "quantity": MAP_QUANTITY, "unit": MAP_UNIT,
        "range_hz": whole if part is None or not ranges else ranges[part], "ranges_hz": ranges,
        "cone_deg": ring.cone_deg, "shape": [len(rows.t_end), len(ring.cone_deg)], "t_end": rows.t_end.tolist(),
        "holes": [
            {"row": hole.row - rows.first, "t": hole.t, "t_end": hole.t_end, "why": hole.why,
             "time": rfc3339(hole.t), "time_end": rfc3339(hole.t_end)}
            for hole in rows.holes
        ],
        "first": f"{history.start}-{rows.first}", "next": f"{history.start}-{rows.first + len(rows.t_end)}",
        "row_s": ROW_NS / 1e9,
    }  # fmt: skip


def _make(head: dict[str, Any], rows: Rows, format: str) -> Answer:
    """The answer but for the age of the newest map, which is another each time it is asked for."""
    if format == "json":
        levels = np.round(rows.level_db.astype(np.float64), 2).tolist()
        return Answer(to_json({**head, "level_db": levels}), "application/json", {})
    floor, step, data = (0.0, 0.5, b"")
    if rows.level_db.size:
        floor, step, found = quantised(rows.level_db)
        data = found.tobytes()
    pairs = {**head, "floor_db": floor, "step_db": step, "level": data}
    packed = b"".join(msgpack.packb(key) + msgpack.packb(value) for key, value in pairs.items())
    return Answer(b"\xde" + struct.pack(">H", len(pairs) + 1) + packed, "application/msgpack", {})  # map 16


def _with_age(body: bytes, format: str, age_s: float | None) -> bytes:
    """The answer with its last pair."""
    if format == "json":
        return b"".join((body[:-1], b',"newest_age_s":', to_json(age_s), b"}"))
    return body + bytes(msgpack.packb("newest_age_s")) + bytes(msgpack.packb(age_s))
