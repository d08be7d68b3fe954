"""A process that dies is back at once, and nobody needs to join anew or loses count."""

import os
import signal
from collections.abc import Iterator
from pathlib import Path

import pytest
from rig import (
    ArrayModel,
    Block,
    Feeder,
    Listener,
    Service,
    block_message,
    encode_samples,
    sensor_noise,
    wait_until,
)  # fmt: skip

ARRAY = ArrayModel()
NOISE = encode_samples(sensor_noise(32, 1000, 8000.0, 90.0) / ARRAY.full_scale_upa, "i2", "channel")


class Source:
    """An array that never breaks its run; blocks of 1000 samples of the same noise."""

    def __init__(self, feeder: Feeder) -> None:
        self.feeder, self.blocks = feeder, 0

    def send(self, blocks: int) -> None:
        for _ in range(blocks):
            block = Block(self.blocks * 1000, 1000, 10**18 + self.blocks * 125_000_000, NOISE)
            self.feeder.send(block_message(ARRAY, block, "a", type="i2"))
            self.blocks += 1

    @property
    def samples(self) -> int:
        return 1000 * self.blocks


Joined = tuple[Service, Listener, Source]


@pytest.fixture
def joined(tmp_path: Path) -> Iterator[Joined]:
    with Service(ARRAY.settings(), tmp_path) as service, service.listener() as listener, service.feeder() as feeder:
        source = Source(feeder)
        source.send(20)
        listener.wait_status("the first samples", lambda s: s["samples"] == source.samples)
        listener.wait_count("map/main", 18)
        yield service, listener, source


def process(status: dict, name: str) -> dict:
    found = [p for p in status["processes"] if p["name"].split(":")[0] == name]
    assert len(found) == 1, status["processes"]
    return found[0]


def kill_and_wait(listener: Listener, name: str) -> tuple[dict, dict]:
    """SIGKILL the process of that name; its entry before, and once it is up again."""
    before = process(listener.of("status")[-1].header, name)
    assert before["state"] == "up"
    os.kill(before["pid"], signal.SIGKILL)

    def is_back(status: dict) -> bool:
        now = process(status, name)
        return now["state"] == "up" and now["pid"] != before["pid"]

    after = process(listener.wait_status(f"{name} back", is_back), name)
    assert after["restarts"] == before["restarts"] + 1
    assert after["since"] > before["since"]
    return before, after


def test_ingest_takes_up_run_index_and_counters(joined: Joined) -> None:
    """All that was sent had been counted before: the run goes on without a gap and without losing a sample."""
    _, listener, source = joined
    count = len(listener.of("map/main"))
    kill_and_wait(listener, "ingest")
    source.send(30)
    status = listener.wait_status("every sample", lambda s: s["samples"] == source.samples)
    assert (status["next"], status["run"], status["gaps"], status["restarts"]) == (source.samples, "a", 0, 0)
    assert not any(status["dropped"].values())
    assert status["blocks"] == 50
    listener.wait_count("map/main", count + 25)


def test_a_band_begins_anew_under_a_new_start(joined: Joined) -> None:
    _, listener, source = joined
    old = listener.of("map/main")[-1].header["start"]
    made = listener.of("status")[-1].header["bands"]["main"]["maps"]
    kill_and_wait(listener, "band")
    count = len(listener.of("map/main"))
    source.send(30)
    maps = listener.wait_count("map/main", count + 25)[count:]
    assert {m.header["start"] for m in maps}.isdisjoint({old})
    assert [m.header["seq"] for m in maps] == list(range(len(maps)))
    status = listener.wait_status("every sample", lambda s: s["samples"] == source.samples)
    assert status["gaps"] == 0
    listener.wait_status("maps counted on", lambda s: s["bands"]["main"]["maps"] >= made + 25)


def test_the_published_address_stays_when_the_proxy_dies(joined: Joined) -> None:
    _, listener, source = joined
    kill_and_wait(listener, "proxy")
    count = len(listener.of("map/main"))
    source.send(30)
    listener.wait_count("map/main", count + 20)


def test_the_web_address_stays_when_serve_dies(joined: Joined) -> None:
    service, listener, _ = joined
    kill_and_wait(listener, "serve")

    def answers() -> bool:
        try:
            return service.get("/livez")[0] == 200
        except OSError:
            return False

    wait_until("/livez answers", answers, 10)


def test_ready_is_told_with_names_while_a_process_is_stopped(joined: Joined) -> None:
    """Stopped, not dead: it is judged by its progress, found stuck, and started anew."""
    service, listener, _ = joined
    before = process(listener.of("status")[-1].header, "ingest")
    os.kill(before["pid"], signal.SIGSTOP)
    back = listener.wait_status(
        "ingest anew", lambda s: process(s, "ingest")["state"] == "up" and process(s, "ingest")["pid"] != before["pid"]
    )
    assert process(back, "ingest")["restarts"] == before["restarts"] + 1
    wait_until("ready again", lambda: service.get("/readyz")[0] == 200, 10)
