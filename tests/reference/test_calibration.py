"""Counts to micropascal to decibel, against worked chains.

The chain: sensitivity -180 dB re 1 V/µPa (1 mV/Pa), gain 20 dB, 2.5 V full scale. Source of each value: the
formula in its docstring, from the definition of sensitivity, 10^(M/20) V/µPa. Standing: recomputed from it.
"""

import numpy as np
import pytest

from soundrose.feed.calibrate import Calibration
from soundrose.feed.hop import Hop
from soundrose.feed.intake import Intake
from soundrose.feed.messages import Expected, decode, encode_samples
from soundrose.product.messages import HealthProduct
from soundrose.settings_types import (
    ArraySettings,
    BandSettings,
    CalibrationSettings,
    FeedSettings,
    Settings,
    WaterSettings,
)

RATE = 48_000.0
SINGLE = 2.0**-22  # relative; hops are float32: one rounding of the scale, one of the product


def chain(sensitivity_db=-180.0, gain_db=20.0, full_scale_v=2.5):
    return CalibrationSettings((sensitivity_db,), (gain_db,), (full_scale_v,), (0.0,))


def pressure(values, settings, **form):
    """Micropascal of one channel's raw values, float32."""
    message = decode(encode_samples("aft", "r", 0, 0, RATE, [values], **form), Expected("aft", 1, RATE))
    calibration = Calibration(settings)
    out = np.empty((1, len(values)), np.float32)
    calibration.write(calibration.open(message), 0, len(values), out, np.zeros(1, np.int32))
    return out[0]


def test_pressure_of_one_24_bit_count():
    """2.9802322387695e-05 Pa per count (2.5 V / 2^23 over 10 mV/Pa), 29.485002 dB re 1 µPa per count. Recomputed."""
    one = float(pressure([1], chain(), type="i3")[0])
    assert one == pytest.approx(2.9802322387695e-05 * 1e6, rel=SINGLE)
    assert 20 * np.log10(one) == pytest.approx(29.485002, abs=3e-6)


def test_clipping_peak_level():
    """250 Pa, 167.958800173 dB re 1 µPa (peak): 2.5 V full scale over 10 mV/Pa. Recomputed."""
    peak = -float(pressure([-(2**23)], chain(), type="i3")[0])
    assert peak == pytest.approx(250e6, rel=SINGLE)
    assert 20 * np.log10(peak) == pytest.approx(167.958800173, abs=3e-6)


@pytest.mark.parametrize(
    ("sensitivity_db", "mv_per_pa"),
    [
        (-165, 5.623413252), (-170, 3.16227766), (-175, 1.77827941), (-180, 1.0), (-185, 0.5623413252),
        (-193, 0.2238721139), (-195, 0.177827941), (-200, 0.1),
    ],
)  # fmt: skip
def test_volts_to_micropascal_at_usual_sensitivities(sensitivity_db, mv_per_pa):
    """Table of sensitivities in mV/Pa. Recomputed: 10^(M/20) V/µPa, times 1e9."""
    one_volt = pressure([1.0], chain(sensitivity_db, 0.0, 1.0), type="f4", unit="V")[0]
    assert float(one_volt) == pytest.approx(1e9 / mv_per_pa, rel=2e-7)


def test_tone_of_1_pa_reads_120_db_through_the_whole_intake():
    """33554.432 counts rms of a 24-bit converter are 1 Pa rms, 120 dB re 1 µPa. Recomputed (the inverse chain)."""
    settings = Settings(
        ArraySettings("aft", ((0.0, 0.0, 0.0),)), FeedSettings(rate_hz=RATE), chain(), WaterSettings(1500.0),
        (BandSettings("main", (50.0, 4000.0), 4096, 3, (0,)),),
    )  # fmt: skip
    n = np.arange(48_000)
    counts = np.rint(33554.432 * np.sqrt(2) * np.sin(2 * np.pi * 1000 * n / RATE)).astype(int)
    out = Intake(settings).push(encode_samples("aft", "r", 0, 0, RATE, [counts], type="i3"))
    (health,) = (item for item in out if isinstance(item, HealthProduct))
    assert health.header["channels"][0]["level_db"] == pytest.approx(120.0, abs=0.001)  # published in steps of 0.001
    tone = np.concatenate([item.samples[0] for item in out if isinstance(item, Hop)])[: 48 * 900].astype(float)
    assert 10 * np.log10(np.mean(tone**2)) == pytest.approx(120.0, abs=2e-5)  # counts are whole: 1e-5 dB


def test_full_scale_sine_level():
    """164.948500 dB re 1 µPa rms for a full-scale sine: 3.0103 dB below its peak. Recomputed."""
    sine = np.sin(2 * np.pi * np.arange(480) / 48).astype(np.float32)
    level = 10 * np.log10(np.mean(pressure(sine, chain()).astype(float) ** 2))
    assert level == pytest.approx(164.948500, abs=2e-6)
