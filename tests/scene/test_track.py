"""Ways through the water: straight, turning, by waypoints."""

import numpy as np
import pytest

from soundrose.scene.track import Leg, legs_way, waypoints_way


def test_a_straight_way_goes_its_course_also_before_its_beginning():
    way = legs_way((100.0, 200.0), 90.0, 4.0, [])
    assert way.place(np.array([-10.0, 0.0, 50.0])) == pytest.approx(np.array([[100, 160], [100, 200], [100, 400]]))
    assert way.velocity(np.array([3.0]))[0] == pytest.approx([0.0, 4.0], abs=1e-12)


def test_a_turn_to_starboard_is_a_circle_of_speed_over_rate():
    way = legs_way((0.0, 0.0), 0.0, 5.0, [Leg(180.0, 1.0)])
    radius = 5.0 / np.deg2rad(1.0)
    t = np.linspace(0, 180, 19)
    assert np.hypot(*(way.place(t) - [0.0, radius]).T) == pytest.approx(radius)
    assert way.place(np.array([180.0]))[0] == pytest.approx([0.0, 2 * radius], abs=1e-6)
    assert way.place(np.array([190.0]))[0] == pytest.approx([-50.0, 2 * radius], abs=1e-6)  # on, the other way


def test_legs_join_without_a_step():
    way = legs_way((0.0, 0.0), 30.0, 3.0, [Leg(20.0, 0.0), Leg(30.0, -2.0), Leg(10.0, 5.0)])
    t = np.arange(0, 80, 0.001)
    steps = np.linalg.norm(np.diff(way.place(t), axis=0), axis=1)
    assert steps == pytest.approx(0.003, rel=1e-5)  # also across the joints
    assert np.linalg.norm(way.velocity(t), axis=1) == pytest.approx(3.0)


def test_waypoints_are_reached_and_corners_rounded():
    way = waypoints_way([(0.0, 0.0), (1000.0, 0.0), (1000.0, 800.0)], 10.0, 100.0)
    t = np.arange(0, 200, 0.01)
    place = way.place(t)
    assert np.linalg.norm(np.diff(place, axis=0), axis=1).max() == pytest.approx(0.1, rel=1e-6)
    corner = np.hypot(*(place - [1000.0, 0.0]).T).min()
    assert corner == pytest.approx(100 * (np.sqrt(2) - 1), abs=0.1)  # a fillet passes its corner so far off
    end = (900 + 100 * np.pi / 2 + 700) / 10
    assert way.place(np.array([end]))[0] == pytest.approx([1000.0, 800.0], abs=1e-6)


def test_corners_are_tightened_where_legs_are_short_and_a_way_may_turn_back():
    way = waypoints_way([(0.0, 0.0), (50.0, 0.0), (50.0, 40.0), (0.0, 0.0), (50.0, 0.0)], 2.0, 500.0)
    t = np.arange(0, 200, 0.01)
    assert np.linalg.norm(np.diff(way.place(t), axis=0), axis=1).max() <= 0.0201


def test_what_does_not_move_stays():
    way = legs_way((10.0, 20.0), 45.0, 0.0, [Leg(10.0, 5.0)])
    assert way.place(np.array([0.0, 1e6])) == pytest.approx(np.array([[10, 20], [10, 20]]))
