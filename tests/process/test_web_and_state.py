"""HTTP from outside, the states of the feed, and the health of hydrophones."""

import json
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from rig import (
    ArrayModel,
    Listener,
    Message,
    Service,
    Wave,
    block_message,
    cut_blocks,
    note,
    plane_wave,
    sensor_noise,
    wait_until,
)  # fmt: skip

ARRAY = ArrayModel()
SECOND = 10**9
START = 1_796_133_600 * SECOND


@pytest.fixture(scope="module")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    with Service(ARRAY.settings(), tmp_path_factory.mktemp("web")) as service:
        yield service


def sea_messages(array: ArrayModel, sea: np.ndarray, run: str) -> Iterator[list[bytes]]:
    for block in cut_blocks(sea / array.full_scale_upa, 1000, array.rate_hz, t=START, kind="f4"):
        yield block_message(array, block, run, type="f4")


def test_live_and_ready_before_any_sample(service: Service) -> None:
    assert service.get("/livez")[0] == 200
    wait_until("ready", lambda: service.get("/readyz")[0] == 200, 10)


def test_status_over_http_is_the_published_one_with_versions(service: Service) -> None:
    with service.listener() as listener:
        code, headers, body = service.get("/api/v1/status")
        assert code == 200
        assert headers["content-type"].startswith("application/json")
        answer = json.loads(body)
        assert isinstance(answer["version"], str)
        assert 1 in answer["versions"]

        def published(self: Listener) -> Message | None:
            return next((m for m in self.of("status") if m.header["seq"] >= answer["seq"]), None)

        message = listener.wait("that status", published)
        assert message.header["start"] == answer["start"]
        assert set(message.header) <= set(answer)


def test_status_is_complete_and_typed(service: Service) -> None:
    with service.listener() as listener:
        status = listener.of("status")[-1].header
    assert (status["v"], status["kind"], status["array"]) == (1, "status", "aft")
    counters = ["blocks", "samples", "gaps", "lost_samples", "trimmed_samples", "unused_samples", "restarts",
                "clock_jumps", "late"]  # fmt: skip
    assert {type(status[key]) for key in counters} == {int}
    assert {p["state"] for p in status["processes"]} == {"up"}
    assert {frozenset(p) >= {"name", "state", "pid", "restarts", "since"} for p in status["processes"]} == {True}
    band = status["bands"]["main"]
    assert set(band) >= {"load", "latency_ms", "maps", "dropped_hops", "gaps", "stale", "kernel"}
    assert set(band["latency_ms"]) == {"p50", "p99"}
    assert isinstance(status["load"], int | float)
    assert set(status["latency_ms"]) == {"p50", "p99"}


@pytest.mark.parametrize("path", ["/livez", "/api/v1/status"])
def test_a_foreign_host_or_origin_is_refused(service: Service, path: str) -> None:
    """Against pages elsewhere that name this address (DNS rebinding): only names that are bound are answered."""
    for headers in ({"Host": "somewhere.example"}, {"Host": "somewhere.example:80"}, {"Origin": "http://else.example"}):
        code, answer, body = service.get(path, headers)
        assert code == 403, headers
        assert answer["content-type"].startswith("application/problem+json")
        assert json.loads(body)["status"] == 403


def test_an_unknown_path_is_a_problem_document(service: Service) -> None:
    code, headers, body = service.get("/api/v1/nothing")
    assert code == 404
    assert headers["content-type"].startswith("application/problem+json")
    assert json.loads(body)["status"] == 404


def test_feed_is_waiting_then_running_then_stalled_then_waiting(tmp_path: Path) -> None:
    with Service(ARRAY.settings(), tmp_path) as service, service.listener() as listener, service.feeder() as feeder:
        first = listener.of("status")[-1].header
        assert (first["state"], first["run"]) == ("waiting", None)
        feeder.send_all(sea_messages(ARRAY, sensor_noise(32, 16_000, ARRAY.rate_hz, 90.0), "a"))
        running = listener.wait_status("running", lambda s: s["state"] == "running")
        assert running["run"] == "a"
        stalled = listener.wait_status("stalled", lambda s: s["state"] == "stalled", 10)
        assert (stalled["run"], stalled["next"]) == ("a", 16_000)
        feeder.send(note(ARRAY, "end", run="a"))
        listener.wait_status("waiting", lambda s: s["state"] == "waiting", 10)


