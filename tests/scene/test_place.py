"""Hydrophones in the world: straight, pitched, hanging through, bent in a turn; and the truth of a scene."""

import numpy as np
import pytest
from small_scene import contact, small_scene

from soundrose.scene.place import Line, arrivals, bounces_up_to, hydrophone_delays
from soundrose.scene.truth import Truth, decidecades


def line_of(**own):
    scene = small_scene(own=own, array={"hydrophones": 41, "spacing_m": 1.0})
    return scene, Line(scene.own, np.array(scene.array.positions_m))


def test_a_straight_tow_is_the_array_as_listed_behind_the_ship():
    scene, line = line_of(heading_deg=90.0, speed_m_s=2.0, layback_m=300.0)
    assert line.origin(np.array([10.0]))[0] == pytest.approx([0.0, -280.0, 20.0], abs=1e-9)
    assert line.shape(10.0) == pytest.approx(np.array(scene.array.positions_m), abs=1e-9)
    assert line.forward(np.array([10.0]))[0] == pytest.approx([0, 1, 0], abs=1e-12)


def test_pitch_lifts_the_forward_end():
    _, line = line_of(pitch_deg=5.0)
    places = line.places(np.array([0.0]))[0]
    assert places[0, 2] == pytest.approx(20 - 20 * np.sin(np.deg2rad(5)))
    assert line.shape(0.0)[0] == pytest.approx([20, 0, 0], abs=1e-9)  # in its own frame it is straight


def test_sag_hangs_the_middle_below_the_ends_and_keeps_the_mean_depth():
    _, line = line_of(sag_m=3.0)
    shape = line.shape(0.0)
    assert shape[20, 2] - shape[0, 2] == pytest.approx(3.0)
    assert shape[:, 2].mean() == pytest.approx(0, abs=1e-12)


def test_in_a_turn_the_line_is_an_arc_of_the_way():
    """2.2 m/s and 0.5 deg/s: radius 252.1 m; ends of 40 m lie 20²/(2 R) = 0.79 m towards the centre, to starboard."""
    _, line = line_of(speed_m_s=2.2, layback_m=100.0, legs=[{"seconds": 600, "turn_deg_s": 0.5}])
    radius = 2.2 / np.deg2rad(0.5)
    shape = line.shape(300.0)
    bow = shape[[0, 40], 1].mean() - shape[20, 1]
    assert bow == pytest.approx(radius * (1 - np.cos(20 / radius)), rel=1e-6)
    assert line.shape(5.0)[:, 1] == pytest.approx(0, abs=1e-9)  # not yet there


def test_ways_of_sound_are_one_three_five_seven():
    assert [len(bounces_up_to(most)) for most in range(4)] == [1, 3, 5, 7]
    assert [b.name for b in bounces_up_to(3)] == ["direct", "s", "b", "sb", "bs", "sbs", "bsb"]
    factors = [b.factor(6.0) for b in bounces_up_to(3)]
    half = 10 ** (-6 / 20)
    assert factors == pytest.approx([1, -1, half, -half, -half, half, -(half**2)])


def test_hydrophone_delays_agree_with_a_search_for_each():
    scene = small_scene(own={"speed_m_s": 3.0}, contacts=[contact(range_m=150.0, speed_m_s=8.0, course_deg=200.0)])
    line = Line(scene.own, np.array(scene.array.positions_m))
    t, emitter = np.array([0.0, 7.0]), scene.emitters[0]
    found = hydrophone_delays(arrivals(emitter, line, scene.water, t), line, scene.water, t)[0]
    for i, at in enumerate(t):
        for m in range(8):
            ear = line.places(np.array([at]))[0, m]
            tau = 0.0
            for _ in range(30):
                place = np.append(emitter.way.place(np.array([at - tau]))[0], emitter.depth_m)
                tau = np.linalg.norm(place - ear) / 1500.0
            assert found[i, m] == pytest.approx(tau, abs=1e-12)


def test_change_of_delay_is_the_derivative_of_the_delay():
    scene = small_scene(own={"speed_m_s": 3.0}, contacts=[contact(range_m=150.0, speed_m_s=8.0, course_deg=200.0)])
    line = Line(scene.own, np.array(scene.array.positions_m))
    t = 3.0 + np.array([-1e-3, 0.0, 1e-3])
    arrival = arrivals(scene.emitters[0], line, scene.water, t)
    slope = (arrival.delay_s[0, 2] - arrival.delay_s[0, 0]) / 2e-3
    assert arrival.stretch[0, 1] == pytest.approx(slope, abs=1e-9)


def test_truth_says_where_own_ship_and_its_bounce_are():
    """Layback 320 m, hull 4 m, array 12 m, bottom 240 m: by hand the bottom image is at 476 m, 464 m below the array:
    cone angle atan(464 / 320) = 55.4 deg; the straight way atan(8 / 320) = 1.43 deg."""
    scene = small_scene(
        water={"depth_m": 240.0},
        own={"layback_m": 320.0, "array_depth_m": 12.0, "speed_m_s": 0.0,
             "sources": [{"name": "hull", "depth_m": 4.0, "bounces": 1, "level_db": 130.0}]},
    )  # fmt: skip
    ways = {way["bounces"]: way for way in Truth(scene).at(0.0)["contacts"][0]["ways"]}
    assert ways["direct"]["cone_deg"] == pytest.approx(np.rad2deg(np.arctan(8 / 320)), abs=1e-6)
    assert ways["b"]["cone_deg"] == pytest.approx(np.rad2deg(np.arctan(464 / 320)), abs=1e-6)
    assert ways["b"]["distance_m"] == pytest.approx(np.hypot(320, 464))


def test_truth_gives_levels_cone_angles_and_sides():
    """A flat spectrum of 120 dB/Hz (corner far up) over the decidecade at 1 kHz, 230.26 Hz wide, from 500 m."""
    scene = small_scene(
        contacts=[
            contact(bearing_deg=60.0, level_db=120.0, slope_db=0.0, tones=[[2000.0, 150.0]]),
            contact(name="two", bearing_deg=300.0),
        ]
    )
    one, two = Truth(scene).at(4.0)["contacts"]
    assert (one["cone_deg"], one["side"], two["side"]) == (pytest.approx(60.0), "starboard", "port")
    centres = [round(c, 3) for c, _, _ in decidecades(8000.0)]
    levels = dict(zip(centres, one["ways"][0]["level_db"], strict=True))
    width = 1000 * (10**0.05 - 10**-0.05)
    assert levels[1000.0] == pytest.approx(120 + 10 * np.log10(width) - 20 * np.log10(500), abs=0.01)
    noise = 1e12 * 1995.262 * (10**0.05 - 10**-0.05)  # beside the tone
    assert levels[1995.262] == pytest.approx(10 * np.log10(1e15 + noise) - 20 * np.log10(500), abs=0.01)


def test_truth_knows_when_a_caller_sounds():
    calls = [{"shape": "sweep", "level_db": 150.0, "length_s": 0.5, "from_hz": 500.0, "to_hz": 900.0}]
    scene = small_scene(
        contacts=[
            contact(
                kind="animal", range_m=1500.0, level_db=None, tones=None, calls=calls, first_s=2.0, interval_s=100.0
            )
        ]
    )
    truth = Truth(scene)  # heard a second later than it is given off
    assert [truth.at(t)["contacts"][0]["sounding"] for t in (2.2, 3.2, 3.6)] == [False, True, False]
