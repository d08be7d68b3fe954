"""Share of a frame under own pulses."""

from soundrose.beam.masking import PulseShadow
from soundrose.feed.hop import Pulse

S = 1_000_000_000


def shadow(*pulses, limit=256):
    made = PulseShadow(limit)
    for t_ns, length_s in pulses:
        made.add(Pulse(t_ns, "gun", length_s))
    return made


def test_part_of_a_frame_under_a_pulse():
    assert shadow((S, 0.5)).share(0, 2 * S) == 0.25
    assert shadow((-S, 1.5)).share(0, 2 * S) == 0.25
    assert shadow((-S, 5.0)).share(0, 2 * S) == 1.0
    assert shadow((2 * S, 1.0)).share(0, 2 * S) == 0.0


def test_time_under_two_pulses_counts_once():
    assert shadow((0, 1.0), (S // 2, 1.0), (S // 4, 0.25)).share(0, 2 * S) == 0.75


def test_pulses_come_in_any_order():
    assert shadow((S, 0.5), (0, 0.5)).share(0, 2 * S) == 0.5


def test_a_pulse_of_no_length_hides_nothing():
    assert shadow((0, 0.0)).share(0, S) == 0.0


def test_a_pulse_lies_on_every_frame_it_overlaps_and_is_then_forgotten():
    made = shadow((S, 1.0))
    assert [made.share(k * S // 2, S) for k in range(5)] == [0.0, 0.5, 1.0, 0.5, 0.0]
    assert made._pulses == []


def test_waiting_pulses_are_bounded():
    made = shadow(*((k * S, 0.5) for k in range(100)), limit=10)
    assert len(made._pulses) == 10
    assert made.share(99 * S, S) == 0.5
