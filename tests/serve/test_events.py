"""Events over HTTP, and as they come: pages, errors, followers, notes; without a writer, too."""

import asyncio
import json
import re
import threading
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import httpx
import pytest
from fastapi import FastAPI
from openapi_spec_validator import OpenAPIV31SpecValidator

from soundrose.contact.commands import Answer
from soundrose.serve.event_calls import add_events
from soundrose.serve.events import KINDS, EventTap
from soundrose.serve.problems import Problem, install_problems
from soundrose.settings_types import StoreSettings
from soundrose.store.cursors import BEGIN, Cursor
from soundrose.store.event_log import EventLog
from soundrose.store.event_reader import MOST_ITEMS, EventReader

DEADLINE_S = 20.0


class Desk:
    """Stands for contacts: remembers what it was asked and answers as told."""

    def __init__(self) -> None:
        self.asked: list[tuple[str, dict[str, Any], str | None]] = []
        self.answer = Answer("x", 201, {"cursor": "a", "kind": "note", "t": 1, "time": "", "recorded": 2, "text": "x"})

    async def ask(self, name: str, arguments: Mapping[str, Any], command_id: str | None = None) -> Answer:
        self.asked.append((name, dict(arguments), command_id))
        return self.answer


def asked(folder: Path, *requests: tuple[str, str, dict[str, Any]], desk: Desk | None = None) -> list[httpx.Response]:
    """Answers of an application on the log in `folder`, without sockets."""

    async def run() -> list[httpx.Response]:
        app, tap = FastAPI(), EventTap(folder)
        install_problems(app)
        add_events(app, tap, desk or Desk())
        transport = httpx.ASGITransport(app)
        try:
            async with httpx.AsyncClient(transport=transport, base_url="http://here") as client:
                return [await client.request(method, path, **more) for method, path, more in requests]
        finally:
            await tap.stop()

    return asyncio.run(run())


def get(folder: Path, **params: Any) -> httpx.Response:
    return asked(folder, ("GET", "/api/v1/events", {"params": params}))[0]


def written(log: EventLog) -> None:
    entry, pause = log.append_all([], urgent=True), threading.Event()
    for _ in range(int(DEADLINE_S / 0.01)):
        if entry.items is not None:
            return
        pause.wait(0.01)
    raise AssertionError("the log was not written")


@pytest.fixture
def log(tmp_path):
    found = EventLog(StoreSettings(str(tmp_path)))
    for n in range(12):
        found.append(("health", "note", "detection")[n % 3], 10**18 + n * 10**9, {"n": n})
    written(found)
    yield found
    found.close()


def test_pages_lead_through_all_events_once(tmp_path, log):
    following, numbers = None, []
    for _ in range(4):
        page = get(tmp_path, limit=5, **({"since": following} if following else {})).json()
        assert set(page) == {"items", "next"}
        numbers += [item.get("n") for item in page["items"]]
        following = page["next"]
    assert numbers == [None, *range(12)]
    item = page["items"] or get(tmp_path, limit=2).json()["items"]
    assert list(item[1])[:5] == ["cursor", "kind", "t", "time", "recorded"]


def test_kinds_and_times_choose(tmp_path, log):
    assert [i["n"] for i in get(tmp_path, kinds="health").json()["items"]] == [0, 3, 6, 9]
    assert [i["n"] for i in get(tmp_path, kinds="health, note").json()["items"]] == [0, 1, 3, 4, 6, 7, 9, 10]
    since = "2001-09-09T01:46:47Z"  # 10^18 ns is 01:46:40 that day
    assert [i["n"] for i in get(tmp_path, kinds="health", since=since).json()["items"]] == [9]


def test_detections_are_the_events_of_one_kind(tmp_path, log):
    first, rest = asked(tmp_path, ("GET", "/api/v1/detections?limit=1", {}), ("GET", "/api/v1/detections", {}))
    assert [i["n"] for i in first.json()["items"]] == [2]
    assert [i["n"] for i in rest.json()["items"]] == [2, 5, 8, 11]
    [more] = asked(tmp_path, ("GET", "/api/v1/detections", {"params": {"since": first.json()["next"]}}))
    assert [i["n"] for i in more.json()["items"]] == [5, 8, 11]


