"""Shading weights: sum, symmetry, order of channels, lines without equal spacing, own lists, refusals."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose.array.geometry import line_geometry
from soundrose.array.shading import fewest_for, shading_weights, taylor_nbar
from soundrose.errors import UsageError

NAMES = ["uniform", "hann", "hamming", "chebyshev", "taylor"]


def on_x(x, channels=None):
    positions = np.array([(float(value), 0.0, 0.0) for value in x])
    return line_geometry(positions, tuple(range(len(positions))) if channels is None else tuple(channels))


@given(st.sampled_from(NAMES), st.integers(3, 80), st.floats(15, 60))
def test_weights_sum_to_one_are_symmetric_to_the_bit_and_never_far_below_zero(shading, hydrophones, shading_db):
    weights = shading_weights(shading, on_x(-0.5 * np.arange(hydrophones)), shading_db)
    assert weights.dtype == np.float64
    assert weights.sum() == pytest.approx(1.0, abs=1e-12)
    assert np.array_equal(weights, weights[::-1])
    assert (weights > -1e-3).all()


@pytest.mark.parametrize("shading", NAMES)
def test_weights_follow_the_hydrophones_not_the_order_of_channels(shading):
    shuffle = [3, 0, 4, 1, 2, 5]
    x = 2.5 - np.arange(6)
    usual, shuffled = shading_weights(shading, on_x(x)), shading_weights(shading, on_x(x, shuffle))
    np.testing.assert_allclose(shuffled, usual[shuffle], rtol=1e-12, atol=1e-17)


@pytest.mark.parametrize(("shading", "mid"), [("hann", 0.5), ("hamming", 0.54)])
def test_shading_of_an_uneven_line_is_taken_at_each_place(shading, mid):
    """Window over the aperture from end to end, at place 1/4: a0 - a1 cos(pi/2) = a0; in the middle a0 + a1 = 1."""
    weights = shading_weights(shading, on_x([4.0, 2.0, 0.0, -4.0]))
    assert weights[1] / weights[2] == pytest.approx(mid)
    assert weights[0] == pytest.approx(weights[3])


def test_taylor_on_an_uneven_line_comes_near_the_even_one_where_the_line_does():
    even = np.linspace(1, -1, 24)
    bent = even + 1e-4 * np.sin(3 * even)
    np.testing.assert_allclose(
        shading_weights("taylor", on_x(bent)), shading_weights("taylor", on_x(even)), rtol=0, atol=1e-4
    )


def test_two_hydrophones_weigh_the_same():
    for shading in ("uniform", "hamming", "chebyshev", "taylor"):
        np.testing.assert_allclose(shading_weights(shading, on_x([1.0, -1.0])), [0.5, 0.5])


def test_own_list_is_in_band_order_and_brought_to_the_sum_one():
    assert shading_weights([1, 0, 3], on_x([0.0, 1.0, 5.0])).tolist() == [0.25, 0.0, 0.75]


@pytest.mark.parametrize(
    ("shading", "x", "shading_db", "word"),
    [
        ([1.0, 2.0], [0, 1, 2], 30, "one weight for each of the 3"),
        ([1.0, -2.0, 3.0], [0, 1, 2], 30, "at least 0"),
        ([0.0, 0.0, 0.0], [0, 1, 2], 30, "not all 0"),
        ([1.0, float("nan"), 0.0], [0, 1, 2], 30, "finite"),
        ("hann", [0, 1], 30, "at least 3"),
        ("chebyshev", [0, 1, 3], 30, "equal spacing"),
        ("chebyshev", [0, 1, 2], 0.0, "shading_db"),
        ("taylor", [0, 1, 2], -3.0, "shading_db"),
        ("hann", [1, 1, 1], 30, "length along x"),
    ],
)
def test_impossible_shadings_are_refused(shading, x, shading_db, word):
    with pytest.raises(UsageError, match=word):
        shading_weights(shading, on_x(x), shading_db)


def test_hann_alone_needs_three():
    assert [fewest_for(name) for name in NAMES] == [2, 3, 2, 2, 2]


@pytest.mark.parametrize(
    ("shading_db", "hydrophones", "nbar"), [(20, 64, 4), (35, 64, 4), (60, 64, 7), (60, 8, 4), (30, 2, 2)]
)
def test_taylors_number_of_lobes_grows_with_depth_and_stays_within_the_line(shading_db, hydrophones, nbar):
    """nbar >= A^2 + 1/2, A = acosh(10^(dB/20))/pi: 60 dB: A = 2.42, 6.36 -> 7."""
    assert taylor_nbar(shading_db, hydrophones) == nbar
