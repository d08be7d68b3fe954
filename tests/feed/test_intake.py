"""The intake as a whole: notes in their place, late ones counted, nothing it is sent can stop it, and it resumes."""

import random

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from soundrose.errors import UsageError
from soundrose.feed.hop import Hop, Navigation, Positions, Pulse, RunEnd
from soundrose.feed.intake import Intake, snapshot_facts
from soundrose.feed.messages import (
    REASONS,
    encode_end,
    encode_navigation,
    encode_positions,
    encode_pulse,
    encode_samples,
)
from soundrose.feed.snapshot import SNAPSHOT_LIMIT

PLACES = [[1.0, 0.0, 0.0], [0.0, 0.0, 0.0], [-1.0, 0.5, 0.0]]


def test_new_intake_waits_and_has_every_reason_at_zero(source_for):
    intake = source_for().intake
    assert (intake.run, intake.state, intake.last_drop) == (None, "waiting", None)
    assert intake.counters.dropped == dict.fromkeys(REASONS, 0)


def test_notes_come_out_in_their_place_between_the_hops(source_for):
    source = source_for()
    source.block(0, 40)
    source.send(encode_navigation("aft", source.t(50), sound_speed_m_s=1480.0))
    source.send(encode_pulse("aft", source.t(60), "gun", 0.1))
    source.send(encode_positions("aft", source.t(70), PLACES))
    source.block(40, 40)
    assert [type(item) for item in source.out] == [Hop, Navigation, Pulse, Positions, Hop]
    assert source.counts() == {"blocks": 2, "samples": 80}


@pytest.mark.parametrize(("index", "late"), [(63, 1), (64, 1), (65, 0), (96, 0)])
def test_note_is_late_once_the_first_frame_it_would_act_from_is_over(source_for, index, late):
    """Frames of 64 begin each 32: of 130 samples 128 are handed on, the frame from 64 is complete, that from 96 not."""
    source = source_for()
    source.block(0, 130)
    out = source.send(encode_pulse("aft", source.t(index), "gun", 0.1))
    assert len(out) == 1
    assert source.counts().get("late", 0) == late


def test_note_is_late_when_it_is_for_any_band(source_for):
    """Of 135 samples the shorter frames begin at 0 and 40, the longer ones at 0 and 45."""
    source = source_for(frames=(80, 90))
    source.block(0, 135)
    source.send(encode_pulse("aft", source.t(46), "gun", 0.1))
    assert "late" not in source.counts()
    source.send(encode_pulse("aft", source.t(43), "gun", 0.1))
    assert source.counts()["late"] == 1


def test_note_before_the_first_frame_is_over_is_not_late(source_for):
    source = source_for()
    source.send(encode_pulse("aft", 0, "gun", 0.1))
    source.block(0, 63)
    source.send(encode_pulse("aft", 0, "gun", 0.1))
    assert "late" not in source.counts()


def test_lateness_goes_on_over_a_run_but_not_back_in_time(source_for):
    source = source_for()
    source.block(1000, 200)
    source.block(1200, 64, run="b")
    source.send(encode_pulse("aft", source.t(1100), "gun", 0.1))
    assert source.counts()["late"] == 1
    source.block(0, 40, run="c")
    source.send(encode_pulse("aft", source.t(1), "gun", 0.1))
    assert source.counts()["late"] == 1


def test_notes_in_force_are_what_acts_now_and_what_will(source_for):
    source = source_for()
    source.block(0, 100)
    for index, speed in [(20, 1480.0), (10, 1481.0), (500, 1482.0), (300, 1483.0)]:
        source.send(encode_navigation("aft", source.t(index), sound_speed_m_s=speed))
    source.send(encode_navigation("aft", source.t(20), heading_deg=1.0))
    source.send(encode_positions("aft", source.t(0), PLACES))
    source.send(encode_pulse("aft", source.t(20), "gun", 0.1))
    speeds = [note.values["sound_speed_m_s"] for note in source.intake.in_force() if isinstance(note, Navigation)]
    assert speeds == [1481.0, 1483.0, 1482.0]
    assert sum(isinstance(note, Positions) for note in source.intake.in_force()) == 1
    source.block(100, 1000)
    source.send(encode_navigation("aft", source.t(2000), sound_speed_m_s=1484.0))
    speeds = [note.values["sound_speed_m_s"] for note in source.intake.in_force() if isinstance(note, Navigation)]
    assert speeds == [1482.0, 1484.0]


