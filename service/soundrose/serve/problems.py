"""codec: errors as `application/problem+json` (RFC 9457), FastAPI's own included."""

from http import HTTPStatus
from typing import Any

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.responses import JSONResponse
from starlette.exceptions import HTTPException

__all__ = ["Problem", "install_problems", "problem_body", "problem_response"]

MEDIA_TYPE = "application/problem+json"


class Problem(Exception):
    """An answer that is an error. more : further members of the problem object; headers : of the response."""

    def __init__(self, status: int, detail: str, *, headers: dict[str, str] | None = None, **more: Any) -> None:
        self.status, self.detail, self.headers, self.more = status, detail, headers, more
        super().__init__(detail)


def problem_body(status: int, detail: str, **more: Any) -> dict[str, Any]:
    """The members of RFC 9457: `title` is the status phrase, as section 4.2.1 asks of type about:blank."""
    return {"type": "about:blank", "title": HTTPStatus(status).phrase, "status": status, "detail": detail, **more}


def problem_response(status: int, detail: str, headers: dict[str, str] | None = None, **more: Any) -> JSONResponse:
    return JSONResponse(problem_body(status, detail, **more), status, headers, MEDIA_TYPE)


def install_problems(app: FastAPI) -> None:
    """Make every error of the app a problem."""

    @app.exception_handler(Problem)
    async def on_problem(_: Request, error: Problem) -> JSONResponse:
        return problem_response(error.status, error.detail, error.headers, **error.more)

    @app.exception_handler(HTTPException)
    async def on_http(_: Request, error: HTTPException) -> JSONResponse:
        headers = dict(error.headers) if error.headers else None
        return problem_response(error.status_code, str(error.detail), headers)

    @app.exception_handler(RequestValidationError)
    async def on_validation(_: Request, error: RequestValidationError) -> JSONResponse:
        found = [
            {
                "where": ".".join(str(part) for part in item["loc"]),
                "problem": item["msg"],
                "got": repr(item.get("input")),
            }
            for item in error.errors()
        ]
        detail = "; ".join(f"{item['where']}: {item['problem']}, got {item['got']}" for item in found)
        return problem_response(422, detail, errors=found)

    @app.exception_handler(Exception)
    async def on_fault(_: Request, error: Exception) -> JSONResponse:
        return problem_response(500, f"a fault in the service: {type(error).__name__}; its log has the details")
