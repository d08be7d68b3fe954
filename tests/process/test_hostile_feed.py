"""Thousands of broken messages amid good ones: each is counted under its reason, and the maps do not know of them."""

from collections import Counter
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from hostile import KINDS, hostile_messages
from rig import (
    ArrayModel,
    Block,
    Feeder,
    Listener,
    Service,
    Wave,
    block_message,
    cut_blocks,
    frame_maps,
    join_blocks,
    note,
    plane_wave,
    sensor_noise,
)  # fmt: skip

ARRAY = ArrayModel()
FRAME = 2048
PERIOD = 100_000  # 12.5 s: 100 blocks
HOSTILE = 4000
ENDED = "before"


def good_blocks() -> list[Block]:
    """A wave from 64 deg over sensor noise, 100 blocks of 1000 samples."""
    sea = plane_wave(Wave(64.0), ARRAY.positions_m, PERIOD, ARRAY.rate_hz)
    sea += sensor_noise(ARRAY.channels, PERIOD, ARRAY.rate_hz, 70.0)
    return list(cut_blocks(sea / ARRAY.full_scale_upa, 1000, ARRAY.rate_hz, kind="i3"))


def opening(blocks: list[Block]) -> Iterator[list[bytes]]:
    """A short run that the main run ends, so that there is a run just ended by another."""
    first = blocks[0]
    early = Block(0, first.samples, first.t - 10**9, first.data)
    yield block_message(ARRAY, early, ENDED, type="i3")


def maps_until(samples: int) -> int:
    return 0 if samples < FRAME else (samples - FRAME) // (FRAME // 2) + 1


def feed_in_step(feeder: Feeder, listener: Listener, blocks: list[Block], hostile: int) -> Counter[str]:
    """Good blocks with hostile messages after each; at most 4 blocks ahead of the maps, so that nothing is overrun."""
    reasons: Counter[str] = Counter()
    feeder.send_all(opening(blocks))
    for i, block in enumerate(blocks):
        feeder.send(block_message(ARRAY, block, "main run", type="i3"))
        share = hostile * (i + 1) // len(blocks) - hostile * i // len(blocks)
        until = block.t + round(block.samples * 1e9 / ARRAY.rate_hz)
        for _, reason, parts in hostile_messages(ARRAY, "main run", block.first + block.samples, until, share, i):
            feeder.send(parts)
            reasons[reason] += 1
        listener.wait_count("map/main", max(0, maps_until(block.first + block.samples - 4000)))
    return reasons


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> list[tuple[dict, bytes]]:
    """Maps of the good blocks alone."""
    folder = tmp_path_factory.mktemp("undisturbed")
    with Service(ARRAY.settings(), folder) as service, service.listener() as listener, service.feeder() as feeder:
        feed_in_step(feeder, listener, good_blocks(), 0)
        return stable(listener, maps_until(PERIOD))


def stable(listener: Listener, count: int) -> list[tuple[dict, bytes]]:
    """Headers without what may differ between two runs of the service, and data."""
    maps = listener.wait_count("map/main", count)
    assert len(maps) == count
    return [({k: v for k, v in m.header.items() if k not in ("start", "latency_ms")}, m.data) for m in maps]


@pytest.mark.parametrize("overload", ["drop", "hold"])
def test_hostile_messages_are_counted_by_reason_and_change_no_map(
    tmp_path: Path, undisturbed: list[tuple[dict, bytes]], overload: str
) -> None:
    assert len(KINDS) >= 25
    settings = ARRAY.settings(overload=overload)
    with Service(settings, tmp_path) as service, service.listener() as listener, service.feeder() as feeder:
        reasons = feed_in_step(feeder, listener, good_blocks(), HOSTILE)
        assert reasons.total() == HOSTILE
        status = listener.wait_status(
            "everything counted",
            lambda s: s["samples"] == PERIOD + 1000 and sum(s["dropped"].values()) >= HOSTILE,
        )
        assert {reason: n for reason, n in status["dropped"].items() if n} == dict(reasons)
        assert (status["blocks"], status["state"]) == (101, status["state"])
        assert [status[key] for key in ("gaps", "lost_samples", "trimmed_samples", "clock_jumps")] == [0] * 4
        assert (status["run"], status["next"]) == ("main run", PERIOD)
        assert status["bands"]["main"]["dropped_hops"] == 0
        assert stable(listener, maps_until(PERIOD)) == undisturbed


def test_an_index_of_ten_to_the_fifteen_does_not_blind_the_feed(tmp_path: Path) -> None:
    """Even as the first block of a run: the blocks that follow without a seam are a run that restarted."""
    blocks = good_blocks()[:20]
    with Service(ARRAY.settings(), tmp_path) as service, service.listener() as listener, service.feeder() as feeder:
        stray = Block(10**15, 1000, blocks[0].t - 10**9, blocks[0].data)
        feeder.send(block_message(ARRAY, stray, "a", type="i3"))
        feeder.send_all([block_message(ARRAY, block, "a", type="i3") for block in blocks])
        status = listener.wait_status("restart", lambda s: s["next"] == 20_000)
        assert status["restarts"] == 1
        assert status["dropped"] == {"repeat": 1} | {k: 0 for k in status["dropped"] if k != "repeat"}
        assert status["samples"] == 1000 + 19_000
        expected, _ = frame_maps(join_blocks([("a", 1000, 19_000, blocks[1].t)]), FRAME, ARRAY.rate_hz)
        maps = listener.wait_count("map/main", len(expected))
        assert [m.header["t"] for m in maps] == [m.t for m in expected]


def test_not_a_number_marks_its_hydrophone_and_never_reaches_a_map(tmp_path: Path) -> None:
    """One block with NaN on one channel and infinity on another: kept, both left out, every level finite."""
    sea = plane_wave(Wave(64.0), ARRAY.positions_m, 40_000, ARRAY.rate_hz) / ARRAY.full_scale_upa
    sea[5, 20_300], sea[9, 20_400] = np.nan, np.inf
    blocks = list(cut_blocks(sea, 1000, ARRAY.rate_hz, kind="f4"))
    with Service(ARRAY.settings(), tmp_path) as service, service.listener() as listener, service.feeder() as feeder:
        feeder.send_all([block_message(ARRAY, block, "a", type="f4") for block in blocks])
        feeder.send(note(ARRAY, "end", run="a"))
        maps = listener.wait_count("map/main", maps_until(40_000))
        assert all(np.isfinite(m.level_db).all() for m in maps)
        used = [m.header["limits"]["channels_used"] for m in maps]
        assert min(used) == 30
        assert used[0] == 32
        status = listener.wait_status("every sample", lambda s: s["samples"] == 40_000)
        assert not any(status["dropped"].values())
