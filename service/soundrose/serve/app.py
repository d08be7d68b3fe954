"""codec: the HTTP application: answers made from the newest messages, without sockets or clocks of its own."""

from collections.abc import Callable
from typing import Any

from fastapi import FastAPI
from fastapi.responses import JSONResponse
from starlette.types import ASGIApp

from soundrose._version import __version__
from soundrose.product.messages import VERSION
from soundrose.serve.display_files import add_display, find_display
from soundrose.serve.document import install_document
from soundrose.serve.guard import Guard
from soundrose.serve.history import add_history
from soundrose.serve.latest import not_ready
from soundrose.serve.limits import Allowance, Headed, Limited
from soundrose.serve.map_calls import add_array, add_maps
from soundrose.serve.pages import add_pages
from soundrose.serve.plain import plain
from soundrose.serve.problems import Problem, install_problems
from soundrose.serve.shapes import (
    HEALTH_EXAMPLE,
    LEVELS_EXAMPLE,
    STATUS_EXAMPLE,
    HealthAnswer,
    LevelsAnswer,
    LiveAnswer,
    StatusAnswer,
    problems,
    with_example,
)
from soundrose.serve.source import Source, newest
from soundrose.serve.work import Workshop

__all__ = ["Source", "dress", "make_app", "plain"]

_ABOUT = (
    "Frequency-bearing maps, hydrophone health and status of one hydrophone array. Readers ignore keys they do not "
    "know and treat an unknown word of an enumeration as 'other'. Not a navigation or collision-avoidance aid."
)


def make_app(source: Source, workshop: Workshop | None = None) -> FastAPI:
    """The application for one service; `dress` puts guard and limits around it.

    workshop : where answers are made; one of its own if not given.
    """
    app = FastAPI(
        title="soundrose",
        version=__version__,
        summary="Real-time beamforming of a hydrophone line array",
        description=_ABOUT,
        docs_url=None,  # theirs load scripts from elsewhere; there is no network aboard
        redoc_url=None,
        redirect_slashes=False,
        separate_input_output_schemas=False,
    )
    workshop = workshop or Workshop()
    install_problems(app)
    _add_watch_calls(app, source)
    _add_topic_calls(app, source)
    add_maps(app, source, workshop)
    add_array(app, source, workshop)
    add_history(app, source, workshop)
    add_pages(app, source.settings)
    add_display(app, find_display())
    install_document(app)
    return app


def dress(app: ASGIApp, hosts: frozenset[str], now: Callable[[], float], allowance: Allowance | None = None) -> ASGIApp:
    """The application as clients meet it: security headers on every answer, then limits, then the guard.

    hosts : values of Host that are ours (`host_names`).  now : monotonic clock, seconds.
    """
    return Headed(Limited(Guard(app, hosts), now, allowance or Allowance()))


def _add_watch_calls(app: FastAPI, source: Source) -> None:
    ok = with_example({"status": "ok"}, "Yes")

    @app.get(
        "/livez", operation_id="get_livez", summary="This process answers", response_model=LiveAnswer,
        responses={200: ok},
    )  # fmt: skip
    async def livez() -> JSONResponse:
        return JSONResponse({"status": "ok"})

    @app.get(
        "/readyz", operation_id="get_readyz", response_model=LiveAnswer,
        summary="Every process is up and the feed and publish addresses are bound",
        responses={200: ok, **problems(s503="Not ready; `not_ready` names what is not up.")},
    )  # fmt: skip
    async def readyz() -> JSONResponse:
        names = not_ready(source.latest.get("status"), source.now())
        if names:
            raise Problem(503, f"not ready: {', '.join(names)}", headers={"Retry-After": "1"}, not_ready=names)
        return JSONResponse({"status": "ok"})


def _add_topic_calls(app: FastAPI, source: Source) -> None:
    """The newest message of a topic, as it is."""

    @app.get(
        "/api/v1/status", operation_id="get_status", summary="The newest status message", response_model=StatusAnswer,
        responses={200: with_example(STATUS_EXAMPLE, "Status, with versions")},
    )  # fmt: skip
    async def status() -> JSONResponse:
        return _json({**plain(newest(source, "status").header), "version": __version__, "versions": [VERSION]})

    @app.get(
        "/api/v1/health", operation_id="get_health", summary="The newest state of every hydrophone",
        response_model=HealthAnswer, responses={200: with_example(HEALTH_EXAMPLE, "Health")},
    )  # fmt: skip
    async def health() -> JSONResponse:
        return _json(plain(newest(source, "health").header))

    @app.get(
        "/api/v1/levels", operation_id="get_levels", summary="The newest decidecade levels of the array average",
        response_model=LevelsAnswer, responses={200: with_example(LEVELS_EXAMPLE, "Levels")},
    )  # fmt: skip
    async def levels() -> JSONResponse:
        return _json(plain(newest(source, "levels").header))


def _json(answer: dict[str, Any]) -> JSONResponse:
    return JSONResponse(answer)
