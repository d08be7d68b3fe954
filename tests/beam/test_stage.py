"""A band: maps, their headers, notes, gaps, channels out of use, silence."""

from dataclasses import replace

import numpy as np
import pytest
from plane_waves import RATE, T0, C, hop, hops, line, maps_of, noise_spectrum, on_line, settings_for, with_band

from soundrose.array.geometry import cos_grid, line_geometry
from soundrose.array.shading import shading_weights
from soundrose.beam.powers import PowerReducer
from soundrose.beam.stage import PENDING_LIMIT, BandStage, Sink
from soundrose.errors import UsageError
from soundrose.feed.hop import Navigation, Positions, Pulse

FRAME, CHANNELS = 1024, 16
LINE = line(CHANNELS)
LENGTH = 1 << 14
SETTINGS = settings_for(LINE, frame=FRAME, beams=33, band_hz=(500.0, 1900.0), average_s=0.5)
#: dB re 1 uPa^2/Hz of noise with rms 1 uPa between 400 and 2000 Hz
DENSITY_DB = -10 * np.log10(1600.0)


def stage(settings=SETTINGS, **keywords):
    return BandStage(settings, settings.bands[0], **keywords)


def wave(cone_deg, *, positions=LINE, length=LENGTH, seed=1, **keywords):
    spectrum = noise_spectrum(length, RATE, 400, 2000, seed)
    return on_line(spectrum, length, positions, cone_deg, **keywords).astype(np.float32)


def beam_levels(product):
    """(beams,) dB, mean power over bins."""
    return 10 * np.log10(np.mean(power_of(product), axis=1))


def power_of(product):
    return 10 ** (product.level_db.astype(float) / 10)


def loudest_deg(product):
    return product.header["cone_deg"][int(beam_levels(product).argmax())]


def nearest_deg(cone_deg, beams=33):
    cosines = cos_grid(beams)
    return np.degrees(np.arccos(cosines[np.abs(cosines - np.cos(np.radians(cone_deg))).argmin()]))


def same_maps(ones, others):
    assert len(ones) == len(others)
    for one, other in zip(ones, others, strict=True):
        np.testing.assert_array_equal(one.level_db, other.level_db)
        assert one.header == other.header


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


def test_kernels_give_the_same_map_within_1e_5():
    samples = wave(64.0)
    settings = with_band(SETTINGS, kernel="general")
    pairs, general = stage(), stage(settings)
    assert (pairs.kernel, general.kernel) == ("pairs", "general")
    for one, other in zip(maps_of(pairs, samples, 512), maps_of(general, samples, 512), strict=True):
        a, b = (power_of(m) for m in (one, other))
        assert np.all(np.abs(a - b) <= 1e-5 * b.max(axis=0))


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
    made = stage(with_band(SETTINGS, average_s=0.032))
    maps = maps_of(made, np.concatenate([wave(90.0)[:, :2048], np.zeros((CHANNELS, 100 * FRAME))], axis=1), 512)
    assert np.all(maps[-1].level_db == -300.0)
    content = made._content
    assert not np.any((content > 0) & (content < np.finfo(np.float32).tiny))


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


def test_sound_speed_acts_from_the_first_frame_at_or_after_its_time():
    """After the note the maps are those of a band that had the speed all along."""
    settings = with_band(SETTINGS, average_s=0.0)
    samples = wave(40.0, c=1450.0)
    when = 5 * 512
    for t, first_new in ((when, 5), (when + 1, 6), (when - 511, 5)):
        made = stage(settings)
        made.note(Navigation(T0 + t * 62500, "array", {"sound_speed_m_s": 1450.0}))
        maps = maps_of(made, samples, 512)
        told = maps_of(stage(replace(settings, water=replace(settings.water, sound_speed_m_s=1450.0))), samples, 512)
        old = maps_of(stage(settings), samples, 512)
        same_maps(maps, old[:first_new] + told[first_new:])
    assert made.sound_speed_m_s == 1450.0


def test_a_late_note_acts_from_the_next_frame():
    made = stage(with_band(SETTINGS, average_s=0.0))
    samples = wave(40.0)
    made.push(hop(samples[:, :4096]))
    made.note(Navigation(T0, "array", {"sound_speed_m_s": 1400.0}))
    assert made.sound_speed_m_s == C
    made.push(hop(samples[:, 4096:4608], 4096))
    assert made.sound_speed_m_s == 1400.0


def test_navigation_without_a_sound_speed_changes_nothing():
    made = stage()
    made.note(Navigation(T0, "array", {"heading_deg": 12.0}))
    assert made._pending == []


