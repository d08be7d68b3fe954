"""A band that is told things: notes, sound speed, positions, other geometries and sampling skew."""

from dataclasses import replace

import numpy as np
import pytest
from plane_waves import RATE, T0, C, hop, hops, line, maps_of, settings_for, with_band
from small_band import (
    CHANNELS,
    DENSITY_DB,
    FRAME,
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

from soundrose.beam.stage import PENDING_LIMIT
from soundrose.feed.hop import Navigation, Positions


def test_kernels_give_the_same_map_within_1e_5():
    samples = wave(64.0)
    settings = with_band(SETTINGS, kernel="general")
    pairs, general = stage(), stage(settings)
    assert (pairs.kernel, general.kernel) == ("pairs", "general")
    for one, other in zip(maps_of(pairs, samples, 512), maps_of(general, samples, 512), strict=True):
        a, b = (power_of(m) for m in (one, other))
        assert np.all(np.abs(a - b) <= 1e-5 * b.max(axis=0))


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


def test_notes_act_in_order_of_their_times_and_wait_for_them():
    made = stage(with_band(SETTINGS, average_s=0.0))
    samples = wave(40.0)
    for frame_i, speed in ((3, 1460.0), (1, 1420.0), (2, 1440.0)):
        made.note(Navigation(T0 + frame_i * 512 * 62500, "array", {"sound_speed_m_s": speed}))
    speeds = []
    for part in hops(samples[:, :3072], 512):
        made.push(part)
        speeds.append(made.sound_speed_m_s)
    assert speeds == [C, C, 1420.0, 1440.0, 1460.0, 1460.0]
    for frame_i, speed in ((5, 1500.0), (4, 1480.0)):  # both due at one frame: the later time rules
        made.note(Navigation(T0 + frame_i * 512 * 62500, "array", {"sound_speed_m_s": speed}))
    made.push(hop(samples[:, 3072:5120], 3072))
    assert made.sound_speed_m_s == 1500.0


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
