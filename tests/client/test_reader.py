"""Holes, counters and the mailbox, without a socket."""

import msgpack
from hypothesis import given
from hypothesis import strategies as st

from soundrose_client import Hole, Mailbox, Reader


def test_missing_numbers_are_counted_on_the_next_message(make_map):
    holes: list[Hole] = []
    reader = Reader(holes.append)
    missed = [reader.push(make_map(seq=seq)).missed for seq in (4, 5, 9, 10)]
    assert missed == [0, 0, 3, 0]
    assert holes == [Hole("map/main", 3, "00000000000000aa", 9)]
    assert (reader.counters.missed, reader.counters.restarts, reader.counters.messages) == (3, 0, 4)


def test_new_start_is_a_hole_of_unknown_size(make_map):
    holes: list[Hole] = []
    reader = Reader(holes.append)
    reader.push(make_map(seq=4, start="a"))
    assert reader.push(make_map(seq=0, start="b")).missed is None
    assert reader.push(make_map(seq=1, start="b")).missed == 0
    assert holes == [Hole("map/main", None, "b", 0)]
    assert (reader.counters.missed, reader.counters.restarts) == (0, 1)


def test_topics_are_followed_apart(make_map, make_plain):
    reader = Reader()
    for parts in (make_map(seq=3), make_plain("health", seq=8), make_map(seq=4), make_plain("health", seq=9)):
        assert reader.push(parts).missed == 0


def test_repeated_or_late_number_is_no_hole(make_map):
    reader = Reader()
    assert [reader.push(make_map(seq=seq)).missed for seq in (5, 6, 3, 6, 7)] == [0, 0, 0, 0, 0]
    assert (reader.counters.disordered, reader.counters.missed) == (2, 0)


def test_malformed_messages_are_counted_by_reason_and_leave_a_hole(make_map):
    reader = Reader()
    assert reader.push(make_map(seq=0)).missed == 0
    assert reader.push(make_map(seq=1, df_hz=-1.0)) is None
    assert reader.push([b"only one"]) is None
    assert reader.push(make_map(seq=2)).missed == 1
    assert reader.counters.malformed == {"key": 1, "frames": 1}


def test_endless_new_topics_do_not_make_memory_grow(make_plain):
    reader = Reader()
    for i in range(5000):
        reader.push(make_plain(f"topic-{i}", seq=7))
    assert len(reader._expected) == 4096
    assert reader.push(make_plain("topic-4999", seq=9)).missed == 1  # the newest are still followed


@given(st.sets(st.integers(0, 60), min_size=1))
def test_what_came_and_what_was_missed_add_up(numbers):
    reader = Reader()
    came = [
        reader.push([b"t", msgpack.packb({"v": 1, "kind": "t", "array": "a", "seq": seq, "start": "s"})])
        for seq in sorted(numbers)
    ]
    assert sum(message.missed for message in came) == max(numbers) - min(numbers) + 1 - len(numbers)


def test_newest_map_takes_the_older_ones_place_and_its_holes(make_map, make_plain):
    reader = Reader()
    box = Mailbox(reader.counters, {"map"})
    came = [make_map(seq=0), make_plain("detection", seq=0), make_map(seq=3), make_plain("detection", seq=1)]
    for parts in (*came, make_map(seq=4)):
        box.put(reader.push(parts))
    first, second, third, nothing = (box.take() for _ in range(4))
    assert (first.topic, first.seq, first.skipped, first.missed) == ("map/main", 4, 2, 2)
    assert [(m.kind, m.seq) for m in (second, third)] == [("detection", 0), ("detection", 1)]
    assert nothing is None
    assert reader.counters.skipped == 2


def test_unknown_hole_stays_unknown_when_messages_are_left_out(make_map):
    reader = Reader()
    box = Mailbox(reader.counters, {"map"})
    for parts in (make_map(seq=0, start="a"), make_map(seq=2, start="b"), make_map(seq=4, start="b")):
        box.put(reader.push(parts))
    newest = box.take()
    assert (newest.seq, newest.missed, newest.skipped) == (4, None, 2)


def test_mailbox_says_when_it_is_full(make_plain):
    reader = Reader()
    box = Mailbox(reader.counters)
    while not box.full:
        box.put(reader.push(make_plain("alert")))
    assert sum(1 for _ in iter(box.take, None)) == 4096
