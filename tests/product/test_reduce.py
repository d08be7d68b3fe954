"""Reduction of maps: groups of neighbours, mean of power or largest, axes that follow."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose.errors import UsageError
from soundrose.product.reduce import group_size, reduce_levels, reduce_power

CONES = [float(v) for v in np.degrees(np.arccos(np.linspace(1, -1, 7)))]
POWER = np.random.default_rng(0).random((7, 10)).astype(np.float32)


def test_groups_of_bins_and_beams_hold_their_mean_power():
    made = reduce_power(POWER, CONES, 100.0, 10.0, bins=4, beams=3)
    assert made.values.shape == (3, 4)  # g = 3 of 10 and 3 of 7: the last groups hold one
    assert made.values[0, 0] == pytest.approx(POWER[:3, :3].mean())
    assert made.values[2, 3] == pytest.approx(POWER[6, 9])
    assert made.values[2, 1] == pytest.approx(POWER[6, 3:6].mean())
    assert (made.f0_hz, made.df_hz) == (110.0, 30.0)
    cosines = np.linspace(1, -1, 7)
    expected = np.degrees(np.arccos([cosines[:3].mean(), cosines[3:6].mean(), cosines[6]]))
    np.testing.assert_allclose(made.cone_deg, expected, atol=1e-9)


def test_largest_of_a_group():
    made = reduce_power(POWER, CONES, 100.0, 10.0, bins=4, beams=3, pick="max")
    assert made.values[0, 0] == POWER[:3, :3].max()
    assert made.values[1, 3] == POWER[3:6, 9].max()


def test_mean_is_that_of_power_and_never_of_decibels():
    levels = np.array([[0.0, 20.0]], dtype=np.float32)
    assert reduce_levels(levels, [90.0], 0.0, 1.0, bins=1).values[0, 0] == pytest.approx(10 * np.log10(50.5), abs=1e-4)
    assert reduce_levels(levels, [90.0], 0.0, 1.0, bins=1, pick="max").values[0, 0] == 20.0


def test_levels_at_the_floor_stay_there():
    levels = np.full((2, 4), -300.0, dtype=np.float32)
    made = reduce_levels(levels, [10.0, 20.0], 0.0, 1.0, bins=2, beams=1)
    np.testing.assert_allclose(made.values, -300.0, atol=1e-3)
    assert made.values.min() >= -300.0


@pytest.mark.parametrize("limits", [{}, {"bins": 10, "beams": 7}, {"bins": 11, "beams": 1000}])
@pytest.mark.parametrize("reduce", [reduce_power, reduce_levels])
def test_a_limit_at_or_over_the_number_changes_nothing(reduce, limits):
    made = reduce(POWER, CONES, 100.0, 10.0, **limits)
    np.testing.assert_array_equal(made.values, POWER)
    assert (made.cone_deg, made.f0_hz, made.df_hz) == (CONES, 100.0, 10.0)


@pytest.mark.parametrize("reduce", [reduce_power, reduce_levels])
def test_range_of_frequencies_is_taken_first_both_ends_in(reduce):
    made = reduce(POWER, CONES, 100.0, 10.0, f_min=120.0, f_max=160.0)
    np.testing.assert_array_equal(made.values, POWER[:, 2:7])
    assert (made.f0_hz, made.df_hz) == (120.0, 10.0)
    joined = reduce(POWER, CONES, 100.0, 10.0, f_min=115.0, f_max=169.0, bins=2)
    assert joined.values.shape == (7, 2)
    assert (joined.f0_hz, joined.df_hz) == (130.0, 30.0)


@given(st.integers(1, 40), st.integers(1, 60), st.integers(1, 12), st.integers(1, 12))
def test_levels_reduce_as_their_power_does(bins, limit, beams, beam_limit):
    power = np.random.default_rng(bins).uniform(0.1, 10, (beams, bins)).astype(np.float32)
    cones = np.linspace(1, 179, beams).tolist()
    by_power = reduce_power(power, cones, 5.0, 1.0, bins=limit, beams=beam_limit)
    by_level = reduce_levels(10 * np.log10(power), cones, 5.0, 1.0, bins=limit, beams=beam_limit)
    np.testing.assert_allclose(by_level.values, 10 * np.log10(by_power.values), atol=1e-3)
    assert by_level.cone_deg == by_power.cone_deg == sorted(by_power.cone_deg)
    assert by_level.values.shape[1] <= limit
    assert by_level.values.shape[0] <= beam_limit
    total = power.sum(dtype=float)
    sizes = np.minimum(group_size(bins, limit), bins - np.arange(0, bins, group_size(bins, limit)))
    rows = np.minimum(group_size(beams, beam_limit), beams - np.arange(0, beams, group_size(beams, beam_limit)))
    assert (by_power.values * sizes * rows[:, None]).sum(dtype=float) == pytest.approx(total, rel=1e-5)


@pytest.mark.parametrize(
    ("limits", "word"),
    [
        ({"bins": 0}, "at least 1"), ({"beams": -3}, "at least 1"), ({"pick": "median"}, "mean, max"),
        ({"f_min": 500.0}, "no bin"), ({"f_min": 140.0, "f_max": 120.0}, "no bin"), ({"f_max": float("nan")}, "finite"),
    ],
)  # fmt: skip
@pytest.mark.parametrize("reduce", [reduce_power, reduce_levels])
def test_what_cannot_be_is_said(reduce, limits, word):
    with pytest.raises(UsageError, match=word):
        reduce(POWER, CONES, 100.0, 10.0, **limits)


def test_axes_must_match_the_map():
    with pytest.raises(UsageError, match="with 6 beams"):
        reduce_power(POWER, CONES[:6], 100.0, 10.0)
