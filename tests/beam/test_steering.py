"""Steering filters: a fractional delay to the stated error, its sign, its length."""

import numpy as np
import pytest
from plane_waves import line

from soundrose.array.geometry import cos_grid, line_geometry
from soundrose.array.shading import shading_weights
from soundrose.beam.steering import Steering, delay_filters, delay_transforms, kept_bins
from soundrose.errors import UsageError


def steering(channels=8, *, beams=9, frame=512, delay=None, shading="hann", bins=(4, 200), c=1500.0, middle=True):
    geometry = line_geometry(line(channels), range(channels))
    make = Steering.about_middle if middle else Steering.about_origin
    skew = np.zeros(channels) if delay is None else delay
    return make(geometry, shading_weights(shading, geometry), skew, cos_grid(beams), c, 16000.0, frame, bins)


@pytest.mark.parametrize(("top", "limit_db"), [(0.25, -93.0), (0.46, -78.0), (0.47, -33.0)])
def test_delay_error_stays_below_the_stated_limit(top, limit_db):
    """|H - exp(-j w tau)|, rms over delays of all fractions, at the worst frequency up to `top` of the rate."""
    delays, n = np.linspace(-30, 30, 241), 2048
    f = np.arange(n // 2 + 1) / n
    f = f[f <= top]
    spectra = delay_transforms(delays, n, (0, len(f)))
    error = np.abs(spectra - np.exp(-2j * np.pi * f * delays[:, None]))
    assert 20 * np.log10(np.sqrt(np.mean(error**2, axis=0)).max()) <= limit_db


def test_a_whole_sample_delay_is_one_tap():
    at, taps = delay_filters(np.array([-5.0, 0.0, 17.0]))
    for delay, numbers, values in zip((-5, 0, 17), at, taps, strict=True):
        assert values[numbers == delay] == 1.0
        assert np.abs(values[numbers != delay]).max() < 1e-15


def test_transforms_do_not_depend_on_the_batch():
    delays = np.random.default_rng(0).uniform(-20, 20, 150)
    together = delay_transforms(delays, 256, (3, 90))
    alone = np.concatenate([delay_transforms(np.array([d]), 256, (3, 90)) for d in delays])
    np.testing.assert_array_equal(together, alone)


def test_bin_below_zero_is_the_conjugate_of_bin_one():
    with_it, without = (delay_transforms(np.array([2.3]), 128, kept) for kept in ((-1, 5), (0, 5)))
    np.testing.assert_array_equal(with_it[:, 1:], without)
    assert with_it[0, 0] == without[0, 1].conj()
    assert kept_bins((0, 4)) == (-1, 5)


def test_a_pulse_moves_later_by_a_positive_delay():
    at, taps = delay_filters(np.array([3.0]))
    assert at[0, taps[0].argmax()] == 3


def test_forward_hydrophones_are_delayed_for_a_forward_beam():
    """p(t + x u / c): the forward hydrophone hears it first, so it waits."""
    samples = steering().samples(slice(0, 1), slice(None))[0]
    assert samples[0] == pytest.approx(3.5 * 0.375 / 1500 * 16000)
    assert np.all(np.diff(samples) < 0)


def test_a_channel_sampled_late_waits_longer():
    late = np.zeros(8)
    late[2] = 1e-4
    even, skewed = (steering(delay=d, middle=False).samples(slice(4, 5), slice(None))[0] for d in (None, late))
    np.testing.assert_allclose(skewed - even, late * 16000)


def test_tap_count_follows_the_longest_delay():
    assert steering(48, frame=4096, c=1500.0).taps == 253  # 94 samples about the middle, 32 lobes each side
    assert steering(48, frame=4096, c=750.0).taps == 441


def test_filters_longer_than_half_the_frame_are_refused():
    steering(48, frame=504).check_fits()
    with pytest.raises(UsageError, match="at least 504"):
        steering(48, frame=502).check_fits()


@pytest.mark.parametrize(
    ("change", "paired"),
    [({}, True), ({"channels": 7}, True), ({"delay": np.full(8, 1e-3)}, True), ({"delay": 1e-5 * np.arange(8)}, False)],
)
def test_pairs_need_symmetry_of_line_shading_and_sampling(change, paired):
    assert steering(**change).paired is paired


def test_an_own_shading_that_is_not_symmetric_is_not_paired():
    assert not steering(shading=(1.0,) * 7 + (0.5,)).paired


def test_a_skew_common_to_all_channels_costs_no_taps():
    assert steering(delay=np.full(8, 1e-2)).taps == steering().taps
