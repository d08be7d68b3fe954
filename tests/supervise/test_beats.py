"""What comes to the supervisor's control socket: beats of children, and whatever else another host may send."""

import io
import os
from dataclasses import replace
from pathlib import Path

import msgpack
import pytest
import zmq

from soundrose.settings import parse_settings
from soundrose.settings_types import StreamSettings
from soundrose.supervise import Supervisor

FACTS = {
    "maps": 7, "dropped_hops": 0, "gaps": 0, "load": 0.1, "latency_ms": {"p50": 1.0, "p99": 2.0}, "kernel": "pairs",
}  # fmt: skip
BEAT = {"name": "band:far", "pid": 4711, "ready": True, "facts": FACTS, "garbage": None}
PLAIN = {
    "array": {"id": "aft", "hydrophones": 8, "spacing_m": 0.5},
    "bands": [{"name": "far", "band_hz": [100.0, 1000.0], "frame": 1024, "beams": 17, "place": "elsewhere"}],
    "stream": {key: f"tcp://127.0.0.1:{port}" for key, port in (("bind", 1), ("collect", 2), ("control", 3))},
}


@pytest.fixture
def supervisor(tmp_path: Path):
    mark = f"ipc://@beats-{os.getpid()}-{tmp_path.name}"
    stream = StreamSettings(**{key: f"{mark}-{key}" for key in ("bind", "collect", "control", "commands")})
    supervisor = Supervisor(replace(parse_settings(PLAIN, tmp_path, "aft.toml"), stream=stream), io.StringIO())
    yield supervisor
    supervisor._context.destroy(linger=0)
    os.close(supervisor._record_fd)


@pytest.fixture
def sender(supervisor):
    with zmq.Context() as context, context.socket(zmq.PUSH) as socket:
        socket.connect(supervisor._endpoints["control"])
        yield socket


def hear(supervisor, sender, *messages: bytes) -> dict:
    """Send, let the supervisor take them and one good beat after them; the band's entry."""
    for message in messages:
        sender.send(message)
    sender.send(msgpack.packb(BEAT))
    for _ in range(200):
        supervisor._take_beats()
        entry = supervisor._status(0.0)["bands"]["far"]
        if entry["maps"] >= 7:
            return entry
    raise AssertionError("the beat did not come")


@pytest.mark.parametrize(
    "message",
    [
        b"", b"\xc1", b"GET / HTTP/1.1", msgpack.packb(5), msgpack.packb([1]), msgpack.packb({"name": "band:far"}),
        msgpack.packb({**BEAT, "name": ["x"]}), msgpack.packb({**BEAT, "facts": 5}),
        msgpack.packb({**BEAT, "facts": {"maps": 1}}), msgpack.packb({**BEAT, "facts": {**FACTS, "latency_ms": 3}}),
        msgpack.packb({**BEAT, "facts": {**FACTS, "maps": float("inf")}}),
    ],
)  # fmt: skip
def test_message_that_is_no_beat_changes_nothing(supervisor, sender, message):
    assert hear(supervisor, sender, message)["maps"] == 7


def test_counters_of_a_band_elsewhere_go_on_over_its_restart(supervisor, sender):
    hear(supervisor, sender)
    sender.send(msgpack.packb({**BEAT, "pid": 4712, "facts": {**FACTS, "maps": 2}}))
    while supervisor._status(0.0)["bands"]["far"]["maps"] == 7:
        supervisor._take_beats()
    assert supervisor._status(0.0)["bands"]["far"]["maps"] == 9
