"""What ails hydrophones, and what converters make of pressure."""

import numpy as np
import pytest
from small_scene import RATE, level_db, small_scene

from soundrose.scene.faults import Converter, Faults
from soundrose.scene.scene_types import Fault

PRESSURE = np.random.default_rng(1).standard_normal((4, 4 * RATE)).astype(np.float32)


def ailing(*faults, first=0, pressure=PRESSURE):
    return Faults(faults, RATE, 7).apply(pressure, first)


def test_each_fault_touches_its_hydrophone_and_its_time_alone():
    fault = Fault(2, "dead", 1.0, 2.5)
    out = ailing(fault)
    assert not out[2, RATE : 5 * RATE // 2].any()
    out[2, RATE : 5 * RATE // 2] = PRESSURE[2, RATE : 5 * RATE // 2]
    assert np.array_equal(out, PRESSURE)


def test_reversed_and_exchanged():
    out = ailing(Fault(0, "reversed"), Fault(1, "exchanged", other=3))
    assert np.array_equal(out[0], -PRESSURE[0])
    assert np.array_equal(out[1], PRESSURE[3])
    assert np.array_equal(out[3], PRESSURE[1])


def test_noisy_adds_the_density_asked_for():
    out = ailing(Fault(0, "noisy", amount=60.0))
    assert level_db(out[0] - PRESSURE[0]) == pytest.approx(60 + 10 * np.log10(RATE / 2), abs=0.1)


def test_intermittent_is_out_for_its_share_of_time():
    long = np.ones((1, 400 * RATE // 10), np.float32)
    out = Faults([Fault(0, "intermittent", amount=0.3)], RATE / 10, 7).apply(long, 0)
    assert (out == 0).mean() == pytest.approx(0.3, abs=0.05)


def test_faults_do_not_depend_on_how_blocks_are_cut():
    faults = [
        Fault(0, "noisy", 0.3, 3.1, amount=60.0),
        Fault(1, "intermittent", amount=0.5),
        Fault(2, "dead", 0.5, 0.6),
    ]
    whole = ailing(*faults)
    maker = Faults(faults, RATE, 7)
    parts = [maker.apply(PRESSURE[:, k : k + 777], k) for k in range(0, PRESSURE.shape[1], 777)]
    assert np.array_equal(np.concatenate(parts, axis=1), whole)


@pytest.mark.parametrize(("kind", "half"), [("i2", 2**15), ("i3", 2**23), ("i4", 2**31)])
def test_counts_are_pressure_over_full_scale(kind, half):
    """-180 dB re 1 V/µPa, 0 dB, 1 V: full scale is 1e9 µPa."""
    converter = Converter(small_scene(feed={"type": kind}))
    pressure = np.broadcast_to(np.array([0.0, 0.5e9, -0.25e9, 3e9, -3e9], np.float32), (8, 5))
    assert converter.convert(pressure)[0].tolist() == [0, half // 2, -half // 4, half - 1, -half]


def test_floats_clip_at_one():
    converter = Converter(small_scene())
    pressure = np.broadcast_to(np.array([0.5e9, 3e9, -3e9], np.float32), (8, 3))
    assert converter.convert(pressure)[0].tolist() == [0.5, 1.0, -1.0]


def test_a_clipped_hydrophone_is_one_whose_gain_is_too_high():
    out = ailing(Fault(1, "clipped", amount=40.0))
    assert out[1] == pytest.approx(100 * PRESSURE[1])
