"""The ring of hops: credit, what a band that falls behind gets, and what `hold` holds."""

import numpy as np
import pytest

from soundrose.feed.hop import Hop, Navigation, Pulse
from soundrose.feed.ring import MAX_NOTES, WINDOW_HOLD, HopRing, ring_capacity


def hop(number: int, length: int = 4) -> Hop:
    return Hop(
        run="r",
        epoch=0,
        first=number * length,
        times=np.array([[number * length, 0]], np.int64),
        samples=np.zeros((2, length), np.float32),
        bad=np.zeros(2, np.bool_),
        clipped=np.zeros(2, np.int32),
    )


def note(t_ns: int) -> Navigation:
    return Navigation(t_ns, "array", {"sound_speed_m_s": 1500.0 + t_ns})


def numbers_taken(ring: HopRing, band: str = "a") -> list[tuple[int, int]]:
    taken = []
    while (given := ring.take(band)) is not None:
        taken.append((given.hop.first // 4, given.missed))
    return taken


def test_capacity_is_three_quarters_of_a_second_or_two_frames_of_the_slowest_band():
    assert ring_capacity(2048, 16000.0, [4096]) == 6
    assert ring_capacity(4096, 16000.0, [8192]) == 4
    assert ring_capacity(2048, 16000.0, [4096, 32768]) == 32


def test_band_that_keeps_up_gets_every_hop_in_order():
    ring = HopRing(3, False, ["a"])
    ring.join("a", "s", ())
    seen = []
    for number in range(20):
        ring.add_hop(hop(number))
        seen += numbers_taken(ring)
        ring.acknowledge("a", number + 1)
    assert seen == [(number, 0) for number in range(20)]


def test_band_behind_the_ring_gets_the_newest_then_those_that_follow():
    ring = HopRing(3, False, ["a"])
    ring.join("a", "s", ())
    ring.add_hop(hop(0))
    assert numbers_taken(ring) == [(0, 0)]
    for number in range(1, 10):
        ring.add_hop(hop(number))
    assert numbers_taken(ring) == []  # still busy with hop 0
    ring.acknowledge("a", 1)
    assert numbers_taken(ring) == [(9, 8)]  # 1 to 8 are lost to it
    ring.add_hop(hop(10))
    ring.add_hop(hop(11))
    ring.acknowledge("a", 2)
    assert numbers_taken(ring) == [(10, 0)]
    ring.acknowledge("a", 3)
    assert numbers_taken(ring) == [(11, 0)]


def test_band_a_little_behind_still_gets_hops_in_a_row():
    ring = HopRing(3, False, ["a"])
    ring.join("a", "s", ())
    for number in range(3):
        ring.add_hop(hop(number))
    assert numbers_taken(ring) == [(0, 0)]
    ring.add_hop(hop(3))
    ring.acknowledge("a", 1)
    assert numbers_taken(ring) == [(1, 0)]


def test_hops_and_missed_add_up_to_all_hops_under_random_loads():
    rng = np.random.default_rng(5)
    for _ in range(50):
        ring = HopRing(4, False, ["a"])
        ring.join("a", "s", ())
        given_count = missed = acknowledged = 0
        last = -1
        for number in range(300):
            ring.add_hop(hop(number))
            for first, lost in numbers_taken(ring):
                assert first == last + lost + 1
                last, given_count, missed = first, given_count + 1, missed + lost
            acknowledged = min(given_count, acknowledged + int(rng.integers(0, 3)))
            ring.acknowledge("a", acknowledged)
            assert ring.held <= 4
        assert given_count + missed == last + 1


def test_hold_keeps_every_hop_for_the_slowest_band_and_blocks():
    ring = HopRing(3, True, ["a", "b"])
    assert ring.blocked  # nobody has joined
    ring.join("a", "s", ())
    assert ring.blocked
    ring.join("b", "s", ())
    assert not ring.blocked
    for number in range(WINDOW_HOLD + 2):
        ring.add_hop(hop(number))
    assert len(numbers_taken(ring, "a")) == WINDOW_HOLD
    assert ring.blocked
    ring.acknowledge("a", 2)
    assert [first for first, _ in numbers_taken(ring, "a")] == [WINDOW_HOLD, WINDOW_HOLD + 1]
    assert ring.held == WINDOW_HOLD + 2  # b has acknowledged none
    assert [first for first, _ in numbers_taken(ring, "b")] == list(range(WINDOW_HOLD))
    ring.acknowledge("b", 4)
    assert [first for first, _ in numbers_taken(ring, "b")] == [WINDOW_HOLD, WINDOW_HOLD + 1]
    assert not ring.blocked


def test_hold_gives_a_band_that_came_back_what_the_last_one_had_not_done():
    ring = HopRing(3, True, ["a"])
    ring.join("a", "first", ())
    for number in range(4):
        ring.add_hop(hop(number))
    assert len(numbers_taken(ring)) == 4
    ring.acknowledge("a", 2)
    ring.join("a", "second", ())
    assert numbers_taken(ring) == [(2, 0), (3, 0)]


def test_drop_tells_a_band_that_came_back_what_was_missed():
    ring = HopRing(3, False, ["a"])
    ring.join("a", "first", ())
    ring.add_hop(hop(0))
    assert numbers_taken(ring) == [(0, 0)]
    ring.acknowledge("a", 1)
    for number in range(1, 4):
        ring.add_hop(hop(number))
    ring.join("a", "second", ())
    ring.add_hop(hop(4))
    assert numbers_taken(ring) == [(4, 3)]


def test_first_hop_of_a_band_that_came_back_is_marked_resumed_and_no_other():
    ring = HopRing(3, False, ["a"])
    ring.join("a", "first", ())
    ring.add_hop(hop(0))
    assert not ring.take("a").resumed
    ring.acknowledge("a", 1)
    ring.join("a", "second", ())
    ring.add_hop(hop(1))
    ring.add_hop(hop(2))
    assert ring.take("a").resumed
    ring.acknowledge("a", 1)
    assert not ring.take("a").resumed


def test_band_that_followed_another_ingest_is_marked_resumed():
    ring = HopRing(3, False, ["a"])
    ring.join("a", "s", (), followed=True)
    ring.add_hop(hop(0))
    given = ring.take("a")
    assert (given.resumed, given.missed) == (True, 0)


def test_notes_come_with_the_hop_after_them_even_if_hops_were_lost():
    ring = HopRing(2, False, ["a"])
    ring.join("a", "s", (note(0),))
    ring.add_hop(hop(0))
    assert ring.take("a").notes == (note(0),)
    ring.add_note(note(1))
    ring.add_hop(hop(1))
    ring.add_note(note(2))
    for number in range(2, 8):
        ring.add_hop(hop(number))
    ring.acknowledge("a", 1)
    given = ring.take("a")
    assert (given.hop.first // 4, given.missed) == (7, 6)
    assert given.notes == (note(1), note(2))


def test_notes_are_bounded_and_the_newest_stay():
    ring = HopRing(2, False, ["a"])
    ring.join("a", "s", ())
    for number in range(MAX_NOTES + 10):
        ring.add_note(note(number))
    ring.add_hop(hop(0))
    notes = ring.take("a").notes
    assert len(notes) == MAX_NOTES
    assert notes[-1] == note(MAX_NOTES + 9)


def test_repeated_and_old_acknowledgements_change_nothing():
    ring = HopRing(3, True, ["a"])
    ring.join("a", "s", ())
    for number in range(4):
        ring.add_hop(hop(number))
    numbers_taken(ring)
    ring.acknowledge("a", 3)
    ring.acknowledge("a", 3)
    ring.acknowledge("a", 1)
    assert ring.held == 1
    ring.acknowledge("a", 99)
    assert ring.held == 0
    assert ring.idle


def test_unknown_band_is_refused():
    ring = HopRing(3, True, ["a"])
    with pytest.raises(KeyError):
        ring.join("b", "s", ())


def test_band_that_comes_again_in_hold_is_given_the_notes_of_its_hops_once_more():
    """A pulse is not among the notes in force: it must not be lost with the process that had it."""
    ring = HopRing(4, True, ["a"])
    ring.join("a", "s", ())
    ring.add_note(note(1))
    ring.add_hop(hop(0))
    ring.take("a")
    ring.acknowledge("a", 1)
    pulse = Pulse(5, "gun", 0.2)
    ring.add_note(pulse)
    ring.add_hop(hop(1))
    assert ring.take("a").notes == (pulse,)
    ring.join("a", "t", ())
    given = ring.take("a")
    assert (given.hop.first, given.notes) == (4, (pulse,))


def test_band_that_joins_is_given_a_pulse_that_stands_before_its_first_hop():
    ring = HopRing(4, False, ["a"])
    ring.add_hop(hop(0))
    pulse = Pulse(5, "gun", 0.2)
    ring.add_note(pulse)
    ring.join("a", "s", ())
    ring.add_hop(hop(1))
    assert ring.take("a").notes == (pulse,)
