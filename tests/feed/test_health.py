"""Health of the hydrophones: what is said, when, and what follows from it for the hops."""

import json
import math
import random

import numpy as np
import pytest

from soundrose.feed.messages import encode_end
from soundrose.product.messages import HealthProduct

SECOND = 10**9


def noise(samples, channels=3, seed=1):
    return np.random.default_rng(seed).integers(-3000, 3000, (channels, samples))


def judgements(out):
    return [item.header for item in out if isinstance(item, HealthProduct)]


def send(source, values, first=None, block=100, **form):
    """Values cut into blocks."""
    first = source.intake.next if first is None else first
    out = []
    for start in range(0, values.shape[1], block):
        part = values[:, start : start + block]
        out += source.block(first + start, part.shape[1], values=part, **form)
    return judgements(out)


def states(header):
    return [channel["state"] for channel in header["channels"]]


def test_one_judgement_comes_for_each_second_of_feed_time(source_for):
    source = source_for()
    got = send(source, noise(3500))
    assert [header["t"] for header in got] == [source.t(999), source.t(1999), source.t(2999)]
    assert [header["used"] for header in got] == [3, 3, 3]
    assert states(got[0]) == ["good"] * 3


def test_header_has_the_published_keys_and_plain_values(source_for):
    (header,) = send(source_for(), noise(1000))
    assert set(header) == {"t", "used", "channels"}
    assert all(set(channel) == {"i", "state", "level_db", "why"} for channel in header["channels"])
    assert [channel["i"] for channel in header["channels"]] == [0, 1, 2]
    assert json.loads(json.dumps(header)) == header


def test_level_is_that_of_the_mean_square_over_the_second(source_for):
    """A sine of amplitude A has the rms A / sqrt 2 over whole periods; zero power reads -300."""
    source = source_for()
    values = np.zeros((3, 1000))
    values[0] = 2000 / 2**15 * np.sin(2 * np.pi * 50 * np.arange(1000) / 1000)
    values[1] = 1.0 / 2**15
    (header,) = send(source, values, type="f4")
    levels = [channel["level_db"] for channel in header["channels"]]
    assert levels == pytest.approx([20 * math.log10(2000 / math.sqrt(2)), 0.0, -300.0], abs=2e-3)  # rounded to 0.001


def test_level_of_loudest_samples_is_finite(source_for):
    values = np.full((3, 1000), 9e13, np.float32)
    values[:, ::2] *= -1
    (header,) = send(source_for(), values, type="f4", unit="uPa")
    assert header["channels"][0]["level_db"] == pytest.approx(20 * math.log10(9e13), abs=1e-3)


@pytest.mark.parametrize("block", [1, 7, 100, 1000])
def test_judgements_do_not_depend_on_the_blocks(source_for, block):
    values = noise(2600)
    values[1, 300:400] = 5
    values[2, 1000:2000] = 7
    source, reference = source_for(), source_for()
    assert send(source, values, block=block) == send(reference, values, block=650)
    kinds = [type(item).__name__ for item in source.out]
    assert kinds == [type(item).__name__ for item in reference.out]
    assert [hop.bad.tolist() for hop in source.hops] == [hop.bad.tolist() for hop in reference.hops]


def test_hydrophone_without_variation_is_dead_and_out_from_the_next_hop(source_for):
    source = source_for()
    values = noise(4000)
    values[1, :1000] = 12
    got = send(source, values)
    assert [states(header)[1] for header in got] == ["dead", "good", "good", "good"]
    assert [header["used"] for header in got] == [2, 3, 3, 3]
    assert "12" in got[0]["channels"][1]["why"]
    bad = {hop.first: bool(hop.bad[1]) for hop in source.hops}
    assert [first for first in bad if bad[first]] == list(range(1024, 2000, 32))  # judged at 1000 and at 2000


def test_dead_hydrophone_is_back_after_one_clean_second(source_for):
    source = source_for()
    values = noise(4000)
    values[1, :1500] = 12
    got = send(source, values)
    assert [states(header)[1] for header in got] == ["dead", "dead", "good", "good"]
    assert "5 of 10 parts" in got[1]["channels"][1]["why"]
    assert [header["used"] for header in got] == [2, 2, 3, 3]


