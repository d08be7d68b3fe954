"""Raw blocks to micropascal: every type and layout against plain arithmetic, clipping exact, misreadings found."""

import math

import numpy as np
import pytest

from soundrose.errors import UsageError
from soundrose.feed.calibrate import PRESSURE_LIMIT, Calibration
from soundrose.feed.messages import Expected, decode, encode_samples
from soundrose.settings_types import CalibrationSettings

SENSITIVITY, GAIN, VOLTS = (-180.0, -193.5, -170.0), (20.0, 0.0, 12.5), (2.5, 5.0, 1.0)
CALIBRATION = Calibration(CalibrationSettings(SENSITIVITY, GAIN, VOLTS, (0.0,) * 3))
UNITY = Calibration(CalibrationSettings((0.0,) * 3, (0.0,) * 3, (1.0,) * 3, (0.0,) * 3))


def calibrated(values, calibration=CALIBRATION, skip=0, **form):
    """(micropascal, clipped, bad) of a block sent in this form."""
    message = decode(encode_samples("aft", "r", 0, 0, 99.0, values, **form), Expected("aft", 3, 99.0))
    block = calibration.open(message, skip)
    out, clipped = np.full((3, len(values[0]) - skip), np.nan, np.float32), np.zeros(3, np.int32)
    half = out.shape[1] // 2
    calibration.write(block, 0, half, out[:, :half], clipped) if half else None
    calibration.write(block, half, out.shape[1], out[:, half:], clipped)
    return out, clipped.tolist(), None if block.bad is None else block.bad.tolist()


@pytest.mark.parametrize("layout", ["channel", "sample"])
@pytest.mark.parametrize("kind", ["i2", "i3", "i4"])
def test_integers_follow_the_chain_to_single_precision(kind, layout):
    """Against the formula of the feed's description in Python floats, one value at a time."""
    half = 2 ** (8 * int(kind[1]) - 1)
    values = np.random.default_rng(5).integers(-half, half, (3, 50))
    values[:, :4] = [[-half, half - 1, 0, -1]] * 3
    out, _, bad = calibrated(values, type=kind, layout=layout)
    for c in range(3):
        factor = VOLTS[c] * math.pow(10.0, -(SENSITIVITY[c] + GAIN[c]) / 20)
        plain = [int(v) / half * factor for v in values[c]]
        np.testing.assert_allclose(out[c], plain, rtol=2e-7)  # three roundings to 24 bits
    assert bad is None


@pytest.mark.parametrize("layout", ["channel", "sample"])
@pytest.mark.parametrize(("unit", "volts"), [("count", True), ("V", False), ("uPa", None)])
def test_floats_follow_the_chain_of_their_unit(unit, volts, layout):
    values = np.random.default_rng(6).uniform(-0.9, 0.9, (3, 31)).astype(np.float32)
    out, clipped, _ = calibrated(values, unit=unit, layout=layout)
    for c in range(3):
        factor = 1.0 if volts is None else math.pow(10.0, -(SENSITIVITY[c] + GAIN[c]) / 20) * (VOLTS[c] if volts else 1)
        np.testing.assert_allclose(out[c], values[c].astype(float) * factor, rtol=2e-7)
    assert clipped == [0, 0, 0]


@pytest.mark.parametrize(("kind", "edge"), [("i2", 2**15 - 1), ("i3", 2**23 - 2**8), ("i4", 2**31 - 2**16)])
def test_clipping_of_integers_begins_at_one_less_two_to_minus_15(kind, edge):
    values = np.zeros((3, 6), np.int64)
    values[0] = [edge - 1, 1 - edge, 0, 0, 0, 0]
    values[1] = [edge, edge - 1, -edge, 0, 0, edge]
    values[2, 5] = -edge - 1
    assert calibrated(values, type=kind)[1] == [0, 3, 1]
    assert calibrated(values, type=kind, layout="sample", skip=1)[1] == [0, 2, 1]


def test_clipping_of_floats_is_judged_for_counts_alone():
    edge = 1.0 - 2.0**-15
    values = [[edge, -edge, 2.0], [np.nextafter(np.float32(edge), np.float32(0)), 0, 0], [0, 0, -1]]
    assert calibrated(values, unit="count")[1] == [3, 0, 1]
    assert calibrated(values, unit="V")[1] == calibrated(values, unit="uPa")[1] == [0, 0, 0]


@pytest.mark.parametrize("layout", ["channel", "sample"])
@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf, 1e38])
def test_misread_channel_is_zero_and_marked_in_its_block_alone(value, layout):
    values = np.full((3, 8), 0.5, np.float32)
    values[1, 7] = value
    values[2, 3] = 1.0
    out, clipped, bad = calibrated(values, UNITY, layout=layout)
    assert bad == [False, True, False]
    assert out[1].tolist() == [0.0] * 8
    assert out[0].tolist() == [0.5] * 8
    assert clipped == [0, 0, 1]


def test_signalling_nan_is_found_without_a_warning():
    values = np.full((3, 4), 0.25, np.float32)
    values.view(np.uint32)[0, 2] = 0x7F800001
    out, _, bad = calibrated(values)
    assert bad == [True, False, False]
    assert np.isfinite(out).all()


def test_misreading_in_the_part_left_out_does_not_count():
    values = np.full((3, 4), 0.25, np.float32)
    values[0, 1] = math.nan
    assert calibrated(values, skip=2)[2] is None


def test_pressure_beyond_any_sound_is_a_misreading():
    values = np.zeros((3, 2), np.float32)
    values[0, 0], values[1, 0] = PRESSURE_LIMIT * 0.999, PRESSURE_LIMIT * 1.001
    assert calibrated(values, unit="uPa")[2] == [False, True, False]


@pytest.mark.parametrize(("sensitivity", "volts"), [(-900.0, 1.0), (0.0, 0.0), (900.0, 1.0)])
def test_calibration_beyond_single_precision_is_refused(sensitivity, volts):
    with pytest.raises(UsageError, match="channel 1"):
        Calibration(CalibrationSettings((0.0, sensitivity), (0.0, 0.0), (1.0, volts), (0.0, 0.0)))
