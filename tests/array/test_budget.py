"""Bins of a band, the choice of kernel, memory and arithmetic."""

import numpy as np
import pytest

from soundrose.array.budget import band_budget, bin_range, weight_bytes, why_not_pairs
from soundrose.array.geometry import line_geometry
from soundrose.errors import UsageError


@pytest.mark.parametrize(
    ("band_hz", "frame", "rate", "bins"),
    [
        ((50.0, 4000.0), 4096, 16000.0, (13, 1025)),  # 3.90625 Hz: 12.8 -> 13; 1024 is on the edge
        ((0.0, 100.0), 1000, 1000.0, (0, 101)),
        ((0.1 * 3, 0.7), 10, 1.0, (3, 8)),  # 0.30000000000000004: still bin 3
        ((10.1, 10.9), 1000, 1000.0, (11, 11)),  # between two bins: none
    ],
)
def test_bins_lie_within_the_band_edges_included(band_hz, frame, rate, bins):
    assert bin_range(band_hz, frame, rate) == bins


def line(*x):
    return line_geometry(np.array([(float(value), 0.0, 0.0) for value in x]), range(len(x)))


def test_pairs_want_symmetry_in_line_shading_and_sampling():
    even, third = line(1, 0, -1), np.full(3, 1 / 3)
    assert why_not_pairs(even, third, [0.0] * 3) is None
    assert why_not_pairs(even, third, [0.1] * 3) is None
    assert "line" in why_not_pairs(line(1, 0.5, -1), third, [0.0] * 3)
    assert "shading" in why_not_pairs(even, np.array([0.2, 0.3, 0.5]), [0.0] * 3)
    assert "delay_s" in why_not_pairs(even, third, [0.0, 0.0, 1e-6])


def test_pairs_take_a_quarter_of_the_memory():
    """278 MB of complex weights for 64 hydrophones, 181 beams, 3000 bins, as measured elsewhere."""
    assert weight_bytes(64, 181, 3000, pairs=False) == pytest.approx(278e6, rel=0.01)
    assert weight_bytes(64, 182, 3000, pairs=False) == 4 * weight_bytes(64, 182, 3000, pairs=True)
    with pytest.raises(UsageError, match="negative"):
        weight_bytes(-1, 2, 2, pairs=True)


def test_load_grows_with_rate_and_general_kernel():
    usual = band_budget(64, 181, 3000, 8192, 16000.0, pairs=True)
    assert band_budget(64, 181, 3000, 8192, 32000.0, pairs=True).load == pytest.approx(2 * usual.load)
    general = band_budget(64, 181, 3000, 8192, 16000.0, pairs=False)
    assert general.load > usual.load
    assert general.operations - usual.operations == 3 * 3000 * 181 * 64