def test_kinds_of_later_versions_may_be_asked_for(tmp_path, log):
    for kind in KINDS:
        assert get(tmp_path, kinds=kind).status_code == 200
    assert get(tmp_path, kinds="alert").json()["items"] == []


@pytest.mark.parametrize(
    ("params", "word"),
    [({"since": "yesterday"}, "since is 'yesterday'"), ({"since": ""}, "since is ''"), ({"kinds": "cat"}, "'cat'"),
     ({"kinds": ""}, "''"), ({"limit": 0}, "limit"), ({"limit": MOST_ITEMS + 1}, "limit"), ({"limit": "x"}, "limit")],
)  # fmt: skip
def test_bad_questions_are_problems(tmp_path, log, params, word):
    answer = get(tmp_path, **params)
    assert answer.status_code == 422
    assert answer.headers["content-type"] == "application/problem+json"
    assert word in answer.json()["detail"]


def test_a_cursor_that_is_gone_is_410_with_its_reason(tmp_path, log):
    place = Cursor.parse(get(tmp_path).json()["next"])
    for cursor, why in ((Cursor(place.log, place.row + 9), "ahead"), (Cursor("0" * 16, 1), "another log")):
        answer = get(tmp_path, since=str(cursor))
        assert (answer.status_code, answer.json()["why"]) == (410, why)
    log._file.tidy(2**62, 10**12)  # retention: all of it is too old
    answer = get(tmp_path, since=str(Cursor(place.log, 3)))
    assert (answer.status_code, answer.json()["why"]) == (410, "retention")
    assert get(tmp_path, since=str(place)).json() == {"items": [], "next": str(place)}
    assert get(tmp_path).json() == {"items": [], "next": str(place)}


def test_without_a_writer_the_log_is_read_all_the_same(tmp_path, log):
    log.close()
    assert len(get(tmp_path).json()["items"]) == 13


def test_no_log_is_503_and_says_when_to_ask_again(tmp_path):
    answer = get(tmp_path)
    assert (answer.status_code, answer.headers["retry-after"]) == (503, "1")


def follow(folder: Path, job: Any) -> Any:
    async def run() -> Any:
        tap = EventTap(folder)
        await tap.start()
        try:
            async with asyncio.timeout(DEADLINE_S):
                return await job(tap)
        finally:
            await tap.stop()

    return asyncio.run(run())


async def until(condition: Any) -> None:
    while not condition():
        await asyncio.sleep(0.01)


def test_followers_get_each_new_event_once_in_order(tmp_path, log):
    async def job(tap):
        first, second = [], []
        end = tap.subscribe(first.extend)
        tap.subscribe(second.extend)
        assert tap.newest_cursor() == get_newest(tmp_path)
        for n in range(2500):
            log.append("note", 1, {"n": n})
        await until(lambda: len(first) == 2500)
        assert tap.newest_cursor() == first[-1]["cursor"]
        end()
        log.append("note", 1, {"n": 2500})
        await until(lambda: len(second) == 2501)
        return [i["n"] for i in first], [i["n"] for i in second]

    assert follow(tmp_path, job) == (list(range(2500)), list(range(2501)))


def get_newest(folder: Path) -> str:
    reader = EventReader(folder)
    try:
        return str(reader.newest())
    finally:
        reader.close()


def test_catching_up_and_following_meet_without_a_seam(tmp_path, log):
    async def job(tap):
        got, place = [], None
        for n in range(100, 1300):
            log.append("note", 1, {"n": n})
        await asyncio.to_thread(written, log)
        waiting = []
        tap.subscribe(waiting.extend)
        here = tap.newest_cursor()
        for n in range(1300, 1400):
            log.append("note", 1, {"n": n})
        while True:
            items, place = await tap.since(place, None, 100, until=here)
            got += items
            if len(items) < 100:
                break
        await until(lambda: waiting and waiting[-1]["n"] == 1399)
        return [i.get("n") for i in got + waiting]

    assert follow(tmp_path, job) == [None, *range(12), *range(100, 1400)]


