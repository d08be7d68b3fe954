"""process: the calls that work: maps, pictures, spectra, the array. Made in threads, tagged, 304 where known."""

from functools import partial
from typing import Annotated, Any

from fastapi import FastAPI, Query, Request, Response
from pydantic import AfterValidator, Field
from pydantic_core import to_json

from soundrose.errors import UsageError, WireError
from soundrose.product.reduce import Pick
from soundrose.serve.array_page import array_answer, band_line, channels_out
from soundrose.serve.conditional import is_known, reduction_tag
from soundrose.serve.latest import Message
from soundrose.serve.maps import Format, MapAsk, encode, header_line, reduced, reduced_header, spectrum_answer
from soundrose.serve.pictures import LARGEST, SMALLEST, Marks, Picture, draw_map, level_range, plot_size
from soundrose.serve.plain import plain
from soundrose.serve.problems import Problem
from soundrose.serve.shapes import (
    ARRAY_EXAMPLE,
    MAP_EXAMPLE,
    MAP_HEADER_EXAMPLE,
    SPECTRUM_EXAMPLE,
    ArrayAnswer,
    MapAnswer,
    SpectrumAnswer,
    problems,
    with_example,
)
from soundrose.serve.source import Source, newest
from soundrose.serve.work import Answer, Workshop
from soundrose.settings_types import BandSettings, Settings

__all__ = ["MOST_BEAMS", "MOST_BINS", "add_array", "add_maps"]

MOST_BINS = 1_048_576  #: of the parameters, far above any map
MOST_BEAMS = 1_000_000
MOST_HZ = 1e9
_TAGGED = {"Cache-Control": "no-cache"}
_ETAG = {"ETag": {"description": 'names this answer: "start-seq-hash"', "schema": {"type": "string"}}}
_NOT_MODIFIED: dict[int | str, dict[str, Any]] = {304: {"description": "If-None-Match names the newest answer."}}


def _zero_is_zero(value: float) -> float:
    return value + 0.0


Hertz = Annotated[float, Field(ge=0, le=MOST_HZ, allow_inf_nan=False), AfterValidator(_zero_is_zero)]
Decibels = Annotated[float, Field(ge=-300, le=400, allow_inf_nan=False), AfterValidator(_zero_is_zero)]
Degrees = Annotated[float, Field(ge=0, le=180, allow_inf_nan=False)]
Band = Annotated[str | None, Query(description="name of a band; the first configured by default", examples=["main"])]


def add_maps(app: FastAPI, source: Source, workshop: Workshop) -> None:
    """`/api/v1/map` and `/api/v1/spectrum`."""
    settings = source.settings

    @app.get(
        "/api/v1/map",
        operation_id="get_map",
        summary="The newest map of a band",
        response_class=Response,
        responses={200: _map_answer(), **_NOT_MODIFIED, **problems(404, 422)},
    )
    async def get_map(
        request: Request,
        band: Band = None,
        format: Annotated[Format, Query(description="`png` is a labelled picture")] = "json",
        f_min: Annotated[Hertz | None, Query(description="bins from this frequency on, Hz")] = None,
        f_max: Annotated[Hertz | None, Query(description="bins up to this frequency, Hz")] = None,
        bins: Annotated[
            int | None, Query(ge=1, le=MOST_BINS, description="at most so many bins; json: 512 unless given")
        ] = None,
        beams: Annotated[
            int | None, Query(ge=1, le=MOST_BEAMS, description="at most so many beams; json: 181 unless given")
        ] = None,
        pick: Annotated[Pick, Query(description="of neighbours joined: mean of power, or the largest")] = "mean",
        width: Annotated[int, Query(ge=SMALLEST[0], le=LARGEST[0], description="of a picture, pixels")] = 1000,
        height: Annotated[int, Query(ge=SMALLEST[1], le=LARGEST[1], description="of a picture, pixels")] = 620,
        level_min: Annotated[Decibels | None, Query(description="bottom of a picture's scale, dB")] = None,
        level_max: Annotated[Decibels | None, Query(description="top of a picture's scale, dB")] = None,
    ) -> Response:
        try:
            ask = MapAsk(format, f_min, f_max, bins, beams, pick, width, height, level_min, level_max)
        except UsageError as error:
            raise Problem(422, str(error)) from None
        name = _band(settings, band)
        message = newest(source, f"map/{name}")
        tag = ask.tag(message)
        return await _answer(request, workshop, tag, f"{name} {tag}", partial(_make_map, settings, message, ask))

    @app.get(
        "/api/v1/spectrum",
        operation_id="get_spectrum",
        summary="The newest spectrum of one beam",
        response_class=Response,
        responses={
            200: {**with_example(SPECTRUM_EXAMPLE, "The beam that looks nearest"), "model": SpectrumAnswer},
            **_NOT_MODIFIED,
            **problems(404, 422),
        },
    )
    async def get_spectrum(
        request: Request,
        cone_deg: Annotated[Degrees, Query(description="direction, degrees; the beam nearest in cosine answers")],
        band: Band = None,
    ) -> Response:
        name = _band(settings, band)
        message = newest(source, f"map/{name}")
        tag = reduction_tag(message.header["start"], message.header["seq"], ["spectrum", cone_deg + 0.0])
        return await _answer(request, workshop, tag, f"{name} {tag}", partial(_make_spectrum, message, cone_deg))


