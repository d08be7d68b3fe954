"""Runs, indices and times: one test for each rule, with every counter named that the rule may move."""

import pytest

from soundrose.feed.framing import unused_samples
from soundrose.feed.hop import RunEnd
from soundrose.feed.messages import encode_end

SECOND = 10**9
MINUTE = 60_000  # samples at 1000 Hz


@pytest.fixture
def source(source_for):
    """One that has sent blocks 0..100 and 100..200."""
    source = source_for()
    source.block(0, 100)
    source.block(100, 100)
    return source


def spans(source):
    """(epoch, first, end) of every unbroken row of hops, oldest first."""
    rows = []
    for hop in source.hops:
        if rows and rows[-1][0] == hop.epoch and rows[-1][2] == hop.first:
            rows[-1] = (hop.epoch, rows[-1][1], hop.end)
        else:
            rows.append((hop.epoch, hop.first, hop.end))
    return rows


def test_first_block_may_have_any_index(source_for):
    source = source_for()
    source.block(2**53 - 1, 1000, t=5)
    assert source.counts() == {"blocks": 1, "samples": 1000}
    assert (source.intake.run, source.intake.next, source.intake.state) == ("a", 2**53 + 999, "running")


def test_block_at_the_expected_index_goes_on(source):
    source.block(200, 50)
    assert source.counts() == {"blocks": 3, "samples": 250}


@pytest.mark.parametrize("lost", [1, MINUTE])
def test_step_forward_of_up_to_a_minute_is_a_gap(source, lost):
    source.block(200 + lost, 100)
    unused = 200 - 192  # frames of 64 begin each 32
    assert source.counts() == {
        "blocks": 3, "samples": 300, "gaps": 1, "lost_samples": lost, "unused_samples": unused,
    }  # fmt: skip
    source.send(encode_end("aft", "a"))
    assert spans(source) == [(0, 0, 200), (0, 200 + lost, 300 + lost)]


def test_step_forward_of_more_than_a_minute_is_a_jump(source):
    source.block(201 + MINUTE, 100)
    assert source.counts() == {"blocks": 2, "samples": 200, "jump": 1}
    assert source.intake.last_drop[0] == "jump"
    source.block(200, 100)
    assert source.counts() == {"blocks": 3, "samples": 300, "jump": 1}


@pytest.mark.parametrize("overlap", [1, 60, 99])
def test_overlap_is_trimmed(source, overlap):
    source.block(200 - overlap, 100)
    source.send(encode_end("aft", "a"))
    kept = 100 - overlap
    assert source.counts() == {
        "blocks": 3, "samples": 200 + kept, "trimmed_samples": overlap, "unused_samples": (200 + kept) % 32,
    }  # fmt: skip
    assert spans(source) == [(0, 0, 200 + kept)]


def test_longer_overlap_than_the_last_block_is_trimmed(source):
    source.block(0, 250)
    assert source.counts() == {"blocks": 3, "samples": 250, "trimmed_samples": 200}


@pytest.mark.parametrize("first", [0, 50, 100])
def test_block_wholly_before_is_a_repeat(source, first):
    source.block(first, 100)
    source.block(200, 100)
    assert source.counts() == {"blocks": 3, "samples": 300, "repeat": 1}


def test_repeat_of_the_last_block_does_not_make_the_next_a_restart(source):
    source.block(100, 100)
    source.block(200, 100)
    assert source.counts() == {"blocks": 3, "samples": 300, "repeat": 1}
    assert source.hops[-1].epoch == 0


def test_repeats_sent_again_in_a_row_are_all_repeats(source):
    source.block(0, 100)
    source.block(100, 100)  # follows without a seam, but its t is not after the last accepted
    source.block(200, 100)
    assert source.counts() == {"blocks": 3, "samples": 300, "repeat": 2}


@pytest.mark.parametrize(("first", "reason"), [(0, "repeat"), (10**15, "jump")])
def test_second_block_without_a_seam_and_later_restarts(source, first, reason):
    later = source.t(200) + SECOND
    source.block(first, 70, t=later)
    out = source.block(first + 70, 30, t=later + 70_000_000)
    assert source.counts() == {"blocks": 3, "samples": 230, "restarts": 1, "unused_samples": 8, reason: 1}
    assert [type(item).__name__ for item in out] == ["Hop", "RunEnd", "HealthProduct"]
    assert out[1] == RunEnd("a", 0)
    source.block(first + 100, 100, t=later + 100_000_000)
    source.send(encode_end("aft", "a"))
    assert spans(source) == [(0, 0, 200), (1, first + 70, first + 200)]


