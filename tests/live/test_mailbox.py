"""What waits for a client, and the pace of maps."""

from hypothesis import given
from hypothesis import strategies as st

from soundrose.serve.mailbox import Mailbox, Pace

STEPS = st.lists(
    st.one_of(
        st.tuples(st.just("event"), st.integers(0, 99)),
        st.tuples(st.sampled_from(["map/a", "map/b", "status"]), st.integers(0, 99)),
        st.tuples(st.just("take"), st.just(0)),
    ),
    max_size=80,
)


@given(STEPS, st.integers(1, 5))
def test_events_come_in_order_and_the_newest_of_all_else_alone(steps, most):
    mailbox: Mailbox[tuple[str, int]] = Mailbox(most)
    events: list[tuple[str, int]] = []
    newest: dict[str, int] = {}
    for key, value in [*steps, *[("take", 0)] * 100]:
        if key == "event":
            assert mailbox.put_event("event", (key, value)) == (len(events) < most)
            if len(events) < most:
                events.append((key, value))
        elif key == "take":
            taken = mailbox.take()
            if taken is None:
                assert not events
                assert not newest
            elif taken[0] == "event":
                assert taken == events.pop(0)
            else:
                assert newest.pop(taken[0]) == taken[1]
        else:
            mailbox.put_newest(key, (key, value))
            newest[key] = value
        assert len(mailbox) == len(events) + len(newest) <= most + 3
        assert mailbox.waiting == len(events)


@given(st.integers(1, 30), st.integers(1, 4))
def test_events_and_maps_take_turns(events, keys):
    mailbox: Mailbox[str] = Mailbox(100)
    for number in range(events):
        mailbox.put_event("e", f"e{number}")
    for number in range(keys):
        mailbox.put_newest(str(number), f"n{number}")
    taken = [mailbox.take() or "" for _ in range(2 * min(events, keys))]
    assert [entry[0] for entry in taken] == ["e", "n"] * min(events, keys)
    assert [entry for entry in taken if entry[0] == "n"] == [f"n{number}" for number in range(min(events, keys))]


def test_kinds_and_keys_not_wanted_any_more_are_forgotten():
    mailbox: Mailbox[int] = Mailbox()
    for number, kind in enumerate(["track", "alert", "track"]):
        mailbox.put_event(kind, number)
    mailbox.put_newest("map/main", 7)
    mailbox.put_newest("status", 8)
    mailbox.keep(lambda key: key in ("alert", "status"))
    assert [mailbox.take() for _ in range(3)] == [1, 8, None]


@given(st.integers(1, 40), st.integers(1, 40), st.integers(20, 200))
def test_pace_lets_the_share_asked_for_pass(rate_hz, source_hz, maps):
    """Of n maps at `source_hz`, min(1, rate/source) pass, give or take one at either end."""
    pace = Pace(float(rate_hz))
    passed = sum(pace.passes(k / source_hz) for k in range(maps))
    expected = maps * min(1.0, rate_hz / source_hz)
    assert expected - 1 <= passed <= expected + 1
    assert passed == maps or rate_hz < source_hz


@given(st.floats(0.5, 30), st.lists(st.floats(0, 3), min_size=1, max_size=60))
def test_pace_is_never_exceeded_by_more_than_two(rate_hz, waits):
    """In any stretch of time at most rate * time + 2 pass, however irregularly they come."""
    pace, now, times = Pace(rate_hz), 0.0, []
    for wait in waits:
        now += wait
        if pace.passes(now):
            times.append(now)
    for first, begin in enumerate(times):
        for last in range(first, len(times)):
            assert last - first + 1 <= rate_hz * (times[last] - begin) + 2 + 1e-6


def test_without_a_pace_everything_passes():
    pace = Pace(None)
    assert all(pace.passes(0.0) for _ in range(5))
