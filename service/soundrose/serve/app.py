"""codec: the HTTP application: answers made from the newest messages, without sockets or clocks of its own."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from fastapi import FastAPI
from fastapi.responses import HTMLResponse, JSONResponse

from soundrose._version import __version__
from soundrose.product.codec import rfc3339
from soundrose.product.messages import VERSION
from soundrose.serve.latest import Latest, Message, not_ready
from soundrose.serve.problems import Problem, install_problems
from soundrose.settings_types import Settings

__all__ = ["Source", "make_app", "plain"]

_PAGE = """<!doctype html>
<html lang="en"><head><meta charset="utf-8"><title>soundrose</title></head>
<body>
<h1>soundrose {version}</h1>
<p>Array {array}: <a href="/api/v1/status">status</a>, <a href="/readyz">readiness</a>,
<a href="/docs">every call</a>.</p>
<p>Not a navigation or collision-avoidance aid. Absence of detection is not absence of an animal or a vessel; sounds
outside the bands ({bands}) are not heard at all. Decisions on mitigation are for qualified observers under the permit
and local rules in force. Levels are as good as the calibration entered. A line array cannot tell port from
starboard.</p>
</body></html>
"""


@dataclass(frozen=True, slots=True)
class Source:
    """What the application answers from. now : host monotonic clock, seconds."""

    settings: Settings
    latest: Latest
    now: Callable[[], float]


def plain(message: Message) -> dict[str, Any]:
    """A published map as a JSON object: its keys, and RFC 3339 texts beside integer nanoseconds."""
    header = dict(message.header)
    for key, text in (("t", "time"), ("t_end", "time_end"), ("service_start", "service_start_time")):
        if isinstance(header.get(key), int):
            header[text] = rfc3339(header[key])
    return header


def make_app(source: Source) -> FastAPI:
    """The application for one service."""
    app = FastAPI(
        title="soundrose",
        version=__version__,
        description="Frequency-bearing maps, hydrophone health and status of one hydrophone array.",
    )
    install_problems(app)
    _add_state_calls(app, source)
    _add_page(app, source)
    return app


def _newest(source: Source, topic: str) -> Message:
    message = source.latest.get(topic)
    if message is None:
        raise Problem(503, f"no {topic} message has come yet; ask again", headers={"Retry-After": "1"})
    return message


def _add_state_calls(app: FastAPI, source: Source) -> None:
    @app.get("/livez", summary="This process answers")
    async def livez() -> dict[str, str]:
        return {"status": "ok"}

    @app.get("/readyz", summary="Every process is up and the feed and publish addresses are bound")
    async def readyz() -> JSONResponse:
        names = not_ready(source.latest.get("status"), source.now())
        if names:
            raise Problem(503, f"not ready: {', '.join(names)}", headers={"Retry-After": "1"}, not_ready=names)
        return JSONResponse({"status": "ok"})

    @app.get("/api/v1/status", summary="The newest status message")
    async def status() -> dict[str, Any]:
        return {**plain(_newest(source, "status")), "version": __version__, "versions": [VERSION]}

    @app.get("/api/v1/health", summary="The newest health message")
    async def health() -> dict[str, Any]:
        return plain(_newest(source, "health"))


def _add_page(app: FastAPI, source: Source) -> None:
    settings = source.settings
    bands = ", ".join(f"{band.band_hz[0]:g} to {band.band_hz[1]:g} Hz" for band in settings.bands)
    page = _PAGE.format(version=__version__, array=settings.array.id, bands=bands)

    @app.get("/", response_class=HTMLResponse, include_in_schema=False)
    async def root() -> str:
        return page