def test_a_log_that_comes_later_is_followed_from_its_beginning(tmp_path):
    async def job(tap):
        got = []
        tap.subscribe(got.extend)
        assert tap.newest_cursor() == BEGIN
        with pytest.raises(Problem) as none:
            await tap.since(BEGIN)
        assert none.value.status == 503
        log = await asyncio.to_thread(EventLog, StoreSettings(str(tmp_path)))
        await until(lambda: got)
        await asyncio.to_thread(log.close)
        return [i["what"] for i in got]

    assert follow(tmp_path, job) == ["log-begun"]


def test_a_log_begun_anew_is_followed_from_its_beginning(tmp_path, log):
    async def job(tap):
        got = []
        tap.subscribe(got.extend)
        await asyncio.to_thread(log.close)
        for path in tmp_path.glob("events.sqlite*"):
            path.unlink()
        again = await asyncio.to_thread(EventLog, StoreSettings(str(tmp_path)))
        await until(lambda: got)
        await asyncio.to_thread(again.close)
        return [i["what"] for i in got]

    assert follow(tmp_path, job) == ["log-begun"]


def post(folder: Path, desk: Desk, body: Any, **headers: str) -> httpx.Response:
    return asked(folder, ("POST", "/api/v1/notes", {"json": body, "headers": headers}), desk=desk)[0]


def test_a_note_is_handed_to_contacts_and_answered_with_its_event(tmp_path):
    desk = Desk()
    answer = post(tmp_path, desk, {"by": "me", "note": "x"}, **{"Idempotency-Key": "12345678"})
    assert (answer.status_code, answer.json()["text"]) == (201, "x")
    assert post(tmp_path, desk, {"by": "me", "note": "x"}).status_code == 201
    assert desk.asked == [
        ("note", {"by": "me", "note": "x"}, "key:12345678"), ("note", {"by": "me", "note": "x"}, None),
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("body", "headers"),
    [({}, {}), ({"by": "me"}, {}), ({"by": "", "note": "x"}, {}), ({"by": "me", "note": "x" * 2001}, {}),
     ({"by": "me", "note": 5}, {}), ({"by": "me", "note": "x", "to": "all"}, {}), ([], {}),
     ({"by": "me", "note": "x"}, {"Idempotency-Key": "short"}),
     ({"by": "me", "note": "x"}, {"Idempotency-Key": "a b c d e"})],
)  # fmt: skip
def test_a_note_that_is_none_never_reaches_contacts(tmp_path, body, headers):
    desk = Desk()
    answer = post(tmp_path, desk, body, **headers)
    assert (answer.status_code, answer.headers["content-type"]) == (422, "application/problem+json")
    assert desk.asked == []


@pytest.mark.parametrize("status", [422, 503])
def test_what_contacts_refuses_is_a_problem(tmp_path, status):
    desk = Desk()
    desk.answer = Answer("x", status, {"detail": "so it is"})
    answer = post(tmp_path, desk, {"by": "me", "note": "x"})
    assert (answer.status_code, answer.json()["detail"]) == (status, "so it is")
    assert ("retry-after" in answer.headers) == (status == 503)


def test_every_call_is_described_with_an_example():
    app = FastAPI()
    add_events(app, EventTap(Path("nowhere")), Desk())
    described = app.openapi()
    OpenAPIV31SpecValidator(described).validate()
    for path, method, status in (("events", "get", "200"), ("detections", "get", "200"), ("notes", "post", "201")):
        call = described["paths"][f"/api/v1/{path}"][method]
        assert "example" in call["responses"][status]["content"]["application/json"]
        assert {"422", "503"} <= set(call["responses"])
        assert set(call["responses"]["422"]["content"]) == {"application/problem+json"}
    assert json.dumps(described).count("Idempotency-Key") >= 1


def test_documents_name_every_kind_and_word():
    text = (Path(__file__).parents[2] / "docs" / "events.md").read_text()
    source = (Path(__file__).parents[2] / "service/soundrose/contact/changes.py").read_text()
    words = set(re.findall(r'_status\("([a-z-]+)"', source)) | {"log-begun", "events-lost"}
    assert len(words) == 11
    for word in (*KINDS, *words):
        assert f"`{word}`" in text