def test_restart_needs_a_later_time(source):
    source.block(10**9, 100, t=source.t(100))
    source.block(10**9 + 100, 100, t=source.t(100))  # the t of the last accepted block: not after it
    assert source.counts() == {"blocks": 2, "samples": 200, "jump": 2}
    source.block(10**9 + 200, 100, t=source.t(100) + 1)
    assert source.counts()["restarts"] == 1


def test_restart_needs_no_seam(source):
    source.block(10**9, 100, t=source.t(300))
    source.block(10**9 + 101, 100, t=source.t(400))
    source.block(10**9 + 200, 100, t=source.t(500))
    assert source.counts() == {"blocks": 2, "samples": 200, "jump": 3}


def test_accepted_block_in_between_clears_the_candidate(source):
    source.block(10**9, 100, t=source.t(300))
    source.block(200, 100)
    source.block(10**9 + 100, 100, t=source.t(400))
    assert source.counts() == {"blocks": 3, "samples": 300, "jump": 2}


def test_refused_block_in_between_does_not_clear_the_candidate(source):
    source.block(10**9, 100, t=source.t(300))
    source.block(10**9 + 100, 100, t=-1)
    source.send([b"nonsense"])
    source.block(10**9 + 100, 100, t=source.t(400))
    assert source.counts() == {
        "blocks": 3, "samples": 300, "jump": 1, "restarts": 1, "unused_samples": 8, "key": 1, "msgpack": 1,
    }  # fmt: skip


def test_time_going_back_is_dropped_until_a_second_block_follows(source):
    source.block(200, 100, t=source.t(100) - 1)
    assert source.counts() == {"blocks": 2, "samples": 200, "time": 1}
    source.block(300, 100, t=source.t(0))
    assert source.counts() == {"blocks": 3, "samples": 300, "time": 1, "restarts": 1, "unused_samples": 8}
    source.send(encode_end("aft", "a"))
    assert spans(source) == [(0, 0, 200), (1, 300, 400)]


def test_time_equal_to_the_last_is_accepted_as_a_clock_jump(source):
    source.block(200, 100, t=source.t(100))
    assert source.counts() == {"blocks": 3, "samples": 300, "clock_jumps": 1}


def test_single_wrong_time_is_mended_by_the_block_sent_again(source):
    source.block(200, 100, t=0)
    source.block(200, 100)
    assert source.counts() == {"blocks": 3, "samples": 300, "time": 1}


def test_gap_found_by_a_block_dropped_for_its_time_is_not_counted(source):
    source.block(210, 100, t=0)
    assert source.counts() == {"blocks": 2, "samples": 200, "time": 1}


def test_trim_found_by_a_block_dropped_for_its_time_is_not_counted(source):
    source.block(150, 100, t=0)
    assert source.counts() == {"blocks": 2, "samples": 200, "time": 1}


def test_time_of_the_first_sample_kept_counts_not_that_of_the_first_sent(source):
    source.block(50, 200)  # its t is before the last accepted, that of sample 200 is not
    assert source.counts() == {"blocks": 3, "samples": 250, "trimmed_samples": 150}


def test_index_rules_come_before_the_time_rule(source):
    source.block(0, 100, t=0)
    source.block(10**9, 100, t=0)
    assert source.counts() == {"blocks": 2, "samples": 200, "repeat": 1, "jump": 1}


@pytest.mark.parametrize(("step_ns", "jumps"), [(10_000_000, 0), (10_000_001, 1), (-10_000_000, 0), (-10_000_001, 1)])
def test_clock_jump_is_counted_once_per_step(source, step_ns, jumps):
    for k in range(2, 6):
        source.block(100 * k, 100, t=source.t(100 * k) + step_ns)
    assert source.counts() == {"blocks": 6, "samples": 600} | ({"clock_jumps": jumps} if jumps else {})


def test_clock_jump_is_judged_over_a_gap(source):
    source.block(700, 100)
    assert "clock_jumps" not in source.counts()
    source.block(900, 100, t=source.t(900) + 11_000_000)
    assert source.counts()["clock_jumps"] == 1


def test_another_run_ends_the_current_one(source):
    out = source.block(77, 100, run="b", t=3)
    assert out[1] == RunEnd("a", 0)
    assert source.counts() == {"blocks": 3, "samples": 300, "unused_samples": 8}
    source.block(200, 100)
    source.send(encode_end("aft", "a"))
    assert source.counts()["old_run"] == 2
    assert source.intake.run == "b"


