"""The event log from outside: what happened is there in order, once, over kills and restarts of everything."""

import json
import os
import signal
import urllib.error
import urllib.request
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from rig import ArrayModel, Block, Service, block_message, encode_samples, note, sensor_noise, wait_until

ARRAY = ArrayModel()
NOISE = encode_samples(sensor_noise(32, 1000, 8000.0, 90.0) / ARRAY.full_scale_upa, "i2", "channel")
FIRST_T = 1_796_133_600_000_000_000


def block(number: int, data: bytes = NOISE) -> list[bytes]:
    return block_message(ARRAY, Block(number * 1000, 1000, FIRST_T + number * 125_000_000, data), "a", type="i2")


def page(service: Service, query: str = "") -> tuple[int, dict[str, Any]]:
    status, _, body = service.get(f"/api/v1/events{query}")
    return status, json.loads(body)


def events(service: Service, kinds: str = "") -> list[dict[str, Any]]:
    """Every event, by pages of seven."""
    items, following = [], ""
    while True:
        status, answer = page(service, f"?limit=7{following}" + (f"&kinds={kinds}" if kinds else ""))
        assert status == 200, answer
        items += answer["items"]
        if not answer["items"]:
            return items
        following = f"&since={answer['next']}"


def words(service: Service) -> list[str]:
    return [item["what"] for item in events(service, "status")]


def post(service: Service, body: Any, key: str | None = None, kind: str = "application/json") -> tuple[int, dict]:
    headers = {"Content-Type": kind, **({"Idempotency-Key": key} if key else {})}
    request = urllib.request.Request(f"{service.http}/api/v1/notes", json.dumps(body).encode(), headers)
    try:
        with urllib.request.urlopen(request, timeout=10) as answer:
            return answer.status, json.loads(answer.read())
    except urllib.error.HTTPError as error:
        with error:
            return error.code, json.loads(error.read())


def process(service: Service, name: str) -> dict[str, Any]:
    status = json.loads(service.get("/api/v1/status")[2])
    [found] = [p for p in status["processes"] if p["name"] == name]
    return found


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    with Service(ARRAY.settings(), tmp_path_factory.mktemp("log")) as service:
        yield service


