"""The schedule of a replay."""

from math import inf

import pytest

from soundrose.errors import UsageError
from soundrose.feed.pacing import Pace, parse_speed


def test_blocks_are_due_when_their_last_sample_was_taken_and_never_drift():
    pace = Pace(16000.0, 2.0, 0)
    assert pace.due_s(800) == 0.025
    assert pace.due_s(16000 * 86400 * 30) == 86400 * 15.0  # a month, to the bit: no sum of steps


def test_as_fast_as_taken_is_due_at_once():
    assert Pace(16000.0, inf, 0).due_s(10**9) == 0.0


def test_feed_time_is_the_recordings_whatever_the_speed():
    for speed in (0.5, 3.0, inf):
        assert Pace(3000.0, speed, 7).t_ns(1000) == 333_333_333 + 7


@pytest.mark.parametrize(("text", "speed"), [("1", 1.0), ("2.5", 2.5), ("max", inf)])
def test_speed_is_a_number_or_max(text, speed):
    assert parse_speed(text) == speed


@pytest.mark.parametrize("text", ["0", "-1", "fast", "nan", "inf", ""])
def test_other_speeds_are_refused(text):
    with pytest.raises(UsageError, match="speed"):
        parse_speed(text)
