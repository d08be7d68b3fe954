"""The rule for the length of steering filters and the shortest frame."""

import numpy as np
import pytest

from soundrose.array.filters import is_smooth, max_delay_samples, min_frame, next_frame, tap_count
from soundrose.array.geometry import line_geometry
from soundrose.errors import UsageError


def line(*x: float):
    return line_geometry(np.array([(value, 0.0, 0.0) for value in x]), range(len(x)))


def test_forty_eight_hydrophones_take_a_frame_of_504():
    """The worked example of the interface: 48 x 0.375 m at 16 kHz, 1500 m/s: 94 samples either way."""
    geometry = line(*(0.375 * m for m in range(48)))
    assert max_delay_samples(geometry, 1500.0, 16000.0) == pytest.approx(94.0)
    assert tap_count(max_delay_samples(geometry, 1500.0, 16000.0)) == 2 * (94 + 32) + 1
    assert min_frame(253) == 504


def test_delays_are_about_the_middle_of_the_line_not_its_mean():
    assert max_delay_samples(line(9.0, 0.0, 0.0, -1.0), 1000.0, 1000.0) == pytest.approx(5.0)


def test_sampling_skew_lengthens_the_filters_but_a_common_delay_does_not():
    geometry = line(1.5, -1.5)
    assert max_delay_samples(geometry, 1500.0, 1000.0, [0.7, 0.7]) == pytest.approx(1.0)
    assert max_delay_samples(geometry, 1500.0, 1000.0, [0.004, 0.0]) == pytest.approx(3.0)


def test_skews_of_all_hydrophones_are_narrowed_to_the_bands():
    geometry = line_geometry(np.array([[3.0, 0, 0], [0.0, 0, 0], [-3.0, 0, 0]]), (0, 2))
    assert max_delay_samples(geometry, 1500.0, 1000.0, [0.0, 9.0, 0.0]) == pytest.approx(2.0)


def test_rounding_costs_no_taps_and_a_part_of_a_sample_costs_a_whole():
    assert tap_count(94 + 1e-10) == tap_count(94.0) == 253
    assert tap_count(94.01) == 255
    assert tap_count(0.0) == 65


@pytest.mark.parametrize("delay", [-1.0, float("nan"), float("inf")])
def test_impossible_delays_are_refused(delay):
    with pytest.raises(UsageError, match="max_delay"):
        tap_count(delay)


@pytest.mark.parametrize(
    ("frame", "smooth"), [(2, True), (4096, True), (5040, True), (4095, False), (22, False), (0, False)]
)
def test_frames_are_even_with_small_factors(frame, smooth):
    assert is_smooth(frame) is smooth


@pytest.mark.parametrize(("asked", "given"), [(4096, 4096), (4097, 4116), (22, 24), (1, 2)])
def test_next_frame_is_the_first_allowed_one(asked, given):
    assert next_frame(asked) == given
    assert not any(is_smooth(n) for n in range(asked, given))