SICK = {3: "dead", 11: "clipped", 20: "bad"}  # what is wrong with which, from 10 s on
NEAR = ArrayModel(full_scale_v=0.3)  # full scale is 7 times the rms of the sea: hit now and then, as clipping is
CLIPPED_EACH = 100  # every hundredth sample of that hydrophone


def sick_sea() -> np.ndarray:
    """20 s from 64 deg; after half of it one hydrophone falls silent, one clips, one sends NaN."""
    sea = plane_wave(Wave(64.0), NEAR.positions_m, 160_000, NEAR.rate_hz)
    sea += sensor_noise(32, 160_000, NEAR.rate_hz, 70.0)
    sea[3, 80_000:] = 0
    sea[11, 80_000::CLIPPED_EACH] = NEAR.full_scale_upa * np.sign(sea[11, 80_000::CLIPPED_EACH])
    sea[20, 80_000::500] = np.nan
    return sea


@pytest.fixture(scope="module")
def ill(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[list[Message], list[Message]]]:
    """Maps and health messages of the sick sea."""
    with Service(NEAR.settings(), tmp_path_factory.mktemp("ill")) as service, service.listener() as listener:
        with service.feeder() as feeder:
            feeder.send_all(sea_messages(NEAR, sick_sea(), "ill"))
        maps = listener.wait_count("map/main", (160_000 - 2048) // 1024 + 1)
        health = listener.wait("health of the last second", lambda s: last_health(s.of("health")))
        yield maps, health


def last_health(found: list[Message]) -> list[Message] | None:
    return found if found and found[-1].header["t"] >= START + 19 * SECOND else None


def states(message: Message) -> dict[int, str]:
    return {c["i"]: c["state"] for c in message.header["channels"]}


def test_health_comes_each_second_of_feed_time_for_every_hydrophone(ill: tuple[list[Message], list[Message]]) -> None:
    _, health = ill
    assert 19 <= len(health) <= 21
    for message in health:
        assert [c["i"] for c in message.header["channels"]] == list(range(32))
        assert all(c["level_db"] is None or np.isfinite(c["level_db"]) for c in message.header["channels"])
        assert all({"i", "state", "level_db", "why"} <= set(c) for c in message.header["channels"])


def test_healthy_hydrophones_are_good_and_all_in_use(ill: tuple[list[Message], list[Message]]) -> None:
    _, health = ill
    early = [m for m in health if START + 3 * SECOND < m.header["t"] <= START + 10 * SECOND]
    assert len(early) > 4
    for message in early:
        assert set(states(message).values()) <= {"good", "not judged"}
        assert message.header["used"] == 32


def test_sick_hydrophones_are_named_within_seconds(ill: tuple[list[Message], list[Message]]) -> None:
    _, health = ill
    late = [m for m in health if m.header["t"] > START + 14 * SECOND]
    assert len(late) > 3
    for message in late:
        found = states(message)
        assert (found[3], found[11]) == ("dead", "clipped")
        assert found[20] not in ("good", "not judged")
        assert {i for i, state in found.items() if state not in ("good", "not judged")} == set(SICK)
        assert all(message.header["channels"][i]["why"] for i in SICK)


def test_maps_go_on_without_the_sick_and_read_the_same_level(ill: tuple[list[Message], list[Message]]) -> None:
    """What is left is rescaled to unity gain: the wave reads its 100 dB, found where it was."""
    maps, _ = ill
    early = [m for m in maps if m.header["t_end"] <= START + 10 * SECOND][-1]
    late = maps[-1]
    assert early.header["limits"]["channels_used"] == 32
    assert late.header["limits"]["channels_used"] in (29, 30)  # a clipped one may be kept or left out
    assert np.isfinite(late.level_db).all()
    before, after = early.band_db(300, 1400), late.band_db(300, 1400)
    assert int(np.argmax(after)) == int(np.argmax(before))
    assert after.max() == pytest.approx(before.max(), abs=0.3)


def test_share_of_clipped_samples_is_told(ill: tuple[list[Message], list[Message]]) -> None:
    """Every hundredth sample of one in 32 hydrophones, all the time the last map looks back on (ten time constants)."""
    maps, _ = ill
    assert maps[0].header["limits"]["clipped"] == 0.0
    assert maps[-1].header["limits"]["clipped"] == pytest.approx(1 / CLIPPED_EACH / 32, rel=0.1)