def test_a_run_with_a_gap_and_a_dead_hydrophone_is_told(running: Service):
    rows = NOISE[: len(NOISE) // 32 * 5] + bytes(len(NOISE) // 32) + NOISE[len(NOISE) // 32 * 6 :]
    with running.listener() as listener, running.feeder() as feeder:
        for number in range(10):
            feeder.send(block(number))
        listener.wait_status("the first samples", lambda s: s["samples"] == 10_000)
        for number in range(13, 40):
            feeder.send(block(number, rows))
        listener.wait_status("the gap", lambda s: s["gaps"] == 1 and s["samples"] == 37_000)
        feeder.send(note(ARRAY, "end", run="a"))
        listener.wait_status("the end", lambda s: s["state"] == "waiting")
    wait_until("the end of the run in the log", lambda: "run-ended" in words(running), 10)
    told = [item for item in events(running, "status") if item["what"] in ("run-begun", "gap", "run-ended")]
    assert [item["what"] for item in told] == ["run-begun", "gap", "run-ended"]
    assert (told[1]["gaps"], told[1]["lost_samples"]) == (1, 3000)
    dead = [item for item in events(running, "health") if item["channel"] == 5 and item["to"] == "dead"]
    assert len(dead) == 1
    assert FIRST_T < dead[0]["t"] <= FIRST_T + 40 * 125_000_000  # feed time, not the host's
    assert [item["t"] for item in events(running, "health") if item["channel"] == 6] == []


def test_cursors_go_on_over_a_kill_of_the_writer(running: Service):
    before, seen = process(running, "contacts"), events(running)
    os.kill(before["pid"], signal.SIGKILL)
    assert page(running)[0] == 200  # read without it
    wait_until("contacts up again", lambda: process(running, "contacts")["restarts"] == before["restarts"] + 1, 10)
    wait_until("its end and start in the log", lambda: words(running)[-2:] == ["process-down", "process-up"], 10)
    whole = events(running)
    assert whole[: len(seen)] == seen
    new = whole[len(seen) :]
    assert [(item["what"], item["name"]) for item in new] == [("process-down", "contacts"), ("process-up", "contacts")]
    assert "SIGKILL" in new[0]["why"]
    assert len({item["cursor"] for item in whole}) == len(whole)
    assert page(running, f"?since={seen[-1]['cursor']}")[1]["items"] == new


def test_a_note_is_written_once_however_often_it_is_asked_for(running: Service):
    status, event = post(running, {"by": "mate", "note": "Gear streamed."}, "first-note-1")
    assert (status, event["kind"], event["by"], event["text"]) == (201, "note", "mate", "Gear streamed.")
    assert post(running, {"by": "mate", "note": "Gear streamed."}, "first-note-1") == (status, event)
    pid = process(running, "contacts")["pid"]
    os.kill(pid, signal.SIGKILL)

    def again() -> Any:
        found = post(running, {"by": "mate", "note": "Gear streamed."}, "first-note-1")
        return None if found[0] == 503 else found  # contacts is away for longer than a request waits

    assert wait_until("an answer after the kill", again, 15) == (status, event)
    assert events(running, "note") == [event]


def test_a_note_while_contacts_hangs_is_503_in_time(running: Service):
    wait_until("contacts is up", lambda: process(running, "contacts")["state"] == "up", 10)
    pid = process(running, "contacts")["pid"]
    os.kill(pid, signal.SIGSTOP)
    status, problem = post(running, {"by": "mate", "note": "x"})
    wait_until("it is noticed and started anew", lambda: process(running, "contacts")["pid"] not in (pid, None), 15)
    assert (status, problem["status"]) == (503, 503)


@pytest.mark.parametrize(
    ("query", "status"),
    [("?since=nonsense", 422), ("?since=2026-12-01", 422), ("?limit=0", 422), ("?limit=1001", 422),
     ("?limit=1000", 200), ("?kinds=nonsense", 422), ("?since=2026-12-01T00:00:00Z", 200),
     ("?since=0123456789abcdef-5", 410)],
)  # fmt: skip
def test_questions_and_answers(running: Service, query: str, status: int):
    got, answer = page(running, query)
    assert got == status
    assert (set(answer) == {"items", "next"}) if status == 200 else (answer["status"] == status)


@pytest.mark.parametrize(
    ("body", "kind", "status"),
    [({}, "application/json", 422), ({"by": "a", "note": "b"}, "text/plain", 403)],
)
def test_notes_that_are_none(running: Service, body: dict, kind: str, status: int):
    assert post(running, body, kind=kind)[0] == status


def test_detections_are_a_page_too(running: Service):
    status, _, body = running.get("/api/v1/detections?limit=3")
    assert (status, json.loads(body)["items"]) == (200, [])


def test_the_log_goes_on_over_an_end_and_a_crash_of_the_service(tmp_path: Path):
    settings = ARRAY.settings()
    with Service(settings, tmp_path) as service:
        cursor = page(service)[1]["next"]
        post(service, {"by": "mate", "note": "one"})
    service = Service(settings, tmp_path)
    try:
        status, answer = page(service, f"?since={cursor}&kinds=note")
        assert (status, [item["text"] for item in answer["items"]]) == (200, ["one"])
        wait_until("the second start is told", lambda: words(service).count("service-started") == 2, 10)
        post(service, {"by": "mate", "note": "two"})
    finally:
        service.kill()
    with Service(settings, tmp_path) as again:
        wait_until("the third start is told", lambda: words(again).count("service-started") == 3, 10)
        starts = [item for item in events(again, "status") if item["what"] == "service-started"]
        assert [item["previous"] for item in starts] == [None, "ended", "not ended in order"]
        assert [item["text"] for item in events(again, "note")] == ["one", "two"]
