"""Hops between ingest and bands: bytes out, the same values in."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from soundrose.errors import WireError
from soundrose.feed.hop import Hop, Navigation, Positions, Pulse
from soundrose.feed.ring import Given
from soundrose.feed.stream import (
    Report,
    Welcome,
    decode_given,
    decode_report,
    encode_given,
    encode_report,
    encode_welcome,
)


def make_given(channels: int, length: int, seed: int, missed: int) -> Given:
    rng = np.random.default_rng(seed)
    hop = Hop(
        run="Skarv 7 \u00e5",
        epoch=3,
        first=2**52,
        times=np.array([[2**52 - 5, 1_796_133_600_000_000_001], [2**52 + 1, 1_796_133_600_000_000_777]], np.int64),
        samples=rng.standard_normal((channels, length), dtype=np.float32),
        bad=rng.random(channels) < 0.5,
        clipped=rng.integers(0, 9, channels, dtype=np.int32),
        received_ns=12345678901234,
    )
    notes = (
        Navigation(7, "ship", {"sound_speed_m_s": 1487.2, "heading_from": "compass"}),
        Positions(8, rng.standard_normal((channels, 3))),
        Pulse(9, "gun", 0.2),
    )
    return Given(hop, notes, missed, seed % 2 == 1)


@given(st.integers(1, 5), st.integers(1, 40), st.integers(0, 99), st.integers(0, 1000))
@settings(max_examples=30, deadline=None)
def test_hop_comes_out_as_it_went_in(channels, length, seed, missed):
    before = make_given(channels, length, seed, missed)
    after = decode_given([bytes(part) for part in encode_given(before)])
    assert isinstance(after, Given)
    for name in ("samples", "times", "bad", "clipped"):
        left, right = getattr(before.hop, name), getattr(after.hop, name)
        assert left.dtype == right.dtype
        np.testing.assert_array_equal(left, right)
    assert (after.hop.run, after.hop.epoch, after.hop.first) == (before.hop.run, before.hop.epoch, before.hop.first)
    assert (after.hop.received_ns, after.missed) == (before.hop.received_ns, missed)
    assert after.resumed == before.resumed
    assert after.notes[0] == before.notes[0]
    np.testing.assert_array_equal(after.notes[1].positions_m, before.notes[1].positions_m)
    assert after.notes[2] == before.notes[2]


def test_welcome_and_report_come_out_as_they_went_in():
    report = Report("low", "0123", "4567", 12)
    assert decode_report(encode_report(report)) == report
    welcome = Welcome("4567", "host")
    assert decode_given(encode_welcome(welcome)) == welcome


@pytest.mark.parametrize("data", [b"", b"\xc1", b"\x93\x01\x02\x03", encode_report(Report("a", "b", "c", 1))[:-1]])
def test_report_that_is_none_is_refused(data):
    with pytest.raises(WireError) as caught:
        decode_report(data)
    assert caught.value.reason == "report"


def test_hop_cut_short_is_refused():
    parts = [bytes(part) for part in encode_given(make_given(2, 8, 0, 0))]
    for cut in ([], [b"welcome", b"\xc0"], parts[:1], parts[:4], [*parts[:2], parts[2][:-3], *parts[3:]]):
        with pytest.raises(WireError):
            decode_given(cut)