def test_notes_in_force_are_bounded(source_for):
    source = source_for()
    for k in range(1000):
        source.send(encode_navigation("aft", source.t(k), sound_speed_m_s=1400.0 + k))
    assert len(source.intake.in_force()) == 32
    assert source.intake.in_force()[0].values["sound_speed_m_s"] == 1400.0


def test_drop_counts_and_keeps_the_last(source_for):
    source = source_for()
    assert source.send([b"\xc1"]) == []
    assert source.intake.last_drop[0] == "msgpack"
    source.intake.drop("overload", "the queue was full")
    assert source.intake.last_drop == ("overload", "the queue was full")
    assert source.counts() == {"msgpack": 1, "overload": 1}
    assert source.intake.counters.dropped_total == 2


def test_broken_messages_change_nothing_that_comes_out(source_for):
    """The same good feed with and without thousands of broken messages between."""
    rng = random.Random(8)
    clean, dirty = source_for(), source_for()
    for k in range(100):
        for source in (clean, dirty):
            source.block(37 * k, 37)
        good = encode_samples("aft", "a", 37 * k, 5, 1000.0, clean.signal(37 * k, 37), type="i2")
        for _ in range(30):
            header = bytearray(good[0])
            for _ in range(rng.randint(1, 4)):
                header[rng.randrange(13)] = rng.randrange(256)  # version and kind lie there
            assert dirty.send([bytes(header), good[1][: rng.randrange(200)]]) == []
    assert dirty.counts()["samples"] == clean.counts()["samples"] == 3700
    assert len(clean.out) == len(dirty.out)
    for a, b in zip(clean.hops, dirty.hops, strict=True):
        np.testing.assert_array_equal(a.samples, b.samples)
        np.testing.assert_array_equal(a.times, b.times)


BLOCKS = st.tuples(
    st.sampled_from(["a", "b", "c"]), st.sampled_from([0, 32, 64, 2**53 - 1]) | st.integers(0, 70_000),
    st.integers(1, 100), st.sampled_from([0, 2**63 - 1]) | st.integers(0, 10**11), st.booleans(),
)  # fmt: skip


@settings(max_examples=200, deadline=None)
@given(st.lists(BLOCKS, max_size=40))
def test_any_order_of_valid_messages_keeps_the_books(source_for, blocks):
    """Every message is counted once, every accepted sample comes out once, epochs and ends alternate."""
    source = source_for(channels=1)
    for run, first, samples, t, is_end in blocks:
        source.send(encode_end("aft", run)) if is_end else source.block(first, samples, t=t, run=run)
    counters = source.intake.counters
    ends = sum(isinstance(item, RunEnd) for item in source.out)
    dropped = counters.dropped_total
    assert counters.blocks + dropped + sum(block[4] for block in blocks) >= len(blocks)
    for run in "abc":
        source.send(encode_end("aft", run))
    assert sum(hop.length for hop in source.hops) == counters.samples
    epochs = [item.epoch for item in source.out if isinstance(item, RunEnd)]
    assert epochs == list(range(len(epochs)))
    assert len(epochs) - ends <= 1
    assert all(hop.epoch == 0 or hop.epoch - 1 in epochs for hop in source.hops)
    assert snapshot_facts(source.intake.snapshot())["samples"] == counters.samples


# -- snapshots -------------------------------------------------------------------------------------------------------


def state_of(intake):
    return (intake.run, intake.next, intake.state, intake.counters)


def test_restarted_intake_goes_on_where_the_snapshot_was_taken(source_for):
    source = source_for()
    source.block(0, 100)
    source.block(150, 100)
    source.send([b""])
    resumed = source_for(snapshot=source.intake.snapshot())
    assert resumed.intake.run == "a"
    assert resumed.intake.next == 250
    assert resumed.intake.state == "running"
    resumed.block(250, 100)
    assert (resumed.hops[0].first, resumed.hops[0].epoch, resumed.hops[0].run) == (250, 0, "a")
    out = resumed.send(encode_end("aft", "a"))
    assert out[-1] == RunEnd("a", 0)
    counts = resumed.counts()
    unused = counts.pop("unused_samples")
    assert counts == {"blocks": 3, "samples": 300, "gaps": 1, "lost_samples": 50, "msgpack": 1}
    # tails of 0..100, of the 96 handed on of 150..250 with the 4 lost, of 250..350
    assert unused == 4 + 4 + 4


