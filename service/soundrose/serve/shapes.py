"""codec: what answers look like, for the OpenAPI document: shapes, examples, problems. Readers ignore keys unknown."""

from collections.abc import Mapping
from typing import Annotated, Any

from pydantic import BaseModel, ConfigDict, Field

from soundrose.product.messages import MAP_QUANTITY, MAP_UNIT
from soundrose.serve.problems import MEDIA_TYPE, problem_body

__all__ = [
    "ARRAY_EXAMPLE", "HEALTH_EXAMPLE", "LEVELS_EXAMPLE", "MAP_EXAMPLE", "MAP_HEADER_EXAMPLE", "SPECTRUM_EXAMPLE",
    "STATUS_EXAMPLE", "ArrayAnswer", "HealthAnswer", "LevelsAnswer", "LiveAnswer", "MapAnswer", "MapHeader",
    "ProblemAnswer", "SpectrumAnswer", "StatusAnswer", "any_problem", "problems", "with_example",
]  # fmt: skip

Nanoseconds = Annotated[int, Field(description="ns since 1970-01-01T00:00:00 UTC")]
Moment = Annotated[str, Field(description="RFC 3339, UTC, microseconds", json_schema_extra={"format": "date-time"})]
Start = Annotated[str, Field(pattern="^[0-9a-f]{16}$", description="names the start of the process that sent it")]
Angle = Annotated[float, Field(ge=0, le=180, description="cone angle, degrees: 0 forward, 90 broadside, 180 aft")]


class _Open(BaseModel):
    model_config = ConfigDict(extra="allow")


class ProblemAnswer(_Open):
    """RFC 9457. `detail` says what was got, what is allowed and how to mend it."""

    type: str
    title: str
    status: int
    detail: str


class LiveAnswer(_Open):
    status: str


class _Published(_Open):
    v: int
    kind: str
    array: str
    seq: int = Field(ge=0)
    start: Start


class Limits(_Open):
    """What to know to read a map right."""

    channels_used: int
    channels: int
    gap: bool = Field(description="a gap lies within 3 averaging times")
    clipped: float = Field(ge=0, le=1, description="share of samples at full scale")
    alias_hz: float | None = Field(description="alias onset of the broadside beam; null: none in the band")
    masked: float = Field(ge=0, le=1, description="share of the span under own pulses")


class MapHeader(_Published):
    """A published map without its levels."""

    band: str
    run: str
    t: Nanoseconds
    t_end: Nanoseconds
    time: Moment
    time_end: Moment
    span_s: float = Field(description="time constant of the average, 0: one frame")
    averages: float = Field(description="variance-equivalent independent averages of one published bin")
    f0_hz: float
    df_hz: float
    quantity: str
    unit: str
    limits: Limits
    latency_ms: float | None


class MapAnswer(MapHeader):
    shape: list[int] = Field(min_length=2, max_length=2, description="[beams, bins]")
    cone_deg: list[Angle]
    level_db: list[list[float]] = Field(description="one row per beam, as `cone_deg`; thousandths of a decibel")


class SpectrumAnswer(MapHeader):
    cone_deg: Angle
    level_db: list[float]


class Channel(_Open):
    i: int
    state: str
    level_db: float | None
    why: str | None


class HealthAnswer(_Published):
    t: Nanoseconds
    time: Moment
    used: int
    channels: list[Channel]


class LevelsAnswer(_Published):
    """Decidecade levels of the array average, and percentiles."""


class ProcessState(_Open):
    name: str
    state: str
    pid: int | None
    restarts: int


class StatusAnswer(_Published):
    state: str = Field(description="waiting, running or stalled; treat another word as 'other'")
    service_start: Nanoseconds
    service_start_time: Moment
    version: str
    versions: list[int] = Field(description="of this interface that are spoken")
    processes: list[ProcessState]
    bands: dict[str, Any]


class Hydrophone(_Open):
    i: int
    position_m: list[float] = Field(min_length=3, max_length=3, description="x, y, z from the mean of all listed")
    used: bool
    why: str | None


class Beam(_Open):
    cone_deg: Angle
    alias_hz: float | None = Field(description="from here on this beam hears a second direction as loudly")


class LevelError(_Open):
    """dB that a beam on a point source reads too low (negative), by exact spherical wavefronts."""

    far_field: float
    half: float
    quarter: float


class LimitAt(_Open):
    cone_deg: Angle
    beamwidth_deg: float | None = Field(description="half-power width; null where the beam falls to half on no side")
    array_gain_db: float = Field(description="over one hydrophone, in isotropic noise")
    far_field_m: float = Field(description="(L sin)^2 / wavelength")
    level_error_db: LevelError


class LimitsAtFrequency(_Open):
    f_hz: float
    wavelength_m: float
    at: list[LimitAt]


class Pattern(_Open):
    f_hz: float
    wave_cone_deg: float
    level_db: list[float] = Field(description="of each beam, dB re the wave")


class ArrayBand(_Open):
    name: str
    band_hz: list[float]
    channels: list[int]
    channels_used: list[int]
    weights: list[float] | None
    spacing_m: float | None
    transit_s: float
    beams: list[Beam]
    limits: list[LimitsAtFrequency]
    pattern: list[Pattern]


class ArrayAnswer(_Open):
    v: int
    array: str
    sound_speed_m_s: float
    calibrated: bool
    length_m: float
    transit_s: float
    used: int
    hydrophones: list[Hydrophone]
    bands: list[ArrayBand]


