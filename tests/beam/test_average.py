"""The rolling average: weights against direct sums, independent averages against Monte Carlo, levels."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose.beam.average import HANN_HALF_OVERLAP, RollingWeights, density_scale, to_levels

RATE, HOP = 1000.0, 100


def direct(average_s, starts):
    """Normalised weights of frames that start at these samples, by the definition: a exp(-age / average_s)."""
    ages = (starts[-1] - np.array(starts)) / RATE
    weights = np.exp(-ages / average_s)
    return weights / weights.sum()


@given(
    st.floats(0.05, 5.0),
    st.lists(st.sampled_from([HOP, HOP, HOP, 217, 3000]), min_size=0, max_size=40),
)
def test_recursion_is_the_direct_sum_over_gaps_too(average_s, steps):
    starts = np.concatenate([[0], np.cumsum(steps)]).astype(int)
    weights = RollingWeights(average_s, HOP, RATE)
    values = np.random.default_rng(len(steps)).random(len(starts))
    content = 0.0
    for i, value in enumerate(values):
        elapsed = None if i == 0 else int(starts[i] - starts[i - 1])
        step = weights.step(elapsed, elapsed == HOP)
        weights.add_shares(value, 1 - value)
        content = step.decay * content + step.gain * value
    expected = direct(average_s, starts)
    assert content / weights.total == pytest.approx(expected @ values)
    assert (weights.clipped, weights.masked) == pytest.approx((expected @ values, 1 - expected @ values))
    neighbours = np.diff(starts) == HOP
    variance = (expected**2).sum() + 2 / 36 * (expected[1:] * expected[:-1])[neighbours].sum()
    assert weights.averages == pytest.approx(1 / variance)


def test_gain_is_that_of_the_contract():
    """a = 1 - exp(-hop / average_s); the content is aged by the time elapsed."""
    weights = RollingWeights(2.0, 2048, 16000.0)
    first = weights.step(None, False)
    later = weights.step(2048, True)
    after_gap = weights.step(32000, False)
    assert first.gain == later.gain == after_gap.gain == pytest.approx(1 - np.exp(-0.128 / 2))
    assert (first.decay, later.decay, after_gap.decay) == pytest.approx((0.0, np.exp(-0.128 / 2), np.exp(-1.0)))


def test_no_time_constant_means_each_frame_alone():
    weights = RollingWeights(0.0, HOP, RATE)
    for elapsed in (None, HOP, 5000):
        step = weights.step(elapsed, elapsed == HOP)
        assert (step.decay, step.gain, weights.total, weights.averages) == (0.0, 1.0, 1.0, 1.0)


def test_an_average_begun_anew_forgets():
    weights = RollingWeights(1.0, HOP, RATE)
    weights.step(None, False)
    weights.step(HOP, True)
    weights.step(None, False)
    assert weights.averages == pytest.approx(1.0)
    assert weights.total == weights.gain


def test_nothing_in_the_average_is_worth_nothing():
    weights = RollingWeights(1.0, HOP, RATE)
    assert (weights.averages, weights.clipped, weights.masked) == (0.0, 0.0, 0.0)


def test_settled_average_is_worth_what_the_closed_form_says():
    """sum w^2 = a / (2 - a), sum w_i w_{i+1} = (1 - a) a / (2 - a) for w_i = a (1 - a)^i."""
    weights = RollingWeights(2.0, 2048, 16000.0)
    weights.step(None, False)
    for _ in range(2000):
        weights.step(2048, True)
    a = weights.gain
    assert weights.averages == pytest.approx((2 - a) / a / (1 + 2 * HANN_HALF_OVERLAP * (1 - a)))


def test_overlap_correlation_is_one_thirty_sixth():
    """Squared autocorrelation of the periodic Hann taper at half its length: (1/6)^2 exactly, for any even N > 2."""
    for n in (8, 64, 4096):
        taper = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(n) / n)
        assert ((taper[: n // 2] @ taper[n // 2 :]) / (taper @ taper)) ** 2 == pytest.approx(HANN_HALF_OVERLAP)


def test_density_doubles_all_but_the_ends():
    scale = density_scale(np.array([0, 1, 7, 8]), 16, 1000.0)
    np.testing.assert_allclose(scale, np.array([1, 2, 2, 1]) / (1000.0 * 6.0), rtol=1e-6)


def test_zero_power_reads_exactly_minus_300_and_nothing_is_below():
    power = np.array([[0.0, 1e-38, 1e-30, 1.0, 1e30]], dtype=np.float32)
    levels = to_levels(power)
    assert levels is power
    assert levels[0, 0] == levels[0, 1] == -300.0
    np.testing.assert_allclose(levels[0, 2:], [-300.0, 0.0, 300.0], atol=1e-4)