def test_old_run_is_forgotten_with_the_next(source):
    source.block(0, 100, run="b")
    source.block(0, 100, run="c")
    source.block(200, 100)
    assert source.intake.run == "a"
    source.block(0, 100, run="c")
    assert source.counts()["old_run"] == 1


def test_end_of_the_current_run(source):
    out = source.send(encode_end("aft", "a"))
    assert [type(item).__name__ for item in out] == ["Hop", "RunEnd"]
    assert source.intake.state == "waiting"
    assert source.counts() == {"blocks": 2, "samples": 200, "unused_samples": 8}


def test_end_that_names_no_current_run_is_dropped(source, source_for):
    source.send(encode_end("aft", "b"))
    source.send(encode_end("aft", "a"))
    source.send(encode_end("aft", "a"))
    assert source.counts()["old_run"] == 2
    new = source_for()
    new.send(encode_end("aft", "a"))
    assert new.counts() == {"old_run": 1}


def test_same_name_begins_anew_after_end(source):
    source.send(encode_end("aft", "a"))
    source.block(5, 100, t=source.t(100) + 1)
    source.send(encode_end("aft", "a"))
    assert spans(source) == [(0, 0, 200), (1, 5, 105)]
    assert source.counts() == {"blocks": 3, "samples": 300, "unused_samples": 8 + 4}


def test_same_name_anew_with_an_earlier_time_is_dropped_then_restarts(source):
    source.send(encode_end("aft", "a"))
    source.block(0, 100)
    assert source.counts()["time"] == 1
    assert source.intake.state == "waiting"
    source.block(100, 100)
    assert source.counts() == {"blocks": 3, "samples": 300, "time": 1, "restarts": 1, "unused_samples": 8}
    assert source.intake.state == "running"


def test_run_ended_by_end_is_old_while_another_is_current_unless_later(source):
    source.send(encode_end("aft", "a"))
    source.block(0, 100, run="b", t=source.t(1000))
    source.block(200, 100)
    assert source.counts()["old_run"] == 1
    source.block(200, 100, t=source.t(1001))
    assert source.intake.run == "a"


def test_run_replaced_may_come_back_when_its_successor_has_ended(source):
    source.block(0, 100, run="b", t=source.t(1000))
    source.send(encode_end("aft", "b"))
    source.block(200, 100)
    assert source.counts()["old_run"] == 1
    source.block(200, 100, t=source.t(1200))
    assert (source.intake.run, source.intake.state) == ("a", "running")


def test_run_ended_longer_ago_is_any_other(source):
    source.send(encode_end("aft", "a"))
    source.block(0, 100, run="b", t=source.t(1000))
    source.send(encode_end("aft", "b"))
    source.block(0, 100)
    assert (source.intake.run, source.counts()["blocks"]) == ("a", 4)


def test_run_begun_anew_and_then_replaced_is_old_however_late(source):
    source.send(encode_end("aft", "a"))
    source.block(200, 100)
    source.block(0, 100, run="b", t=source.t(1000))
    source.block(300, 100, t=source.t(2000))
    assert source.counts()["old_run"] == 1
    assert source.intake.run == "b"


def test_names_of_any_length_are_told_apart(source_for):
    source, long = source_for(), "x" * 60_000
    source.block(0, 100, run=long)
    source.block(100, 100, run=long)
    source.block(0, 100, run=long + "y")
    source.block(200, 100, run=long)
    assert source.counts() == {"blocks": 3, "samples": 300, "old_run": 1, "unused_samples": 8}
    assert source.hops[0].run == long


def test_time_of_a_trimmed_block_stays_within_its_range(source_for):
    source = source_for()
    source.block(0, 100, t=2**63 - 2)
    source.block(50, 100, t=2**63 - 1)
    assert source.hops[-1].times[-1, 1] == 2**63 - 1


@pytest.mark.parametrize("frames", [(64,), (64, 96), (8, 100), (90, 30, 500)])
def test_unused_samples_are_those_in_no_frame_of_any_band(frames):
    for length in range(0, 700, 7):
        covered = {
            i for frame in frames for k in range(2 * length // frame + 1)
            if k * frame // 2 + frame <= length for i in range(k * frame // 2, k * frame // 2 + frame)
        }  # fmt: skip
        assert unused_samples(length, frames) == length - len(covered)
