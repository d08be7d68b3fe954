"""Hops from blocks of any length: sample-exact against a plain model that knows nothing of hops, pieces or buffers."""

import random

import numpy as np
import pytest

from soundrose.feed.hop import RunEnd
from soundrose.feed.messages import encode_end, encode_samples

FORMS = [(kind, layout) for kind in ("i2", "i3", "i4", "f4") for layout in ("channel", "sample")]


def plain_model(blocks, hop):
    """(hops as lists of indices, counters): the rules for going on, gap, overlap and repeat, list by list."""
    stretches, gaps, lost, trimmed, repeats, expected = [[]], 0, 0, 0, 0, None
    for first, samples in blocks:
        indices = list(range(first, first + samples))
        if expected is not None and indices[-1] < expected:
            repeats += 1
            continue
        if expected is not None and first > expected:
            gaps, lost = gaps + 1, lost + first - expected
            stretches.append([])
        kept = [i for i in indices if expected is None or i >= expected]
        trimmed += samples - len(kept)
        stretches[-1] += kept
        expected = indices[-1] + 1
    cut = [part[i : i + hop] for part in stretches for i in range(0, len(part), hop)]
    return cut, {"gaps": gaps, "lost_samples": lost, "trimmed_samples": trimmed, "repeat": repeats}


def random_blocks(rng, count):
    """Lengths of 1 to 1000, now and then a gap, an overlap or a repeat. A repeat never precedes another one's seam."""
    blocks, following = [], rng.randrange(10**6)
    for _ in range(count):
        samples = rng.choice([1, 2, 31, 32, 33, rng.randint(1, 200), 1000])
        what = rng.random()
        first = following
        if what < 0.04:
            first += rng.choice([1, 32, 5000, 60_000])
        elif what < 0.08 and blocks and samples > 1:
            first -= min(rng.randint(1, samples - 1), blocks[-1][1])
        elif what < 0.1 and blocks:
            blocks.append((blocks[-1][0], blocks[-1][1]))
        blocks.append((first, samples))
        following = first + samples
    return blocks


@pytest.mark.parametrize("seed", range(4))
def test_ramp_through_a_thousand_blocks_is_sample_exact(source_for, seed):
    rng = random.Random(seed)
    blocks = random_blocks(rng, 1000)
    source = source_for(channels=2, full_scale_v=1.0)
    scale = {"i2": 2**15, "i3": 2**23, "i4": 2**31, "f4": 1}
    for first, samples in blocks:
        kind, layout = rng.choice(FORMS)
        values = source.signal(first, samples)
        values = values / 2.0**15 if kind == "f4" else values * (scale[kind] >> 15)
        source.block(first, samples, values=values, type=kind, layout=layout)
    source.send(encode_end("aft", "a"))
    expected, counts = plain_model(blocks, source.intake.hop_length)
    assert [(hop.first, hop.end) for hop in source.hops] == [(part[0], part[-1] + 1) for part in expected]
    for hop, part in zip(source.hops, expected, strict=True):
        ramp = [[(i % 8000 + 8000 * c) / 2.0**15 for i in part] for c in range(2)]
        np.testing.assert_array_equal(hop.samples, np.array(ramp, np.float32))
    got = source.counts()
    assert {key: got.get(key, 0) for key in counts} == counts
    assert got["samples"] == sum(map(len, expected))
    assert got["blocks"] == len(blocks) - counts["repeat"]


def test_blocks_of_one_sample_come_out_as_one_block_does(source_for):
    one, whole = source_for(), source_for()
    for i in range(1000):
        one.block(7 + i, 1)
    whole.block(7, 1000)
    assert [type(item) for item in one.out] == [type(item) for item in whole.out]
    for a, b in zip(one.hops, whole.hops, strict=True):
        assert (a.first, a.end, a.epoch, a.run) == (b.first, b.end, b.epoch, b.run)
        np.testing.assert_array_equal(a.samples, b.samples)
        assert [a.t_ns_at(i, 1000.0) for i in range(a.first, a.end)] == [
            b.t_ns_at(i, 1000.0) for i in range(b.first, b.end)
        ]


def test_hop_is_as_long_as_the_bands_want_and_owns_its_samples(source_for):
    source = source_for(frames=(64, 96))
    source.block(0, 500)
    assert source.intake.hop_length == 16
    first = source.hops[0]
    copy = first.samples.copy()
    source.block(500, 500)
    np.testing.assert_array_equal(first.samples, copy)
    assert first.samples.shape == (3, 16)
    assert first.samples.dtype == np.float32
    assert first.samples.flags.c_contiguous
    with pytest.raises(ValueError, match="read-only"):
        first.samples[0, 0] = 1


def test_hop_lists_the_time_of_every_block_in_it(source_for):
    source = source_for()
    t = source.t
    for first, samples, off in [(0, 40, 0), (40, 4, 1000), (44, 1, 2000), (40, 10, 3000), (50, 50, 4000)]:
        source.block(first, samples, t=t(first) + off)
    times = [hop.times.tolist() for hop in source.hops]
    assert times[0] == [[0, t(0)]]
    assert times[1] == [[0, t(0)], [40, t(40) + 1000], [44, t(44) + 2000], [45, t(45) + 3000], [50, t(50) + 4000]]
    assert times[2] == [[50, t(50) + 4000]]
    assert source.hops[1].t_ns_at(41, 1000.0) == t(41) + 1000
    assert source.hops[1].t_ns_at(47, 1000.0) == t(47) + 3000


def test_hop_says_when_its_last_sample_was_received(source_for):
    source = source_for()
    for k in range(4):
        source.out += source.intake.push(
            encode_samples("aft", "a", 20 * k, source.t(20 * k), 1000.0, source.signal(20 * k, 20), type="i2"),
            received_ns=100 + k,
        )
    assert [hop.received_ns for hop in source.hops] == [101, 103]


def test_misread_channel_is_bad_in_every_hop_of_its_block_and_good_after(source_for):
    source = source_for()
    source.block(0, 40)
    values = np.full((3, 30), 0.5)
    values[2, 29] = np.nan
    source.block(40, 30, values=values, type="f4")
    source.block(70, 100)
    assert [hop.bad.tolist() for hop in source.hops] == [
        [False] * 3, [False, False, True], [False, False, True], [False] * 3, [False] * 3,
    ]  # fmt: skip
    assert (source.hops[1].samples[2, 8:] == 0).all()
    assert (source.hops[1].samples[2, :8] != 0).all()
    assert source.counts() == {"blocks": 3, "samples": 170}


def test_clipped_samples_are_counted_in_their_hop(source_for):
    source = source_for()
    values = np.zeros((3, 100), np.int64)
    values[1, [5, 31, 32, 40]] = 32767
    values[2, 95] = -32768
    source.block(0, 100, values=values)
    assert [hop.clipped.tolist() for hop in source.hops] == [[0, 2, 0], [0, 2, 0], [0, 0, 1]]


def test_excluded_channel_is_bad_in_every_hop(source_for):
    source = source_for(exclude=(1,))
    source.block(0, 100)
    assert all(hop.bad.tolist() == [False, True, False] for hop in source.hops)


def test_end_comes_after_the_last_short_hop(source_for):
    source = source_for()
    source.block(0, 40)
    out = source.send(encode_end("aft", "a"))
    assert (out[0].first, out[0].length, out[0].epoch) == (32, 8, 0)
    assert out[1] == RunEnd("a", 0)