@pytest.mark.parametrize("after", ["nothing", "end", "candidate", "another run"])
def test_snapshot_keeps_what_the_rules_need(source_for, after):
    source = source_for()
    source.block(0, 128)
    if after == "end":
        source.send(encode_end("aft", "a"))
    elif after == "candidate":
        source.block(10**9, 100, t=source.t(500))
    elif after == "another run":
        source.block(0, 128, run="b")
    resumed = source_for(snapshot=source.intake.snapshot())
    for each in (source, resumed):
        each.block(10**9 + 100, 100, t=source.t(600))
        each.block(128, 32)
        each.block(160, 32, run="b", t=source.t(700))
        each.block(192, 32, t=source.t(800))
        each.intake.counters.unused_samples = 0  # the tail of a stretch that a restart cut is another
    assert state_of(resumed.intake) == state_of(source.intake)


def test_snapshot_keeps_the_dead_and_the_notes_in_force(source_for):
    source = source_for()
    values = np.random.default_rng(0).integers(-99, 99, (3, 1000))
    values[1] = 3
    source.block(0, 1000, values=values)
    source.send(encode_navigation("aft", source.t(900), sound_speed_m_s=1480.0, heading_deg=3.0))
    source.send(encode_positions("aft", source.t(900), PLACES))
    resumed = source_for(snapshot=source.intake.snapshot())
    resumed.block(1000, 32)
    assert resumed.hops[0].bad.tolist() == [False, True, False]
    speed, positions = resumed.intake.in_force()
    assert speed == Navigation(source.t(900), "array", {"sound_speed_m_s": 1480.0})
    np.testing.assert_array_equal(positions.positions_m, PLACES)


@pytest.mark.parametrize("name", ["\U0001f30a" * 16_000, "x" * 65_000, "\U0001f30a" * 1024, ""])
def test_snapshot_is_small_for_any_name(source_for, name):
    source = source_for()
    for k, run in enumerate([name, name[:-1] + "1", name[:-1] + "2"]):
        source.block(0, 64, run=run, t=source.t(1000 * k))
        source.send(encode_end("aft", run)) if k == 0 else None
    for k in range(100):
        source.send(encode_positions("aft", source.t(9000 + k), PLACES))
    snapshot = source.intake.snapshot()
    assert len(snapshot) <= SNAPSHOT_LIMIT
    resumed = source_for(snapshot=snapshot)
    resumed.block(64, 64, run=name[:-1] + "2", t=source.t(2064))
    assert resumed.counts()["blocks"] == 4
    assert resumed.hops[0].run == name[:-1] + "2"


def test_snapshot_of_a_large_array_leaves_out_notes_that_do_not_fit(source_for):
    source = source_for(channels=2000)
    source.send(encode_positions("aft", 0, [[float(i), 0, 0] for i in range(2000)]))
    assert len(source.intake.snapshot()) <= SNAPSHOT_LIMIT
    assert source_for(channels=2000, snapshot=source.intake.snapshot()).intake.in_force() == []


@pytest.mark.parametrize("snapshot", [b"\xc1", b"\x01\x02", b"\x80\x80", "cut", "newer"])
def test_what_is_no_snapshot_is_refused(source_for, settings_for, snapshot):
    good = source_for().intake.snapshot()
    bad = {"cut": good[:-1], "newer": good[:3] + b"\x7f" + good[4:]}.get(snapshot, snapshot)
    with pytest.raises(UsageError, match="snapshot"):
        Intake(settings_for(), bad)
    with pytest.raises(UsageError, match="snapshot"):
        snapshot_facts(bad)


def test_facts_of_a_snapshot_are_those_of_the_status_message(source_for):
    fresh = snapshot_facts(b"")
    assert fresh == snapshot_facts(source_for().intake.snapshot())
    assert set(fresh) == {
        "run", "next", "blocks", "samples", "gaps", "lost_samples", "trimmed_samples", "unused_samples", "restarts",
        "clock_jumps", "late", "dropped", "clock",
    }  # fmt: skip
    source = source_for()
    source.block(3, 100)
    facts = snapshot_facts(source.intake.snapshot())
    assert (facts["run"], facts["next"], facts["samples"]) == ("a", 103, 100)
    source.send(encode_end("aft", "a"))
    facts = snapshot_facts(source.intake.snapshot())
    assert (facts["run"], facts["next"], facts["samples"]) == (None, None, 100)