def test_small_changes_of_sound_speed_add_up_against_that_in_force():
    made = stage()
    samples = wave(40.0)
    speeds = []
    for k in range(6):
        made.note(Navigation(T0, "array", {"sound_speed_m_s": C + 0.4 * k}))
        made.push(hop(samples[:, :1024], 1024 * k))
        speeds.append(made.sound_speed_m_s)
    # 2 pi 1900 Hz 2.8125 m |1/c - 1/1500| is 0.006 rad at 0.4 m/s, 0.012 at 0.8
    assert speeds == pytest.approx([C, C, C + 0.8, C + 0.8, C + 1.6, C + 1.6])


def test_positions_turn_bearings_right_and_the_kernel_with_the_geometry():
    bent = LINE.copy()
    bent[:, 0] *= 0.8
    bent[5, 0] += 0.1
    made = stage(with_band(SETTINGS, average_s=0.0))
    samples = wave(nearest_deg(50.0), positions=bent)
    assert loudest_deg(made.push(hop(samples[:, :2048]))[-1]) != pytest.approx(nearest_deg(50.0))
    made.note(Positions(T0, bent))
    assert loudest_deg(made.push(hop(samples[:, 2048:4096], 2048))[-1]) == pytest.approx(nearest_deg(50.0))
    assert made.kernel == "general"
    made.note(Positions(T0, LINE))
    made.push(hop(samples[:, 4096:6144], 4096))
    assert made.kernel == "pairs"


def test_the_average_goes_on_over_new_weights():
    """From pairs to general and back the content keeps its beams: levels move by less than the weights changed."""
    bent = LINE.copy()
    bent[5, 0] += 0.01
    made, other = stage(), stage()
    samples = wave(40.0)
    before = made.push(hop(samples[:, :8192]))[-1]
    other.push(hop(samples[:, :8192]))
    made.note(Positions(T0, bent))
    after, plain = (s.push(hop(samples[:, 8192:8704], 8192))[-1] for s in (made, other))
    assert made.kernel == "general"
    assert after.header == plain.header
    assert np.abs(beam_levels(after) - beam_levels(plain))[beam_levels(before) > -60].max() < 0.5


@pytest.mark.parametrize("speed", [20.0, 1e-300])
def test_steering_that_cannot_be_keeps_the_old(speed):
    made = stage()
    made.note(Navigation(T0, "array", {"sound_speed_m_s": speed}))
    product = maps_of(made, wave(90.0), 512)[-1]
    assert (made.refused, made.sound_speed_m_s) == (1, C)
    assert loudest_deg(product) == pytest.approx(90.0)


def test_a_shading_that_the_new_line_does_not_bear_keeps_the_old():
    made = stage(with_band(SETTINGS, shading="chebyshev"))
    bent = LINE.copy()
    bent[5, 0] += 0.1
    made.note(Positions(T0, bent))
    maps_of(made, wave(90.0), 512)
    assert (made.refused, made.kernel) == (1, "pairs")


def test_waiting_notes_are_bounded_and_the_latest_stay():
    made = stage()
    for k in range(3 * PENDING_LIMIT):
        made.note(Navigation(T0 + k, "array", {"sound_speed_m_s": 1400.0 + k}))
    assert len(made._pending) == PENDING_LIMIT
    maps_of(made, wave(90.0)[:, :2048], 512)
    assert made.sound_speed_m_s == 1400.0 + 3 * PENDING_LIMIT - 1


def test_a_nested_band_not_centred_on_the_array_points_and_reads_right():
    """Hydrophones 0 to 15 of 64: delays about the band's own middle, so filters as short as if it were alone."""
    positions = line(64)
    settings = settings_for(
        positions, frame=FRAME, beams=33, band_hz=(500.0, 1900.0), average_s=0.5, channels=tuple(range(16))
    )
    made = stage(settings)
    assert made._kernel.steering.taps == stage()._kernel.steering.taps
    cone = nearest_deg(50.0)
    product = maps_of(made, wave(cone, positions=positions), 512)[-1]
    assert loudest_deg(product) == pytest.approx(cone)
    assert beam_levels(product).max() == pytest.approx(DENSITY_DB, abs=0.25)
    assert product.header["limits"]["channels"] == 16


def test_sampling_skew_is_steered_out():
    """Converters that sample channel after channel, a tenth of a sample apart, then by whole samples."""
    for skew in (np.arange(CHANNELS) * 0.1 / RATE, np.random.default_rng(3).uniform(-2, 2, CHANNELS) / RATE):
        settings = settings_for(
            LINE, frame=FRAME, beams=33, band_hz=(500.0, 1900.0), average_s=0.5, delay_s=tuple(skew)
        )
        cone = nearest_deg(50.0)
        made = stage(settings)
        product = maps_of(made, wave(cone, delay_s=skew), 512)[-1]
        plain = maps_of(stage(), wave(cone), 512)[-1]
        assert made.kernel == "general"
        assert np.abs(beam_levels(product) - beam_levels(plain))[beam_levels(plain) > DENSITY_DB - 25].max() < 0.05


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
