"""Geometry of a band's line: origin, order, spacing, mirror images, beam directions."""

from dataclasses import replace

import numpy as np
import pytest

from soundrose.array.geometry import band_geometry, cos_grid, delays_s, line_geometry
from soundrose.errors import UsageError
from soundrose.settings import parse_settings


def on_x(*x: float) -> np.ndarray:
    return np.array([(value, 0.0, 0.0) for value in x])


def test_origin_is_the_mean_of_all_hydrophones_listed_not_of_the_bands():
    geometry = line_geometry(on_x(10.0, 4.0, 1.0, 1.0), (0, 1))
    assert geometry.x_m.tolist() == [6.0, 0.0]
    assert geometry.centre_m.tolist() == [3.0, 0.0, 0.0]
    assert geometry.middle_x_m == 3.0


def test_offsets_to_the_side_and_in_depth_are_about_the_mean_too():
    geometry = line_geometry(np.array([[1.0, 2.0, 10.0], [0.0, 2.0, 10.0], [-1.0, 2.0, 13.0]]), (0, 1, 2))
    assert geometry.positions_m[:, 1].tolist() == [0.0, 0.0, 0.0]
    assert geometry.offset_m == pytest.approx(2.0)


def test_uneven_line_has_a_middle_between_its_ends():
    geometry = line_geometry(on_x(5.0, 0.0, -1.0), (0, 1, 2))
    assert geometry.middle_x_m == pytest.approx(2.0 - 4.0 / 3)
    assert geometry.spacing_m is None
    assert not geometry.symmetric


@pytest.mark.parametrize("channels", [(0, 1, 2, 3), (3, 2, 1, 0), (2, 0, 3, 1)])
def test_equal_spacing_and_mirror_do_not_depend_on_the_order_of_channels(channels):
    x = np.array([1.5, 0.5, -0.5, -1.5])
    geometry = line_geometry(on_x(*x), channels)
    assert geometry.spacing_m == pytest.approx(1.0)
    assert (np.diff(geometry.x_m[geometry.order]) < 0).all()
    assert np.array_equal(geometry.x_m[geometry.mirror], -geometry.x_m)


def test_symmetric_line_without_equal_spacing_keeps_its_mirror():
    geometry = line_geometry(on_x(4.0, 1.0, 0.0, -1.0, -4.0), range(5))
    assert geometry.spacing_m is None
    assert geometry.mirror.tolist() == [4, 3, 2, 1, 0]


@pytest.mark.parametrize(("off_m", "same"), [(5e-7, True), (3e-6, False)])
def test_places_are_told_apart_from_a_micrometre_on(off_m, same):
    geometry = line_geometry(on_x(1.0, 0.0 + off_m, -1.0), range(3))
    assert geometry.symmetric is same
    assert (geometry.spacing_m is not None) is same


def test_hydrophones_at_one_place_have_no_spacing():
    assert line_geometry(on_x(0.0, 0.0), (0, 1)).spacing_m is None
    assert line_geometry(on_x(0.0, 1.0), (0,)).spacing_m is None


def test_values_are_read_only_and_the_callers_array_is_not_touched():
    positions = on_x(1.0, 3.0)
    geometry = line_geometry(positions, (0, 1))
    assert positions[:, 0].tolist() == [1.0, 3.0]
    for values in (geometry.positions_m, geometry.centre_m, geometry.order, geometry.mirror):
        assert not values.flags.writeable


@pytest.mark.parametrize(
    ("positions", "channels", "word"),
    [
        (np.zeros((3, 2)), (0,), "shape"),
        (np.full((2, 3), np.nan), (0,), "finite"),
        (np.zeros((2, 3)), (0, 2), "channels"),
        (np.zeros((2, 3)), (), "channels"),
        (np.zeros((2, 3)), (-1,), "channels"),
    ],
)
def test_impossible_lines_are_refused(positions, channels, word):
    with pytest.raises(UsageError, match=word):
        line_geometry(positions, channels)


def test_band_takes_its_channels_and_positions_told_later():
    settings = parse_settings(
        {
            "array": {"id": "a", "hydrophones": 6, "spacing_m": 2.0},
            "bands": [{"name": "b", "band_hz": [10, 100], "channels": "1:6:2"}],
        }
    )
    assert band_geometry(settings, settings.bands[0]).x_m.tolist() == [3.0, -1.0, -5.0]
    moved = on_x(6.0, 5.0, 4.0, 3.0, 2.0, 1.0)
    assert band_geometry(settings, settings.bands[0], moved).x_m.tolist() == [1.5, -0.5, -2.5]
    whole = replace(settings.bands[0], channels=tuple(range(6)))
    assert band_geometry(settings, whole).x_m.tolist() == [5.0, 3.0, 1.0, -1.0, -3.0, -5.0]
    with pytest.raises(UsageError, match=r"\(5, 3\); they must be \(6, 3\)"):
        band_geometry(settings, settings.bands[0], moved[:5])


@pytest.mark.parametrize("beams", [2, 3, 96, 145, 181, 361])
def test_beam_grid_is_even_falls_from_one_and_is_its_own_mirror_to_the_bit(beams):
    grid = cos_grid(beams)
    assert (grid[0], grid[-1], len(grid)) == (1.0, -1.0, beams)
    assert np.array_equal(grid, -grid[::-1])
    np.testing.assert_allclose(np.diff(grid), -2 / (beams - 1), rtol=1e-12)


def test_one_beam_is_no_grid():
    with pytest.raises(UsageError, match="at least 2"):
        cos_grid(1)


def test_delays_are_beams_by_hydrophones_and_positive_for_the_one_that_hears_first():
    delays = delays_s(np.array([3.0, -1.5]), np.array([1.0, 0.5, -1.0]), 1500.0)
    np.testing.assert_allclose(delays, [[2e-3, -1e-3], [1e-3, -0.5e-3], [-2e-3, 1e-3]])
