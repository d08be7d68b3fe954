"""The record over HTTP: rows that are the mean power of the maps of a half second, holes, cursors, bounds."""

import math
from collections.abc import Iterator
from typing import Any

import msgpack
import numpy as np
import pytest
from web_rig import BEAMS, BINS, DF_HZ, F0_HZ, LOUD_DEG, Served, T, loud_beam, map_message, sea_levels, serving

from soundrose.serve.latest import Message
from soundrose.serve.record_ring import BEAMS_MOST, KEPT_S, PARTS, BandRing, rows_within

HOP = 250_000_000  # ns between two maps; two maps to a row
EDGE = -(-T // 500_000_000) * 500_000_000  # a whole half second: T itself is one


def maps(count: int, first: int = 0, **changed: Any) -> Iterator[Message]:
    """`count` maps, one each HOP; the frame of each is two hops long, so that they overlap by half."""
    for i in range(first, first + count):
        end = EDGE + (i + 1) * HOP
        yield map_message(**{"seq": i, "t": end - 2 * HOP, "t_end": end, **changed})


@pytest.fixture
def fresh() -> Iterator[Served]:
    with serving() as running:
        yield running


def put(served: Served, messages: Iterator[Message]) -> None:
    for message in messages:
        served.latest.put(message)


def test_no_map_yet_is_an_empty_record(fresh: Served) -> None:
    found = fresh.get("/api/v1/history").json()
    assert (found["shape"], found["t_end"], found["level_db"], found["newest_age_s"]) == ([0, 0], [], [], None)
    assert fresh.get(f"/api/v1/history?since={found['next']}").json()["next"] == found["next"]


def test_rows_are_the_mean_power_of_the_bins_in_their_range(fresh: Served) -> None:
    """Against float64 over the map's own levels; a stored byte is within a quarter decibel."""
    put(fresh, maps(9))
    power = 10 ** (sea_levels().astype(np.float64) / 10)
    whole = fresh.get("/api/v1/history").json()
    assert whole["shape"] == [4, BEAMS]  # the ninth map is of a row that is not over yet
    np.testing.assert_allclose(whole["level_db"][0], 10 * np.log10(power.mean(axis=1)), atol=0.27)
    assert int(np.argmax(whole["level_db"][0])) == loud_beam()
    assert abs(whole["cone_deg"][loud_beam()] - LOUD_DEG) < 1.5
    assert whole["t_end"] == [EDGE + (2 * k + 2) * HOP for k in range(4)]
    assert len(whole["ranges_hz"]) == PARTS
    for part, (low, high) in enumerate(whole["ranges_hz"]):
        found = fresh.get(f"/api/v1/history?part={part}").json()
        bins = slice(round((low - F0_HZ) / DF_HZ), round((high - F0_HZ) / DF_HZ) + 1)
        np.testing.assert_allclose(found["level_db"][0], 10 * np.log10(power[:, bins].mean(axis=1)), atol=0.26)
        assert found["range_hz"] == [low, high]
    edges = [edge for pair in whole["ranges_hz"] for edge in pair]
    assert (edges[0], edges[-1]) == (F0_HZ, F0_HZ + DF_HZ * (BINS - 1))
    ratios = [high / low for low, high in whole["ranges_hz"]]
    assert max(ratios) / min(ratios) < 1.15  # whole bins of 3.9 Hz at 50 Hz


def test_two_maps_of_a_row_are_joined_by_power(fresh: Served) -> None:
    levels = np.full((BEAMS, BINS), 60.0, np.float32)
    louder = levels + 20
    first, second, third = maps(3)
    fresh.latest.put(map_message(levels, **{k: first.header[k] for k in ("seq", "t", "t_end")}))
    fresh.latest.put(map_message(louder, **{k: second.header[k] for k in ("seq", "t", "t_end")}))
    fresh.latest.put(third)
    found = fresh.get("/api/v1/history").json()["level_db"]
    assert len(found) == 1
    assert found[0][5] == pytest.approx(10 * math.log10((1e6 + 1e8) / 2), abs=0.26)


def test_msgpack_holds_the_same_levels_as_bytes(fresh: Served) -> None:
    put(fresh, maps(13))
    text = fresh.get("/api/v1/history").json()
    answer = fresh.get("/api/v1/history?format=msgpack")
    assert answer.headers["content-type"] == "application/msgpack"
    packed = msgpack.unpackb(answer.body)
    levels = packed["floor_db"] + packed["step_db"] * np.frombuffer(packed["level"], np.uint8).reshape(packed["shape"])
    np.testing.assert_allclose(levels, text["level_db"], atol=0.26)
    assert {k for k in text if k != "newest_age_s"} - {"level_db"} <= set(packed)
    assert packed["t_end"] == text["t_end"]


def test_a_cursor_goes_on_where_the_last_answer_ended(fresh: Served) -> None:
    put(fresh, maps(21))
    seen: list[int] = []
    cursor = ""
    for _ in range(5):
        found = fresh.get(f"/api/v1/history?limit=3{cursor}").json()
        seen += found["t_end"]
        cursor = f"&since={found['next']}"
    assert seen == [EDGE + (2 * k + 2) * HOP for k in range(10)]
    put(fresh, maps(2, 21))
    assert fresh.get(f"/api/v1/history?{cursor[1:]}").json()["t_end"] == [EDGE + 22 * HOP]


def test_a_cursor_of_another_start_gives_all_there_is(fresh: Served) -> None:
    put(fresh, maps(9))
    assert len(fresh.get("/api/v1/history?since=00000000-3").json()["t_end"]) == 4


def test_span_leaves_out_what_is_older(fresh: Served) -> None:
    put(fresh, maps(21))
    found = fresh.get("/api/v1/history?span_s=1.5").json()
    assert found["t_end"] == [EDGE + (2 * k + 2) * HOP for k in (7, 8, 9)]


AFTER = {
    "samples lost": ("gap", {}, {"t": EDGE + 20 * HOP, "t_end": EDGE + 22 * HOP}),
    "gap flag": ("gap", {}, {"limits": {"gap": True, "channels_used": 24, "channels": 24, "clipped": 0.0,
                                        "alias_hz": None, "masked": 0.0}}),
    "maps lost on the way": ("maps missed", {}, {"seq": 11}),
    "band process anew": ("band restarted", {}, {"start": "f" * 16, "seq": 0}),
    "another run": ("new run", {}, {"run": "r2"}),
}  # fmt: skip


@pytest.mark.parametrize("case", AFTER, ids=str)
def test_a_hole_is_named_with_its_data_times(fresh: Served, case: str) -> None:
    why, before, after = AFTER[case]
    put(fresh, maps(8, **before))
    broken = next(maps(1, 8, **after))
    fresh.latest.put(broken)
    more = {k: v for k, v in after.items() if k not in ("t", "t_end", "seq")}
    step = broken.header["t_end"] - EDGE - 9 * HOP
    for i, message in enumerate(maps(4, 9, **more)):
        h = message.header
        seq = broken.header["seq"] + 1 + i
        fresh.latest.put(map_message(**more, seq=seq, t=h["t"] + step, t_end=h["t_end"] + step))
    holes = fresh.get("/api/v1/history").json()["holes"]
    assert [hole["why"] for hole in holes] == ["began", why]
    assert holes[1]["t"] == EDGE + 8 * HOP
    assert holes[1]["t_end"] == broken.header["t"]
    assert holes[1]["time_end"].endswith("Z")
    assert holes[1]["row"] == 4


def test_maps_without_a_break_have_no_hole(fresh: Served) -> None:
    put(fresh, maps(40))
    assert [hole["why"] for hole in fresh.get("/api/v1/history").json()["holes"]] == ["began"]


def test_data_time_that_goes_back_begins_the_record_anew(fresh: Served) -> None:
    put(fresh, maps(20))
    old = fresh.get("/api/v1/history").json()
    put(fresh, maps(5, 2))
    found = fresh.get(f"/api/v1/history?since={old['next']}").json()
    assert found["t_end"] == [EDGE + 4 * HOP, EDGE + 6 * HOP]
    assert found["t_end"][0] < old["t_end"][-1]
    assert fresh.get("/api/v1/history").json()["t_end"] == found["t_end"]


def test_a_message_that_is_no_map_leaves_the_record_as_it_is(fresh: Served) -> None:
    put(fresh, maps(5))
    fresh.latest.put(Message("map/main", next(maps(1, 5)).header, memoryview(b"1234"), 0.0))
    fresh.latest.put(Message("map/unheard", next(maps(1, 5)).header, memoryview(b""), 0.0))
    assert len(fresh.get("/api/v1/history").json()["t_end"]) == 2


@pytest.mark.parametrize(
    ("query", "status"),
    [("band=none", 404), ("part=4", 422), ("part=-1", 422), ("since=yesterday", 422), ("since=12345678-", 422),
     ("limit=0", 422), ("limit=7201", 422), ("span_s=0", 422), ("span_s=nan", 422), ("format=png", 422)],
)  # fmt: skip
def test_what_cannot_be_asked_is_a_problem(fresh: Served, query: str, status: int) -> None:
    put(fresh, maps(5))
    answer = fresh.get(f"/api/v1/history?{query}")
    assert answer.status == status
    answer.problem()


def test_the_ring_keeps_the_newest_rows_and_its_memory() -> None:
    ring = BandRing(8)
    for message in maps(60):
        ring.add(message.header, sea_levels())
    rows = ring.rows(0, 100, None)
    assert (rows.first, len(rows.t_end), ring.count) == (21, 8, 29)
    assert rows.t_end.tolist() == [EDGE + (2 * k + 2) * HOP for k in range(21, 29)]
    assert ring.rows(27, 100, None).t_end.tolist() == [EDGE + 56 * HOP, EDGE + 58 * HOP]


def test_many_beams_are_joined_by_power() -> None:
    beams = 2 * BEAMS_MOST + 1
    ring = BandRing(4)
    levels = np.full((beams, BINS), 50.0, np.float32)
    levels[0::3] = 80.0
    cone = np.degrees(np.arccos(np.linspace(1, -1, beams))).tolist()
    for message in maps(3, shape=[beams, BINS], cone_deg=cone):
        ring.add(message.header, levels)
    rows = ring.rows(0, 4, None)
    assert rows.level_db.shape == (1, 121)
    assert len(ring.cone_deg) == 121
    want = 10 * math.log10((1e8 + 2e5) / 3)
    np.testing.assert_allclose(rows.level_db[0], want, atol=0.26)
    assert ring.cone_deg == sorted(ring.cone_deg)


def test_all_bands_together_keep_within_the_memory() -> None:
    assert rows_within(24 * 2**20, 1, 145) == 2 * KEPT_S
    for bands, beams in ((3, 65), (8, 361), (40, 4000)):
        rows = rows_within(24 * 2**20, bands, beams)
        assert rows * bands * PARTS * min(beams, BEAMS_MOST) <= 24 * 2**20