def add_array(app: FastAPI, source: Source, workshop: Workshop) -> None:
    """`/api/v1/array`."""

    @app.get(
        "/api/v1/array",
        operation_id="get_array",
        summary="Hydrophones, bands and beams, and what the array can and cannot do, predicted",
        response_class=Response,
        responses={
            200: {**with_example(ARRAY_EXAMPLE, "The array as configured"), "model": ArrayAnswer, "headers": _ETAG},
            **_NOT_MODIFIED,
        },
    )
    async def get_array(request: Request) -> Response:
        health = source.latest.get("health")
        out = channels_out(source.settings, health.header if health else None)
        tag = reduction_tag("array", len(out), [source.settings, sorted(out.items())])
        return await _answer(request, workshop, tag, tag, partial(_make_array, source.settings, out))


def _band(settings: Settings, name: str | None) -> str:
    names = [band.name for band in settings.bands]
    if name is None:
        return names[0]
    if name not in names:
        raise Problem(404, f"band is {name[:64]!r}; the bands are {', '.join(names)}", bands=names)
    return name


async def _answer(request: Request, workshop: Workshop, tag: str, key: str, work: Any) -> Response:
    """304 where the client has it, else the answer from the workshop."""
    headers = {"ETag": tag, **_TAGGED}
    if is_known(tag, request.headers.getlist("if-none-match")):
        return Response(status_code=304, headers=headers)
    try:
        answer = await workshop.make(key, work)
    except UsageError as error:
        raise Problem(422, str(error)) from None
    except WireError as error:
        raise Problem(503, f"the newest map cannot be read: {error}", headers={"Retry-After": "1"}) from None
    return Response(answer.body, media_type=answer.media_type, headers={**headers, **answer.headers})


def _make_map(settings: Settings, message: Message, ask: MapAsk) -> Answer:
    return _make_picture(settings, message, ask) if ask.format == "png" else Answer(*encode(message, ask))


def _make_spectrum(message: Message, cone_deg: float) -> Answer:
    return Answer(spectrum_answer(message, cone_deg), "application/json", {})


def _make_array(settings: Settings, out: dict[int, str]) -> Answer:
    return Answer(to_json(array_answer(settings, out)), "application/json", {})


def _make_picture(settings: Settings, message: Message, ask: MapAsk) -> Answer:
    columns, rows = plot_size(ask.width, ask.height)
    made = reduced(message, ask, columns, rows)
    texts = plain(message.header)
    times = texts["time"][:-4].replace("T", " "), texts["time_end"][11:-4] + " UTC"
    scale = level_range(made.values, ask.level_min, ask.level_max)
    marks = _marks(settings, settings.band(message.header["band"]))
    picture = Picture(made, message.header, times, _notes(settings, message), marks, scale, ask.width, ask.height)
    header = {"Soundrose-Map": header_line(reduced_header(message, made))}
    return Answer(draw_map(picture), "image/png", header)


def _marks(settings: Settings, band: BandSettings) -> Marks:
    line = band_line(settings, band, settings.array.exclude)
    speed = settings.water.sound_speed_m_s
    fall = None if line is None else line.fall_v(0.5)
    spacing = None if line is None else line.spacing_m
    return Marks(None if fall is None else fall * speed, None if spacing is None else speed / spacing)


def _notes(settings: Settings, message: Message) -> list[str]:
    """What must be known to read the picture right, the gravest first."""
    limits, notes = message.header["limits"], []
    if limits["gap"]:
        notes.append("gap: the average is not full yet")
    if not settings.calibration.given:
        notes.append("uncalibrated: levels are relative")
    if limits["clipped"] > 0:
        notes.append(f"{100 * limits['clipped']:.2g} % of samples clipped")
    if limits["channels_used"] < limits["channels"]:
        notes.append(f"{limits['channels_used']} of {limits['channels']} hydrophones")
    if limits["masked"] > 0:
        notes.append(f"{100 * limits['masked']:.2g} % under own pulses")
    return notes


def _map_answer() -> dict[str, Any]:
    """The four bodies of a map."""
    binary = {"schema": {"type": "string", "format": "binary"}}
    line = {"description": "the map's header as one line of JSON (npy and png)", "schema": {"type": "string"}}
    packed = {"schema": {"type": "string", "format": "binary"}, "description": "as json, `level_db` as f4 bytes"}
    return {
        "description": "The map. json: levels as rows; msgpack: `level_db` as little-endian f4 bytes, row after row;"
        " npy: float32 [beams, bins] with the header in Soundrose-Map; png: a labelled picture.",
        "model": MapAnswer,
        "headers": {**_ETAG, "Soundrose-Map": {**line, "example": header_line(MAP_HEADER_EXAMPLE)}},
        "content": {
            "application/json": {"example": MAP_EXAMPLE},
            "application/msgpack": {"schema": packed["schema"]},
            "application/x-npy": binary,
            "image/png": binary,
        },
    }