def test_hydrophone_without_a_finite_sample_is_dead(source_for):
    values = noise(1000) / 2.0**15
    values[0, ::50] = np.inf
    (header,) = send(source_for(), values, type="f4", block=50)
    assert states(header) == ["dead", "good", "good"]
    assert "no finite sample" in header["channels"][0]["why"]
    assert header["channels"][0]["level_db"] == -300.0


def test_nan_in_part_of_the_second_is_intermittent_with_its_share(source_for):
    values = noise(1000) / 2.0**15
    values[2, 210] = np.nan
    (header,) = send(source_for(), values, type="f4")
    assert states(header) == ["good", "good", "intermittent"]
    assert "10 %" in header["channels"][2]["why"]
    assert header["used"] == 3
    level = 10 * math.log10(np.mean((np.delete(values[2], range(200, 300)) * 2**15) ** 2))
    assert header["channels"][2]["level_db"] == pytest.approx(level, abs=1e-3)  # over the finite ones


def test_no_variation_in_part_of_the_second_is_intermittent(source_for):
    values = noise(1000)
    values[0, 300:500] = 0
    (header,) = send(source_for(), values)
    assert states(header) == ["intermittent", "good", "good"]
    assert "2 of 10 parts" in header["channels"][0]["why"]


def test_constant_value_with_a_misread_block_is_dead_all_the_same(source_for):
    values = np.full((3, 1000), 0.25)
    values[0, 150] = np.nan
    (header,) = send(source_for(), values, type="f4")
    assert states(header) == ["dead"] * 3


@pytest.mark.parametrize(("clips", "state"), [(1, "good"), (2, "clipped")])
def test_clipped_begins_above_its_share(source_for, clips, state):
    values = noise(1000)
    values[1, 100 : 100 + clips] = 32767
    (header,) = send(source_for(), values)
    assert states(header)[1] == state
    assert ("0.2 %" in header["channels"][1]["why"]) == (state == "clipped")
    assert header["used"] == 3


def test_states_have_their_precedence(source_for):
    values = np.zeros((3, 1000))
    values[2] = noise(1000)[0] / 2.0**15
    values[2, 0:20] = 1.0
    values[2, 500:600] = 0.0
    (header,) = send(source_for(exclude=(0,)), values, type="f4")
    assert states(header) == ["excluded", "dead", "clipped"]  # each of them is also something later in the order
    assert header["used"] == 1


def test_health_goes_on_over_gaps_and_runs_by_feed_time(source_for):
    source = source_for()
    send(source, noise(400))
    send(source, noise(300), first=600)
    source.send(encode_end("aft", "a"))
    source.run = "b"
    got = send(source, noise(200), first=950)
    assert [header["t"] for header in got] == [source.t(999)]
    assert states(got[0]) == ["good"] * 3


def test_long_gap_judges_the_second_by_what_it_has(source_for):
    source = source_for()
    send(source, noise(400))
    got = send(source, noise(1100), first=10_000)
    assert [header["t"] for header in got] == [source.t(399), source.t(10_999)]


def test_second_with_next_to_nothing_is_not_judged(source_for):
    source = source_for()
    send(source, noise(50))
    assert send(source, noise(500), first=30_000) == []


def test_restart_to_an_earlier_time_begins_a_second_there(source_for):
    source = source_for()
    send(source, noise(500), first=50_000)
    source.run = "b"
    got = send(source, noise(1000), first=0)
    assert [header["t"] for header in got] == [source.t(50_499), source.t(999)]


@pytest.mark.parametrize("rate_hz", [44_100.0, 500.0, 9.0])
def test_rounded_times_do_not_move_the_seconds(source_for, rate_hz):
    source, rng = source_for(rate_hz=rate_hz, frames=(16,)), random.Random(3)
    total = int(4 * rate_hz)
    values, sent, got = noise(total), 0, []
    while sent < total:
        count = min(rng.randint(1, max(int(rate_hz) // 5, 1)), total - sent)
        got += judgements(source.block(sent, count, values=values[:, sent : sent + count]))
        sent += count
    last = [source.t(round(k * rate_hz) - 1) for k in range(1, 5)]
    assert len(got) == 4
    assert all(abs(header["t"] - t) <= 1 for header, t in zip(got, last, strict=True))  # rounded twice