_TEXTS = {
    400: "Not HTTP/1.1, or a body that is not text in UTF-8.",
    403: "Host is not a name of this service, Origin is another, or a POST is not JSON.",
    404: "There is no such band.",
    408: "The body did not come in time.",
    413: "The body is too large.",
    422: "A parameter cannot be read, is out of range, or leaves nothing.",
    429: "Too many requests from one address; Retry-After says when to ask again.",
    431: "Request line and headers are too long.",
    503: "Not there yet, or too much in work; Retry-After says when to ask again.",
}


def problems(*statuses: int, **texts: str) -> dict[int | str, dict[str, Any]]:
    """`responses` of a call: errors of these statuses. texts : s503="..." in place of the usual words."""
    words = {**{status: _TEXTS[status] for status in statuses}, **{int(k[1:]): text for k, text in texts.items()}}
    return {
        status: {
            "description": text,
            "content": {MEDIA_TYPE: {"example": problem_body(status, text)}},
            **({"headers": _RETRY} if status in (429, 503) else {}),
        }
        for status, text in words.items()
    }


def any_problem() -> dict[int | str, dict[str, Any]]:
    """`responses` that every call may have."""
    return problems(400, 403, 408, 413, 429, 431, 503)


_RETRY = {"Retry-After": {"description": "seconds", "schema": {"type": "integer", "minimum": 1}}}


def with_example(example: Mapping[str, Any], description: str) -> dict[str, Any]:
    """A 200 answer in JSON with its example."""
    return {"description": description, "content": {"application/json": {"example": dict(example)}}}


_ENVELOPE = {"v": 1, "kind": "map", "array": "aft", "seq": 1204, "start": "5f0c2f5d9a1e77b3"}
_WHEN = {
    "t": 1796133600000000000, "t_end": 1796133600256000000,
    "time": "2026-12-01T14:00:00.000000Z", "time_end": "2026-12-01T14:00:00.256000Z",
}  # fmt: skip
MAP_HEADER_EXAMPLE: dict[str, Any] = {
    **_ENVELOPE, "band": "main", "run": "survey-7", **_WHEN, "span_s": 2.0, "averages": 21.4, "shape": [3, 2],
    "cone_deg": [0.0, 90.0, 180.0], "f0_hz": 1000.0, "df_hz": 3.90625, "quantity": MAP_QUANTITY, "unit": MAP_UNIT,
    "limits": {"channels_used": 47, "channels": 48, "gap": False, "clipped": 0.0, "alias_hz": 4000.0, "masked": 0.0},
    "latency_ms": 6.2,
}  # fmt: skip
MAP_EXAMPLE = {**MAP_HEADER_EXAMPLE, "level_db": [[58.214, 57.903], [71.02, 70.877], [57.66, 58.101]]}
SPECTRUM_EXAMPLE = {
    **{key: value for key, value in MAP_HEADER_EXAMPLE.items() if key != "shape"},
    "kind": "spectrum", "cone_deg": 90.0, "level_db": [71.02, 70.877],
}  # fmt: skip
HEALTH_EXAMPLE = {
    **_ENVELOPE, "kind": "health", "t": _WHEN["t"], "time": _WHEN["time"], "used": 47,
    "channels": [
        {"i": 0, "state": "good", "level_db": 92.1, "why": None},
        {"i": 1, "state": "dead", "level_db": -300.0, "why": "no variation"},
    ],
}  # fmt: skip
STATUS_EXAMPLE = {
    **_ENVELOPE, "kind": "status", "state": "running", "service_start": 1796130000000000000,
    "service_start_time": "2026-12-01T13:00:00.000000Z", "run": "survey-7", "next": 57_600_000, "blocks": 56250,
    "samples": 57_600_000, "gaps": 0, "lost_samples": 0, "dropped": {}, "version": "0.1.0", "versions": [1],
    "processes": [{"name": "ingest", "state": "up", "pid": 412, "restarts": 0, "since": 1796130000000000000}],
    "bands": {"main": {
        "load": 0.06, "latency_ms": {"p50": 5.9, "p99": 9.1}, "maps": 28125, "dropped_hops": 0, "gaps": 0,
        "stale": False, "kernel": "pairs",
    }},
    "load": 0.06, "latency_ms": {"p50": 5.9, "p99": 9.1},
}  # fmt: skip
LEVELS_EXAMPLE = {**_ENVELOPE, "kind": "levels"}
ARRAY_EXAMPLE = {
    "v": 1, "array": "aft", "sound_speed_m_s": 1500.0, "calibrated": True, "length_m": 17.625, "transit_s": 0.01175,
    "used": 48, "hydrophones": [{"i": 0, "position_m": [8.8125, 0.0, 0.0], "used": True, "why": None}],
    "bands": [{
        "name": "main", "band_hz": [50.0, 4000.0], "channels": [0], "channels_used": [0], "weights": [1.0],
        "spacing_m": 0.375, "transit_s": 0.01175, "beams": [{"cone_deg": 90.0, "alias_hz": 4000.0}],
        "limits": [{"f_hz": 4000.0, "wavelength_m": 0.375, "at": [{
            "cone_deg": 90.0, "beamwidth_deg": 1.76, "array_gain_db": 14.946, "far_field_m": 864.0,
            "level_error_db": {"far_field": -0.057, "half": -0.228, "quarter": -0.876},
        }]}],
        "pattern": [{"f_hz": 4000.0, "wave_cone_deg": 90.0, "level_db": [0.0]}],
    }],
}  # fmt: skip
