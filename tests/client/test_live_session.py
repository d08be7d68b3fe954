"""Frames of the live socket as bytes, without a socket."""

import contextlib
import json
import struct

import msgpack
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from soundrose_client import Event, Hole, LiveSession, MessageError, ServiceError, UsageError, read_map
from soundrose_client.live import Live, wait_s
from soundrose_client.live_session import live_request

HELLO = {"kind": "hello", "v": 1, "version": "9", "service_start": 5, "bands": ["main"], "cursor": "c0"}


def frame(make_map, seq=0, start="a" * 16, skipped=0, encoding="f4", **keys):
    """A binary frame with stock msgpack, the data on a boundary of eight."""
    _, header, data = make_map(seq, start, **keys)
    fields = {**msgpack.unpackb(header), "encoding": encoding, "skipped": skipped}
    if encoding == "u1":
        fields |= {"floor_db": -1.0, "step_db": 0.5}
        data = bytes(range(12))
    for pad in range(8):
        packed = msgpack.packb({**fields, "pad": " " * pad})
        if (4 + len(packed)) % 8 == 0:
            return struct.pack("<I", len(packed)) + packed + data
    raise AssertionError("no pad fits")


def test_map_of_either_encoding_is_levels(make_map):
    whole = read_map(frame(make_map, 3, skipped=2))
    assert np.array_equal(whole.level_db, np.arange(12).reshape(3, 4))
    assert (whole.seq, whole.skipped, whole.topic) == (3, 2, "map/main")
    assert "pad" not in whole.header
    coarse = read_map(frame(make_map, encoding="u1"))
    assert coarse.level_db.tolist() == [[-1.0 + 0.5 * (4 * row + k) for k in range(4)] for row in range(3)]


@given(st.binary(max_size=200))
def test_any_bytes_are_a_map_or_an_error(data):
    with pytest.raises(MessageError):
        read_map(data)


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture])  # the fixture is a plain function
@given(cut=st.integers(0, 400), flip=st.integers(0, 400), bit=st.integers(0, 7))
def test_mangled_frame_is_a_map_or_an_error(make_map, cut, flip, bit):
    whole = bytearray(frame(make_map))
    whole[flip % len(whole)] ^= 1 << bit
    with contextlib.suppress(MessageError):  # anything else is a fault
        read_map(bytes(whole[: max(cut, 1)] if cut < 200 else whole))


def session(**keys):
    holes: list[Hole] = []
    made = LiveSession(live_request(["map", "alert"], bands=("main",), bins=5), on_hole=holes.append, **keys)
    return made, holes


def test_request_goes_on_from_the_greeting_and_then_from_the_last_event():
    made, _ = session()
    assert json.loads(made.first(json.dumps(HELLO))) == {
        "subscribe": ["map", "alert"], "map": {"bands": ["main"], "bins": 5}, "since": "c0",
    }  # fmt: skip
    message, answer = made.push(json.dumps({"kind": "alert", "cursor": "c7", "t": 5}))
    assert isinstance(message, Event)
    assert answer is None
    assert json.loads(made.first(json.dumps(HELLO | {"cursor": "c9"})))["since"] == "c7"
    assert made.counters.connections == 2


def test_own_since_comes_before_that_of_the_greeting_and_none_is_none():
    assert json.loads(session(since="mine")[0].first(json.dumps(HELLO)))["since"] == "mine"
    assert "since" not in json.loads(session()[0].first(json.dumps(HELLO | {"cursor": None})))


@pytest.mark.parametrize(
    "text", ["", "[]", "{}", json.dumps(HELLO | {"v": 2}), json.dumps({"kind": "error"}), "[" * 9999]
)
def test_other_greeting_is_an_error(text):
    with pytest.raises(MessageError):
        session()[0].first(text)


def test_holes_between_connections_are_counted_and_repeats_passed_over(make_map):
    made, holes = session()
    steps = [(0, "a", 0, 0), (3, "a", 2, 0), (3, "a", 0, "repeat"), (9, "a", 1, 4), (5, "b", 0, None), (6, "b", 0, 0)]
    for seq, start, skipped, expected in steps:
        message, _ = made.push(frame(make_map, seq, start * 16, skipped))
        assert message is None if expected == "repeat" else message.missed == expected
    assert [hole.missed for hole in holes] == [4, None]
    assert (made.counters.missed, made.counters.skipped, made.counters.messages) == (4, 3, 5)


@pytest.mark.parametrize("status", [410, 503])
def test_place_that_is_gone_is_a_hole_and_asked_for_no_more(status):
    made, holes = session(since="old")
    made.first(json.dumps(HELLO))
    error = json.dumps({"kind": "error", "status": status, "title": "x", "detail": "y"})
    message, answer = made.push(error)
    assert message is None
    assert "since" not in json.loads(answer)
    assert [(hole.topic, hole.missed) for hole in holes] == [("events", None)]
    with pytest.raises(ServiceError, match=f"{status}: y"):
        made.push(error)


def test_refused_request_is_raised_and_what_cannot_be_read_is_counted():
    made, _ = session()
    with pytest.raises(ServiceError, match="422: bins"):
        made.push(json.dumps({"kind": "error", "status": 422, "title": "t", "detail": "bins"}))
    for bad in ("{", b"", '{"kind": 5}', '{"kind": "alert", "cursor": 5, "t": 1}'):
        assert made.push(bad) == (None, None)
    assert made.counters.malformed == {"json": 1, "frames": 1, "key": 2}


def test_waits_grow_to_ten_seconds_and_are_spread():
    assert [wait_s(n, 1.0) for n in (1, 2, 3, 6, 7, 500)] == [0.2, 0.4, 0.8, 6.4, 10.0, 10.0]
    assert wait_s(3, 0.5) == 0.4


def test_wrong_use_is_refused():
    with pytest.raises(UsageError, match="topics is empty"):
        live_request([])
    with pytest.raises(UsageError, match="address"):
        Live("http://127.0.0.1:8080")
