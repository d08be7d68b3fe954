"""codec: errors as `application/problem+json` (RFC 9457), FastAPI's own included."""

from collections.abc import Mapping
from http import HTTPStatus
from typing import Any

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import JSONResponse, Response
from starlette.exceptions import HTTPException
from starlette.routing import BaseRoute, Match
from starlette.types import Receive, Scope, Send

__all__ = ["MEDIA_TYPE", "Problem", "install_problems", "problem_body", "problem_response", "refuse"]

MEDIA_TYPE = "application/problem+json"
_SHOWN = 120  #: characters of what a client sent that an answer repeats


class Problem(Exception):
    """An answer that is an error. more : further members of the problem object; headers : of the response."""

    def __init__(self, status: int, detail: str, *, headers: dict[str, str] | None = None, **more: Any) -> None:
        self.status, self.detail, self.headers, self.more = status, detail, headers, more
        super().__init__(detail)


def problem_body(status: int, detail: str, **more: Any) -> dict[str, Any]:
    """The members of RFC 9457: `title` is the status phrase, as section 4.2.1 asks of type about:blank."""
    return {"type": "about:blank", "title": HTTPStatus(status).phrase, "status": status, "detail": detail, **more}


def problem_response(
    status: int, detail: str, headers: Mapping[str, str] | None = None, **more: Any
) -> JSONResponse:  # fmt: skip
    return JSONResponse(problem_body(status, detail, **more), status, headers, MEDIA_TYPE)


async def refuse(
    scope: Scope, receive: Receive, send: Send, status: int, detail: str, headers: Mapping[str, str] | None = None
) -> None:
    """Answer a request, or one to open a websocket, with a problem.

    Where the server cannot answer a websocket before it is open, it is closed, which reads as 403.
    """
    if scope["type"] == "websocket" and "websocket.http.response" not in scope.get("extensions", {}):
        await receive()
        await send({"type": "websocket.close", "code": 1008, "reason": detail[:_SHOWN]})
        return
    await problem_response(status, detail, headers)(scope, receive, send)


def install_problems(app: FastAPI) -> None:
    """Make every error of the app a problem, and answer OPTIONS with the methods a path has."""

    @app.exception_handler(Problem)
    async def on_problem(_: Request, error: Problem) -> JSONResponse:
        return problem_response(error.status, error.detail, error.headers, **error.more)

    @app.exception_handler(HTTPException)
    async def on_http(request: Request, error: HTTPException) -> Response:
        if error.status_code == HTTPStatus.METHOD_NOT_ALLOWED:
            return _other_method(request, allowed_methods(app.routes, request.scope))
        if error.status_code == HTTPStatus.NOT_FOUND:
            return problem_response(404, f"nothing is at {request.url.path[:_SHOWN]!r}; every call is listed at /api")
        headers = dict(error.headers) if error.headers else None
        return problem_response(error.status_code, str(error.detail), headers)

    @app.exception_handler(RequestValidationError)
    async def on_validation(_: Request, error: RequestValidationError) -> JSONResponse:
        found = [
            {
                "where": ".".join(str(part) for part in item["loc"]),
                "problem": item["msg"],
                "got": repr(item.get("input"))[:_SHOWN],
            }
            for item in error.errors()
        ]
        detail = "; ".join(f"{item['where']}: {item['problem']}, got {item['got']}" for item in found)
        return problem_response(422, detail, errors=found)

    @app.exception_handler(Exception)
    async def on_fault(_: Request, error: Exception) -> JSONResponse:
        return problem_response(500, f"a fault in the service: {type(error).__name__}; its log has the details")


def allowed_methods(routes: list[BaseRoute], scope: Scope) -> list[str]:
    """What a path can be asked for: HEAD goes with GET, OPTIONS with all."""
    methods = {"OPTIONS"}
    for route in routes:
        match, _ = route.matches(scope)
        if match is not Match.NONE:
            methods.update(getattr(route, "methods", None) or ())
    return sorted(methods | ({"HEAD"} if "GET" in methods else set()))


def _other_method(request: Request, allowed: list[str]) -> Response:
    allow = {"Allow": ", ".join(allowed)}
    if request.method == "OPTIONS":
        return Response(status_code=204, headers=allow)
    return problem_response(405, f"{request.method[:_SHOWN]} is not for this path; it takes {allow['Allow']}", allow)
