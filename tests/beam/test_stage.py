"""A band: maps, their headers, notes, gaps, channels out of use, silence."""

from dataclasses import replace

import numpy as np
import pytest
from plane_waves import RATE, T0, C, hop, hops, line, maps_of, settings_for, with_band
from small_band import (
    CHANNELS,
    DENSITY_DB,
    FRAME,
    LENGTH,
    LINE,
    SETTINGS,
    beam_levels,
    loudest_deg,
    nearest_deg,
    power_of,
    same_maps,
    stage,
    wave,
)

from soundrose.array.geometry import line_geometry
from soundrose.array.shading import shading_weights
from soundrose.beam.powers import PowerReducer
from soundrose.beam.stage import BandStage, Sink
from soundrose.errors import UsageError
from soundrose.feed.hop import Navigation, Pulse


@pytest.mark.parametrize("cone_deg", [0.0, 40.0, 64.0, 90.0, 133.0, 180.0])
def test_a_plane_wave_is_loudest_on_its_beam_at_its_own_level(cone_deg):
    product = maps_of(stage(), wave(nearest_deg(cone_deg)), FRAME // 2)[-1]
    assert loudest_deg(product) == pytest.approx(nearest_deg(cone_deg))
    assert beam_levels(product).max() == pytest.approx(DENSITY_DB, abs=0.25)


def test_header_has_exactly_the_keys_of_the_contract_in_plain_values():
    product = maps_of(stage(), wave(90.0), FRAME // 2, received_ns=77)[-1]
    header = product.header
    assert set(header) == {
        "band", "run", "t", "t_end", "span_s", "averages", "shape", "cone_deg", "f0_hz", "df_hz", "quantity", "unit",
        "limits",
    }  # fmt: skip
    assert set(header["limits"]) == {"channels_used", "channels", "gap", "clipped", "alias_hz", "masked"}
    assert header["band"] == "main"
    assert header["unit"] == "dB re 1 µPa²/Hz"
    assert header["quantity"] == "spectral density level"
    assert header["shape"] == [33, 90] == list(product.level_db.shape)
    assert (header["f0_hz"], header["df_hz"], header["span_s"]) == (500.0, 15.625, 0.5)
    assert header["t"] == T0 + (LENGTH - FRAME) * 62500
    assert header["t_end"] == T0 + LENGTH * 62500
    assert header["cone_deg"][0] == 0.0
    assert header["cone_deg"][-1] == 180.0
    assert header["cone_deg"] == sorted(header["cone_deg"])
    assert [type(v) for v in header.values()] == [
        str, str, int, int, float, float, list, list, float, float, str, str, dict,
    ]  # fmt: skip
    assert [type(v) for v in header["limits"].values()] == [int, int, bool, float, float, type(None)]
    assert product.level_db.dtype == np.float32
    assert product.level_db.flags.c_contiguous
    assert (product.received_ns, product.topic) == (77, "map/main")


def test_one_map_for_each_half_frame_and_none_of_an_incomplete_one():
    made = stage()
    maps = maps_of(made, wave(90.0)[:, : 10 * FRAME + 100], 1000)
    assert len(maps) == made.maps == 19
    assert [m.header["t"] - T0 for m in maps] == [k * FRAME // 2 * 62500 for k in range(19)]
    assert made.unused_samples == 0
    made.finish()
    assert made.unused_samples == 100


@pytest.mark.parametrize("lengths", [64, 777, [1, 500, 3000], 16000])
def test_other_hop_lengths_give_the_same_bits(lengths):
    samples = wave(64.0)
    same_maps(maps_of(stage(), samples, lengths), maps_of(stage(), samples, FRAME // 2))


def test_alias_onset_is_told_only_inside_the_band():
    wide = settings_for(line(16, 1.5), frame=2048, band_hz=(50.0, 4000.0))
    assert maps_of(stage(wide), np.zeros((16, 2048)), 1024)[0].header["limits"]["alias_hz"] == C / 3.0
    assert maps_of(stage(), wave(90.0)[:, :FRAME], 512)[0].header["limits"]["alias_hz"] == pytest.approx(None)
    uneven = LINE.copy()
    uneven[3, 0] += 0.05
    uneven = settings_for(uneven, frame=2048, band_hz=(50.0, 4000.0))
    assert maps_of(stage(uneven), np.zeros((16, 2048)), 1024)[0].header["limits"]["alias_hz"] is None


def test_silence_reads_minus_300_from_the_start_and_for_ever():
    made = stage()
    for product in maps_of(made, np.zeros((CHANNELS, 4 * FRAME)), 512):
        assert np.all(product.level_db == -300.0)


def test_silence_after_sound_falls_to_minus_300_without_slow_numbers():
    """Each frame takes a factor e; on the way down no power is kept that single precision holds only slowly."""
    made = stage(with_band(SETTINGS, average_s=0.032))
    maps_of(made, wave(90.0)[:, :2048], 512)
    for part in hops(np.zeros((CHANNELS, 70 * FRAME)), 512, 2048):
        levels = made.push(part)[0].level_db
        content = made._content
        assert not np.any((content > 0) & (content < np.finfo(np.float32).tiny))
    assert np.all(levels == -300.0)
    assert made.push(hop(wave(90.0)[:, :512], 2048 + 70 * FRAME))[0].level_db.max() > -60


def test_no_map_is_ever_not_finite_whatever_a_float_feed_sends():
    made = stage()
    samples = wave(90.0).copy()
    samples[3, 2000:2100] = 3e38
    samples[7, 5000] = -1e20
    maps = maps_of(made, samples, 512)
    assert all(np.isfinite(m.level_db).all() for m in maps)
    used = [m.header["limits"]["channels_used"] for m in maps]
    assert min(used) == 15
    assert used[-1] == 16
    assert maps[-1].level_db.max() < 0


def test_a_channel_left_out_is_exact():
    """The beams are those of the other hydrophones with their weights over the sum of the weights left."""
    samples = wave(64.0)
    bad = np.zeros(CHANNELS, dtype=bool)
    bad[[2, 9]] = True
    broken = samples.copy()
    broken[bad] = 1e4 * np.random.default_rng(0).standard_normal((2, LENGTH))
    weights = shading_weights("hann", line_geometry(LINE, range(CHANNELS)))
    left = replace(SETTINGS.bands[0], shading=tuple(np.where(bad, 0.0, weights)), kernel="general")
    expected = maps_of(BandStage(SETTINGS, left), samples, 512)
    got = maps_of(stage(), broken, 512, bad=bad)
    assert got[-1].header["limits"]["channels_used"] == 14
    for one, other in zip(got, expected, strict=True):
        a, b = (power_of(m) for m in (one, other))
        assert np.all(np.abs(a - b) <= 1e-5 * b.max(axis=0))


def test_no_channel_left_reads_minus_300():
    maps = maps_of(stage(), wave(64.0), 512, bad=np.ones(CHANNELS))
    assert maps[-1].header["limits"]["channels_used"] == 0
    assert all(np.all(m.level_db == -300.0) for m in maps)


def test_average_is_the_weighted_sum_of_single_frames_over_a_gap_too():
    samples = wave(64.0)
    parts = [hop(samples[:, :4000]), hop(samples[:, 7000:12000], 7000)]
    singles, made = stage(with_band(SETTINGS, average_s=0.0)), stage()
    frames = [m for p in parts for m in singles.push(p)]
    maps = [m for p in parts for m in made.push(p)]
    starts = np.array([(m.header["t"] - T0) // 62500 for m in frames])
    assert starts.tolist() == [512 * k for k in range(6)] + [7000 + 512 * k for k in range(8)]
    power = np.stack([power_of(m) for m in frames])
    for i, product in enumerate(maps):
        weights = np.exp(-(starts[i] - starts[: i + 1]) / RATE / 0.5)
        expected = np.tensordot(weights / weights.sum(), power[: i + 1], 1)
        assert np.all(np.abs(power_of(product) - expected) <= 1e-5 * expected.max(axis=0))
    assert made.gaps == 1


def test_gap_is_told_while_younger_than_three_time_constants():
    made = stage(with_band(SETTINGS, average_s=0.1))  # 3 average_s = 4800 samples
    samples = wave(64.0)
    made.push(hop(samples[:, :2000]))
    maps = made.push(hop(samples[:, :12000], 3000))
    young = [m.header["limits"]["gap"] for m in maps]
    assert young == [512 * k < 4800 for k in range(len(maps))]
    assert young[0]
    assert not young[-1]


def test_gap_is_told_once_where_each_frame_stands_alone():
    made = stage(with_band(SETTINGS, average_s=0.0, map_rate_hz=10.0))
    samples = wave(64.0)
    before = [m for h in hops(samples[:, :5000], 500) for m in made.push(h)]
    after = made.push(hop(samples[:, :9000], 5200))
    assert [m.header["limits"]["gap"] for m in before + after] == [False] * len(before) + [True] + [False] * (
        len(after) - 1
    )


def test_a_new_run_begins_the_average_anew_and_its_time_may_go_back():
    samples = wave(64.0)
    made = stage()
    maps_of(made, samples, 512)
    again = maps_of(made, samples, 512, epoch=1, t0=T0 - 10**12)
    same_maps(again, maps_of(stage(), samples, 512, t0=T0 - 10**12))
    assert made.gaps == 0


def test_end_of_a_map_never_goes_back_within_a_run():
    made = stage()
    samples = wave(64.0)
    maps = made.push(hop(samples[:, :4096]))
    maps += made.push(hop(samples[:, 4096:8192], 4096, t0=T0 - 200_000_000))
    ends = [m.header["t_end"] for m in maps]
    assert ends == sorted(ends)
    assert maps[8].header["t"] < maps[7].header["t"]


def test_clipped_and_masked_are_weighted_as_the_map_is():
    made = stage(with_band(SETTINGS, average_s=0.0))
    made.note(Pulse(T0 + 512 * 62500, "gun", 256 / RATE))
    clipped = np.zeros(CHANNELS)
    clipped[4] = 16
    maps = made.push(hop(wave(90.0)[:, :2048], clipped=clipped))
    assert [m.header["limits"]["masked"] for m in maps] == [0.25, 0.25, 0.0]
    assert maps[0].header["limits"]["clipped"] == 8 / (16 * 1024)


def test_fewer_maps_by_feed_time_and_smaller_ones():
    samples = wave(64.0)
    every = maps_of(stage(), samples, 512)
    fewer = maps_of(stage(with_band(SETTINGS, map_rate_hz=10.0)), samples, 512)
    starts = [(m.header["t"] - T0) // 62500 for m in every]
    slots = [int(s * 10.0 // RATE) for s in starts]
    due = [m for i, m in enumerate(every) if i == 0 or slots[i] != slots[i - 1]]
    same_maps(fewer, due)
    small = maps_of(stage(with_band(SETTINGS, map_beams=11, map_bins=20)), samples, 512)[-1]
    assert small.header["shape"] == [11, 18] == list(small.level_db.shape)
    assert (small.header["df_hz"], small.header["f0_hz"]) == (5 * 15.625, 500.0 + 2 * 15.625)
    groups = power_of(every[-1]).reshape(11, 3, 18, 5).mean((1, 3))
    np.testing.assert_allclose(small.level_db, 10 * np.log10(groups), atol=1e-3)


def test_map_rate_at_or_above_the_frames_leaves_every_map():
    samples = wave(64.0)
    for rate in (RATE / 512, 1e6):
        same_maps(maps_of(stage(with_band(SETTINGS, map_rate_hz=rate)), samples, 512), maps_of(stage(), samples, 512))


def test_powers_before_averaging_go_to_the_sink_and_leave_the_maps_alone():
    samples, taken = wave(64.0), []
    cone_deg = maps_of(stage(), samples, 512)[0].header["cone_deg"]
    sink = Sink(taken.append, powers=PowerReducer(cone_deg, 500.0, 15.625, 33, 90))
    same_maps(maps_of(stage(sink=sink), samples, 512), maps_of(stage(), samples, 512))
    singles = maps_of(stage(with_band(SETTINGS, average_s=0.0)), samples, 512)
    assert len(taken) == len(singles)
    for given, single in zip(taken, singles, strict=True):
        assert np.all(np.abs(given.power - power_of(single)) <= 1e-5 * given.power.max(axis=0))
        assert (given.t_ns, given.t_end_ns) == (single.header["t"], single.header["t_end"])


def test_timings_come_from_the_clock_that_is_given_and_from_none_else():
    ticks = iter(range(10**6))
    made = stage(clock=lambda: next(ticks))
    maps = maps_of(made, wave(90.0)[:, :4096], 512)
    assert made.timings == {"transform": len(maps), "beams": len(maps), "levels": len(maps)}
    silent = stage()
    maps_of(silent, wave(90.0)[:, :4096], 512)
    assert silent.timings == {}


def test_a_band_between_two_bins_is_refused():
    with pytest.raises(UsageError, match="no bin between"):
        stage(with_band(SETTINGS, band_hz=(501.0, 502.0)))


def test_memory_stays_as_it_is():
    """Buffers keep their sizes over many frames, gaps and notes."""
    made = stage()
    samples = wave(64.0)

    def run(epoch):
        for k, part in enumerate(hops(samples, [300, 512, 1100], epoch=epoch, t0=T0 + epoch * 1_100_000_000)):
            if k % 5 == 4:
                continue
            made.note(Pulse(part.times[0, 1], "gun", 0.1))
            made.note(Navigation(part.times[0, 1], "array", {"sound_speed_m_s": 1480.0 + k % 7}))
            made.push(part)

    def held():
        return (
            made._framer._buffer.nbytes, made._content.nbytes, len(made._framer._pieces) <= 8, len(made._pending) <= 10,
            len(made._pulses._pulses) <= 40,
        )  # fmt: skip

    run(0)
    before = held()
    for epoch in range(1, 6):
        run(epoch)
    assert held() == before
