"""Framing: where frames begin, what they hold, what ends a stretch."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from plane_waves import T0, hop, hops

from soundrose.beam.frames import Framer, rows
from soundrose.errors import UsageError

N, RATE = 8, 1000.0


def ramp(length, first=0, channels=3):
    """Channel m holds 1000 m + index: a value says which sample it is."""
    return (np.arange(first, first + length) + 1000.0 * np.arange(channels)[:, None]).astype(np.float32)


def framer(channels=(0, 1, 2)):
    return Framer(channels, N, RATE)


def push_all(target, parts):
    """Frames of all hops, their samples copied (views hold until the next push)."""
    return [(frame, frame.samples.copy()) for part in parts for frame in target.push(part)]


@given(st.lists(st.integers(1, 40), min_size=1, max_size=12))
def test_frames_cover_every_half_frame_whatever_the_hop_lengths(lengths):
    total = sum(lengths)
    frames = push_all(framer(), hops(ramp(total), lengths, rate=RATE))
    assert [frame.first for frame, _ in frames] == list(range(0, total - N + 1, N // 2))
    for frame, samples in frames:
        np.testing.assert_array_equal(samples, ramp(N, frame.first))
        assert frame.t_ns == T0 + frame.first * 1_000_000


def test_frames_of_one_push_stay_whole_together():
    frames = framer().push(hop(ramp(10 * N), rate=RATE))
    assert len(frames) == 19
    for frame in frames:
        np.testing.assert_array_equal(frame.samples, ramp(N, frame.first))


def test_band_channels_come_in_the_bands_order():
    target = framer((2, 0))
    frame = target.push(hop(ramp(N), bad=[True, False, False], rate=RATE))[0]
    np.testing.assert_array_equal(frame.samples, ramp(N)[[2, 0]])
    assert frame.used.tolist() == [True, False]


def test_framing_begins_anew_after_a_gap_and_counts_it():
    target = framer()
    push_all(target, hops(ramp(10), 5, rate=RATE))
    frames = push_all(target, [hop(ramp(13, 17), 17, rate=RATE)])
    assert [frame.first for frame, _ in frames] == [17, 21]
    assert target.gaps == 1
    assert target.unused_samples == 2  # 0..7 filled a frame, 8 and 9 none
    first, second = (frame for frame, _ in frames)
    assert (first.elapsed, first.adjacent, first.since_gap) == (17, False, 0)
    assert (second.elapsed, second.adjacent, second.since_gap) == (4, True, 4)


def test_missed_hops_are_a_gap_even_where_the_index_goes_on():
    target = framer()
    target.push(hop(ramp(6), rate=RATE))
    assert target.push(hop(ramp(6, 6), 6, rate=RATE), missed=1) == []
    assert (target.gaps, target.unused_samples) == (1, 6)
    frame = target.push(hop(ramp(2, 12), 12, rate=RATE))[0]
    assert (frame.first, frame.elapsed, frame.since_gap) == (6, None, 0)


def test_a_new_epoch_begins_anew_and_is_no_gap():
    target = framer()
    push_all(target, hops(ramp(N + 3), 4, rate=RATE))
    frame = target.push(hop(ramp(N, 2), 2, epoch=1, rate=RATE))[0]
    assert (frame.epoch, frame.first, frame.elapsed, frame.since_gap) == (1, 2, None, None)
    assert (target.gaps, target.unused_samples) == (0, 3)


def test_hops_missed_before_a_new_run_are_no_gap_of_that_run():
    target = framer()
    target.push(hop(ramp(N), rate=RATE))
    frame = target.push(hop(ramp(N, 40), 40, epoch=1, rate=RATE), missed=3)[0]
    assert (target.gaps, frame.since_gap) == (0, None)


def test_a_band_started_anew_within_a_run_is_after_a_gap():
    frame = framer().push(hop(ramp(N, 40), 40, rate=RATE), resumed=True)[0]
    assert frame.since_gap == 0


def test_a_resumed_feed_that_goes_back_begins_anew():
    target = framer()
    push_all(target, hops(ramp(20), 4, rate=RATE))
    frame = target.push(hop(ramp(N, 4), 4, rate=RATE), resumed=True)[0]
    assert (frame.first, frame.elapsed, target.gaps) == (4, None, 1)


def test_end_of_a_run_counts_what_filled_no_frame():
    target = framer()
    target.push(hop(ramp(N + 3), rate=RATE))
    target.finish()
    assert target.unused_samples == 3
    assert target.push(hop(ramp(N), rate=RATE))[0].first == 0
    assert target.gaps == 0


def test_a_hop_that_goes_back_is_refused():
    target = framer()
    target.push(hop(ramp(6), rate=RATE))
    with pytest.raises(UsageError, match="at 6 already"):
        target.push(hop(ramp(6, 3), 3, rate=RATE))


def test_a_channel_bad_in_any_hop_of_the_frame_is_not_used():
    target = framer()
    parts = [hop(ramp(4, 4 * i), 4 * i, bad=[False, i == 2, False], rate=RATE) for i in range(5)]
    used = [frame.used[1] for frame, _ in push_all(target, parts)]
    assert used == [True, False, False, True]


def test_a_channel_beyond_any_sound_is_not_used_and_the_rest_is():
    samples = ramp(N)
    samples[1, 3] = -3e30
    frame = framer().push(hop(samples, rate=RATE))[0]
    assert frame.used.tolist() == [True, False, True]


def test_silence_is_told_from_sound():
    target = framer()
    samples = np.zeros((3, N), dtype=np.float32)
    assert target.push(hop(samples, rate=RATE))[0].silent
    samples[2, 1] = 1e-6
    assert not target.push(hop(samples, N, rate=RATE))[-1].silent


def test_clipped_samples_count_for_used_channels_in_proportion():
    target = framer()
    parts = [
        hop(ramp(4), 0, clipped=[2, 0, 5], bad=[False, False, True], rate=RATE),
        hop(ramp(8, 4), 4, clipped=[1, 3, 0], rate=RATE),
    ]
    clipped = [frame.clipped for frame, _ in push_all(target, parts)]
    assert clipped == [2 + 4 * 4 / 8, 4.0]


def test_times_come_from_the_block_with_the_first_sample():
    part = hop(ramp(12), rate=RATE)
    part.times.resize((2, 2), refcheck=False)
    part.times[1] = (4, T0 + 50_000_000)  # the second block's clock is 46 ms ahead
    assert [frame.t_ns - T0 for frame in framer().push(part)] == [0, 50_000_000]


def test_received_time_is_that_of_the_hop_with_the_last_sample():
    target = framer()
    frames = push_all(target, [hop(ramp(4, 4 * i), 4 * i, received_ns=i, rate=RATE) for i in range(4)])
    assert [frame.received_ns for frame, _ in frames] == [1, 2, 3]


def test_memory_does_not_grow_with_the_number_of_hops():
    target = framer()
    for part in hops(ramp(5000), [3, 7, 40], rate=RATE):
        target.push(part)
    assert target._buffer.shape[1] <= 4 * N + 40
    assert len(target._pieces) <= N
    assert len(target._starts) <= 2


def test_frame_length_must_be_even():
    with pytest.raises(UsageError, match="even"):
        Framer((0,), 7, RATE)


@pytest.mark.parametrize("channels", [(0, 1, 2, 3), (3, 2, 1, 0), (0, 2, 4), (4,), (5, 3, 1), (0, 1, 3), (2, 2)])
def test_rows_pick_what_a_list_would(channels):
    values = np.arange(6)
    np.testing.assert_array_equal(values[rows(channels)], values[list(channels)])
