"""Places in the log as text: what is written comes back, what is not a place is told."""

import pickle
from datetime import UTC, datetime, timedelta, timezone

import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose.errors import UsageError
from soundrose.store.cursors import BEGIN, Cursor, CursorGone, parse_since
from soundrose.store.items import event_item

ids = st.text("0123456789abcdef", min_size=16, max_size=16)


@given(ids, st.integers(0, 10**18 - 1))
def test_cursor_comes_back_from_its_text(log, row):
    place = Cursor(log, row)
    assert Cursor.parse(str(place)) == place
    assert parse_since(str(place)) == place


@given(st.datetimes(datetime(1700, 1, 1), datetime(2250, 1, 1)), st.integers(-14 * 60, 14 * 60))
def test_time_with_any_offset_is_the_same_moment(naive, minutes):
    moment = naive.replace(tzinfo=timezone(timedelta(minutes=minutes)))
    since_1970 = moment - datetime(1970, 1, 1, tzinfo=UTC)
    assert parse_since(moment.isoformat()) == since_1970 // timedelta(microseconds=1) * 1000


@pytest.mark.parametrize(
    ("text", "t_ns"),
    [
        ("1970-01-01T00:00:00Z", 0),
        ("1970-01-01t00:00:01.5z", 1_500_000_000),
        ("1970-01-01T00:00:00.123456789Z", 123_456_789),
        ("1985-04-12T23:20:50.52Z", 482_196_050_520_000_000),  # RFC 3339, section 5.8; seconds by `date -u +%s`
        ("1996-12-19T16:39:57-08:00", 851_042_397_000_000_000),  # the same section: 1996-12-20T00:39:57Z
        ("1970-01-01T01:00:00 01:00", 0),  # a '+' of a query that was not escaped
    ],
)
def test_times_as_the_rfc_writes_them(text, t_ns):
    assert parse_since(text) == t_ns


@pytest.mark.parametrize("text", [None, BEGIN])
def test_nothing_asked_for_is_the_beginning(text):
    assert parse_since(text) is None


@pytest.mark.parametrize(
    "text",
    [
        "", "now", "17", "0123456789abcdef", "0123456789abcdef-", "0123456789ABCDEF-1", "0123456789abcdef--1",
        "0123456789abcdef-1 ", "0123456789abcdef-1234567890123456789", "2026-12-01", "2026-12-01T14:00:00",
        "2026-13-01T14:00:00Z", "2026-12-01T25:00:00Z", "0001-01-01T00:00:00+23:59", "9999-12-31T23:59:59Z",
        "1600-01-01T00:00:00Z", "２０２６-12-01T14:00:00Z",
    ],
)  # fmt: skip
def test_nonsense_is_told_from_a_place(text):
    with pytest.raises(UsageError, match=r"since is|cursor is"):
        parse_since(text)


@given(st.text(max_size=40))
def test_any_text_gives_a_place_or_a_usage_error(text):
    try:
        assert isinstance(parse_since(text), Cursor | int | None)
    except UsageError:
        pass


def test_cursor_of_a_wrong_form_says_what_to_send():
    with pytest.raises(UsageError, match="`next`"):
        Cursor.parse("x")


@pytest.mark.parametrize("why", ["retention", "another log", "ahead"])
def test_a_cursor_that_is_gone_keeps_its_reason_between_processes(why):
    again = pickle.loads(pickle.dumps(CursorGone(why)))
    assert (again.why, str(again)) == (why, str(CursorGone(why)))
    assert "begin anew" in str(again)


def test_item_has_time_beside_nanoseconds():
    item = event_item(Cursor("0" * 16, 7), "note", 1_796_133_600_000_000_000, 5, {"by": "a"})
    assert item == {
        "cursor": "0000000000000000-7", "kind": "note", "t": 1_796_133_600_000_000_000,
        "time": "2026-12-01T14:00:00.000000Z", "recorded": 5, "by": "a",
    }  # fmt: skip
