"""codec: the calls about events: pages of the log, detections, operator's notes."""

from collections.abc import Awaitable, Mapping
from typing import Annotated, Any, Protocol

from fastapi import FastAPI, Header, Query, Response
from pydantic import BaseModel, ConfigDict, Field

from soundrose.contact.commands import BY_CHARACTERS, ID_CHARACTERS, NOTE_CHARACTERS, Answer
from soundrose.serve.events import KINDS
from soundrose.serve.problems import Problem
from soundrose.store.event_reader import MOST_ITEMS

__all__ = ["Ask", "EventItem", "EventPage", "NoteBody", "Pages", "add_events"]

_CURSOR = "3f2a90c1d4e5b677-1042"
_EVENT = {
    "cursor": _CURSOR,
    "kind": "health",
    "t": 1796133600000000000,
    "time": "2026-12-01T14:00:00.000000Z",
    "recorded": 1796133600412345678,
    "channel": 17,
    "from": "good",
    "to": "dead",
    "why": "no variation",
    "level_db": -300.0,
}
_BY, _TEXT = "second officer", "Slowed to 4 knots to recover the tail buoy."
_NOTE = {
    "cursor": "3f2a90c1d4e5b677-1043",
    "kind": "note",
    "t": 1796133661000000000,
    "time": "2026-12-01T14:01:01.000000Z",
    "recorded": 1796133661000000000,
    "by": _BY,
    "text": _TEXT,
}


class EventItem(BaseModel):
    """One event; the keys beside these follow from its kind (docs/events.md)."""

    model_config = ConfigDict(extra="allow")

    cursor: str = Field(description="The place after this event: a `since` for what came later.")
    kind: str = Field(description=f"One of {', '.join(KINDS)}; more may come.")
    t: int = Field(description="Feed time or host time, as the kind says, ns since 1970 UTC.")
    time: str = Field(description="`t` as RFC 3339.")
    recorded: int = Field(description="Host time at which the log took it, ns since 1970 UTC.")


class EventPage(BaseModel):
    """Events in the order of the log."""

    items: list[EventItem]
    next: str = Field(description="The `since` of the next call. Good after an empty answer, too.")


class NoteBody(BaseModel):
    """An operator's note."""

    model_config = ConfigDict(extra="forbid", json_schema_extra={"example": {"by": _BY, "note": _TEXT}})

    by: Annotated[str, Field(min_length=1, max_length=BY_CHARACTERS, description="Who writes it.")]
    note: Annotated[str, Field(min_length=1, max_length=NOTE_CHARACTERS, description="What is to be remembered.")]


class Pages(Protocol):
    """What gives pages: `EventTap`."""

    def since(
        self, cursor: str | None, kinds: list[str] | None = None, limit: int = 100
    ) -> Awaitable[tuple[list[dict[str, Any]], str]]: ...


class Ask(Protocol):
    """What takes commands: `CommandClient`."""

    def ask(self, name: str, arguments: Mapping[str, Any], command_id: str | None = None) -> Awaitable[Answer]: ...


_Since = Annotated[
    str | None,
    Query(
        description="A `next` or `cursor` value, or an RFC 3339 time: from the first event on whose `t` is not before"
        " it. Without it, from the oldest event there is.",
        openapi_examples={
            "cursor": {"summary": "go on from there", "value": _CURSOR},
            "time": {"summary": "from a time on", "value": "2026-12-01T14:00:00Z"},
        },
    ),
]
_Limit = Annotated[int, Query(ge=1, le=MOST_ITEMS, description="At most this many items.")]
_Kinds = Annotated[
    str | None,
    Query(
        description=f"Only these kinds, separated by commas: {', '.join(KINDS)}.",
        openapi_examples={"two": {"summary": "two kinds", "value": "health,status"}},
    ),
]
_Key = Annotated[
    str | None,
    Header(
        alias="Idempotency-Key",
        min_length=8,
        max_length=ID_CHARACTERS - 4,
        pattern=r"^[!-~]+$",
        description="Chosen by the caller; asked again with the same key, the note is written once.",
    ),
]


def _problems(**texts: str) -> dict[int | str, dict[str, Any]]:
    schema = {"type": "object", "required": ["type", "title", "status", "detail"]}
    return {
        name.removeprefix("s"): {"description": text, "content": {"application/problem+json": {"schema": schema}}}
        for name, text in texts.items()
    }


def _page_example(*items: Mapping[str, Any]) -> dict[int | str, dict[str, Any]]:
    example = {"items": list(items), "next": items[-1]["cursor"] if items else _CURSOR}
    return {200: {"content": {"application/json": {"example": example}}}}


_PAGE_PROBLEMS = _problems(
    s410="The cursor cannot be followed any more; `why` says `retention`, `another log` or `ahead`. Begin anew.",
    s422="No cursor, time, kind or limit.",
    s503="The log cannot be read now.",
)


def add_events(app: FastAPI, pages: Pages, commands: Ask) -> None:
    """Add the calls to the application."""

    @app.get(
        "/api/v1/events",
        summary="Events in the order of the log",
        response_model=EventPage,
        responses={**_page_example(_EVENT, _NOTE), **_PAGE_PROBLEMS},
    )
    async def events(since: _Since = None, kinds: _Kinds = None, limit: _Limit = 100) -> dict[str, Any]:
        wanted = None if kinds is None else [kind.strip() for kind in kinds.split(",")]
        items, following = await pages.since(since, wanted, limit)
        return {"items": items, "next": following}

    @app.get(
        "/api/v1/detections",
        summary="Detections in the order of the log",
        response_model=EventPage,
        responses={**_page_example(), **_PAGE_PROBLEMS},
    )
    async def detections(since: _Since = None, limit: _Limit = 100) -> dict[str, Any]:
        items, following = await pages.since(since, ["detection"], limit)
        return {"items": items, "next": following}

    @app.post(
        "/api/v1/notes",
        summary="Write an operator's note into the log",
        status_code=201,
        response_model=EventItem,
        responses={
            201: {"content": {"application/json": {"example": _NOTE}}},
            **_problems(
                s422="Blank, too long, or not as it should be.", s503="No answer within 2 s, or the log is full."
            ),
        },
    )
    async def notes(body: NoteBody, response: Response, idempotency_key: _Key = None) -> dict[str, Any]:
        key = None if idempotency_key is None else f"key:{idempotency_key}"
        answer = await commands.ask("note", body.model_dump(), key)
        if answer.status >= 400:
            headers = {"Retry-After": "1"} if answer.status == 503 else None
            raise Problem(answer.status, str(answer.body.get("detail", "contacts refused it")), headers=headers)
        response.status_code = answer.status
        return dict(answer.body)
