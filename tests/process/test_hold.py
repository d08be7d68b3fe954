"""`hold`: whatever the speed, every map comes, and the same samples give the same bits."""

from collections.abc import Iterator
from functools import cache
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from rig import (
    ArrayModel,
    Block,
    Listener,
    Message,
    Service,
    Wave,
    block_message,
    encode_samples,
    frame_maps,
    join_blocks,
    note,
    plane_wave,
    sensor_noise,
)  # fmt: skip

ARRAY = ArrayModel()
SECOND = 10**9
START = 1_796_133_600 * SECOND
LENGTH = 480_000  # 60 s
HOLE = range(200_000, 203_333)  # samples that never come
DEAD = (10, range(320_000, LENGTH))  # a hydrophone that falls silent
LOW = ARRAY.band(name="low", channels="0:32:2", band_hz=[100.0, 700.0], frame=2048)
HIGH = ARRAY.band(name="high", channels="8:24", band_hz=[500.0, 2000.0], frame=1536, beams=61, average_s=0.5)
PERIOD = 32_000
SEA = plane_wave(Wave(64.0), ARRAY.positions_m, PERIOD, ARRAY.rate_hz)
SEA += sensor_noise(ARRAY.channels, PERIOD, ARRAY.rate_hz, 70.0)
SEA /= ARRAY.full_scale_upa


def t_of(index: int) -> int:
    return START + round(index * SECOND / ARRAY.rate_hz)


def messages(block: int, layout: str) -> Iterator[tuple[int, list[bytes]]]:
    """(samples so far, message) of the whole feed in blocks of that length: notes, a hole, a hydrophone that dies."""
    yield 0, note(ARRAY, "navigation", t=t_of(100_000), sound_speed_m_s=1480.0, heading_deg=212.4)
    moved = ARRAY.positions_m * [1.01, 0, 0]
    yield 0, note(ARRAY, "positions", t=t_of(260_000), positions_m=moved.tolist())
    edges = sorted({*range(0, HOLE.start, block), HOLE.start, *range(HOLE.stop, LENGTH, block), LENGTH})
    for first, end in pairwise(edges):
        if first == HOLE.start:
            continue
        index = np.arange(first, end)
        values = SEA[:, index % PERIOD]
        values[DEAD[0], index >= DEAD[1].start] = 0
        data = encode_samples(values, "i2", layout)
        parts = block_message(ARRAY, Block(first, end - first, t_of(first), data), "hold", type="i2", layout=layout)
        yield end, parts
    yield LENGTH, note(ARRAY, "end", run="hold")


@cache
def framed(frame: int) -> list:
    kept = [("hold", 0, HOLE.start, t_of(0)), ("hold", HOLE.stop, LENGTH - HOLE.stop, t_of(HOLE.stop))]
    return frame_maps(join_blocks(kept), frame, ARRAY.rate_hz)[0]


def collect(folder: Path, block: int, layout: str, in_step: bool) -> dict[str, list[Message]]:
    """Maps of one service that was fed as fast as it takes, or never more than a second ahead of its maps."""
    settings = ARRAY.settings(LOW, HIGH)
    with Service(settings, folder) as service, service.listener() as listener, service.feeder() as feeder:
        for end, parts in messages(block, layout):
            feeder.send(parts)
            if in_step:
                keep_in_step(listener, end)
        maps = {band["name"]: all_maps(listener, band) for band in (LOW, HIGH)}
        status = listener.wait_status("all samples", lambda s: s["samples"] == LENGTH - len(HOLE))
        assert (status["gaps"], status["lost_samples"], status["late"]) == (1, len(HOLE), 0)
        assert [status["bands"][b]["dropped_hops"] for b in ("low", "high")] == [0, 0]
        return maps


def keep_in_step(listener: Listener, end: int) -> None:
    due = sum(m.first + LOW["frame"] <= end - 8000 for m in framed(LOW["frame"]))
    listener.wait_count("map/low", due) if due else None


def all_maps(listener: Listener, band: dict) -> list[Message]:
    expected = framed(band["frame"])
    maps = listener.wait_count(f"map/{band['name']}", len(expected), 60)
    assert [m.header["t"] for m in maps] == [m.t for m in expected]
    return maps


@pytest.fixture(scope="module")
def fast(tmp_path_factory: pytest.TempPathFactory) -> dict[str, list[Message]]:
    return collect(tmp_path_factory.mktemp("fast"), 1000, "channel", in_step=False)


def test_no_map_is_missing_as_fast_as_taken(fast: dict[str, list[Message]]) -> None:
    for band in (LOW, HIGH):
        maps = fast[band["name"]]
        assert [m.header["seq"] for m in maps] == list(range(len(framed(band["frame"]))))
        assert all(np.isfinite(m.level_db).all() for m in maps)


def test_another_speed_block_length_and_layout_give_the_same_bits(
    fast: dict[str, list[Message]], tmp_path: Path
) -> None:
    slow = collect(tmp_path, 1777, "sample", in_step=True)
    free = ("seq", "start", "latency_ms")
    for band in ("low", "high"):
        for one, other in zip(fast[band], slow[band], strict=True):
            assert {k: v for k, v in one.header.items() if k not in free} == {
                k: v for k, v in other.header.items() if k not in free
            }
            assert one.data == other.data, one.header["t"]


def test_every_part_of_the_feed_left_its_mark(fast: dict[str, list[Message]]) -> None:
    """Gap, dead hydrophone, sound speed and positions all show, or sameness would prove little."""
    limits = [m.header["limits"] for m in fast["low"]]
    assert {part["gap"] for part in limits} == {True, False}
    onsets = list(dict.fromkeys(m.header["limits"]["alias_hz"] for m in fast["high"]))
    assert onsets == [1500.0, 1480.0, pytest.approx(1480 / 1.01)]
    for band in ("low", "high"):
        used = [m.header["limits"]["channels_used"] for m in fast[band]]
        assert (used[0], used[-1]) == (16, 15)
