"""The whole sea: the same bytes for the same seed, however it is cut; parts that add up; constant memory; delays."""

import tracemalloc

import numpy as np
import pytest
from small_scene import RATE, SPEED, contact, level_db, small_scene

from soundrose.errors import UsageError
from soundrose.scene.engine import Sea
from soundrose.scene.place import Line

CALLS = [{"shape": "sweep", "level_db": 150.0, "length_s": 0.3, "from_hz": 500.0, "to_hz": 900.0}]


def full_scene(**tables):
    """One of everything."""
    own = {
        "speed_m_s": 2.0, "layback_m": 100.0, "array_depth_m": 20.0, "sag_m": 0.2,
        "legs": [{"seconds": 1.0}, {"seconds": 60.0, "turn_deg_s": 1.0}],
        "sources": [
            {"name": "hull", "depth_m": 4.0, "bounces": 2, "level_db": 120.0, "modulation": 0.4},
            {"name": "gun", "kind": "gun", "level_db": 190.0, "first_s": 0.2, "interval_s": [0.8, 1.2]},
        ],
        "reverberation": {"source": "gun", "level_db": 110.0, "decay_db": 30.0},
    }  # fmt: skip
    contacts = [
        contact(range_m=300.0, speed_m_s=5.0, bounces=1, level_db=130.0),
        contact(name="caller", kind="animal", level_db=None, tones=None, calls=CALLS, interval_s=[0.2, 0.6]),
    ]
    plain = {
        "own": own, "contacts": contacts, "ambient": {"enabled": True, "electronic_db": 30.0},
        "flow": {"level_db": 90.0}, "hum": {"tones": [[50.0, 90.0]]}, "strum": {"tones": [[20.0, 100.0]]},
    }  # fmt: skip
    return small_scene(**(plain | tables))


def test_same_seed_same_bits_whatever_the_block():
    scene, total = full_scene(), 3 * RATE
    whole = Sea(scene).read(total)
    for block in (1234, 4096):
        sea = Sea(scene)
        parts = [sea.read(min(block, total - first)) for first in range(0, total, block)]
        assert np.array_equal(np.concatenate(parts, axis=1), whole)
    assert whole.dtype == np.float32
    assert np.isfinite(whole).all()


def test_another_seed_is_another_sea():
    assert not np.array_equal(Sea(full_scene(seed=4)).read(RATE), Sea(full_scene()).read(RATE))


def test_parts_add_up_to_the_whole():
    scene = full_scene()
    whole = Sea(scene).read(2 * RATE)
    names = ["ambient", "reverberation", "hum", "strum", "hull", "gun", "one", "caller"]
    parts = [Sea(scene, [name]).read(2 * RATE) for name in names]
    assert all(part.std() > 0 for part in parts)
    assert np.abs(sum(parts) - whole).max() < 1e-4 * np.abs(whole).max()  # single precision


def test_a_part_that_is_not_there_is_told():
    with pytest.raises(UsageError, match=r"whale.*must be among ambient, caller"):
        Sea(full_scene(), ["whale"])


def test_memory_stays_what_it_is():
    sea = Sea(full_scene())
    sea.read(6 * RATE)
    tracemalloc.start()
    sea.read(RATE)
    early = tracemalloc.get_traced_memory()[0]
    for _ in range(10):
        sea.read(RATE)
    late = tracemalloc.get_traced_memory()[0]
    tracemalloc.stop()
    assert late - early < 200_000  # 10 s of samples would be 2.6 MB


def test_a_way_that_is_long_takes_no_more_memory_than_its_bounces_differ():
    """20 km off: sound is 13 s old when it arrives; it is not kept meanwhile."""
    sea = Sea(small_scene(contacts=[contact(range_m=20_000.0, level_db=130.0)]))
    sea.read(RATE)
    held = sea._renderer._sources[0]._buffer._samples
    assert len(held) < 8 * RATE


@pytest.mark.parametrize(("distance", "hertz"), [(100.0, 1500.0), (400.0, 3400.0), (3000.0, 3400.0)])
def test_delays_are_exact_within_the_fade_between_knots(distance, hertz):
    """A tone that passes at 6 m/s, every hydrophone of a moving, bending line against its own retarded time. What is
    left is within the bound of the fade, (2 pi f e / rate)² / 8 with e the change of a hydrophone's delay against the
    origin's from knot to knot, and within -80 dB where that is smaller."""
    scene = small_scene(
        array={"hydrophones": 21, "spacing_m": 1.0},
        own={"speed_m_s": 2.0, "legs": [{"seconds": 60.0, "turn_deg_s": 0.5}]},
        contacts=[contact(range_m=distance, bearing_deg=80.0, course_deg=190.0, speed_m_s=6.0, tones=[[hertz, 140.0]])],
    )
    heard = Sea(scene).read(2 * RATE).astype(float)
    t = np.arange(2 * RATE) / RATE
    ears = Line(scene.own, np.array(scene.array.positions_m)).places(t)
    way, tau = scene.emitters[0].way, np.zeros(ears.shape[:2])
    for _ in range(6):
        place = way.place(t[:, None] - tau)
        tau = np.hypot(place[..., 0] - ears[..., 0], place[..., 1] - ears[..., 1]) / SPEED
    phase = np.random.default_rng([3, 16, 0]).uniform(0, 2 * np.pi, 5)[4]
    true = np.sqrt(2) * 1e7 * np.cos(2 * np.pi * hertz * (t[:, None] - tau) + phase).T / (tau.T * SPEED)
    step = Sea(scene).step
    change = np.diff((tau - tau[:, 10:11])[::step], axis=0)
    bound = (2 * np.pi * hertz * np.abs(change).max()) ** 2 / 8
    assert level_db(heard - true).max() - level_db(true).mean() < 10 * np.log10(bound**2 + 1e-8)


def test_a_channel_that_is_sampled_late_hears_what_comes_later():
    late = [0.0, 1.0e-4, 0, 0, 0, 0, 0, -2.0e-4]
    still = {"contacts": [contact(range_m=20_000.0, bearing_deg=90.0)]}
    plain = Sea(small_scene(**still)).read(RATE)
    skewed = Sea(small_scene(calibration={"delay_s": late}, **still)).read(RATE)
    for m, delay in enumerate(late):
        turn = np.angle(_phasor(skewed[m]) / _phasor(plain[m])) / (2 * np.pi * 1000)
        assert turn == pytest.approx(delay, abs=2e-8)


def _phasor(samples):
    part = samples[RATE // 2 :].astype(float)
    return (part * np.exp(-2j * np.pi * 1000 * np.arange(len(part)) / RATE)).mean()


def test_hum_is_in_phase_everywhere_and_keeps_its_level():
    heard = Sea(small_scene(hum={"tones": [[50.0, 90.0], [150.0, 80.0]]})).read(RATE)
    assert np.array_equal(heard, np.broadcast_to(heard[0], heard.shape))
    assert level_db(heard[0]) == pytest.approx(10 * np.log10(1e9 + 1e8), abs=0.01)


def test_strum_runs_aft_at_the_speed_of_the_cable_and_fades():
    """40 m/s, 25 Hz: 225 deg of phase from one hydrophone to the next but one, 1 m on; amplitude 1/e in 4 m."""
    scene = small_scene(strum={"wave_speed_m_s": 40.0, "decay_m": 4.0, "tones": [[25.0, 100.0]]})
    heard = Sea(scene).read(30 * RATE)
    turn = np.exp(-2j * np.pi * 25 * np.arange(heard.shape[1]) / RATE)
    slow = (heard * turn).reshape(8, -1, RATE // 5).mean(axis=2)  # complex amplitude every 0.2 s
    step = (slow[2:] / slow[:-2]).mean(axis=1)
    assert np.rad2deg(np.angle(step)) % 360 == pytest.approx((-225) % 360, abs=4)  # wander adds a little
    assert np.abs(step) == pytest.approx(np.exp(-0.25), rel=0.02)
    assert level_db(heard[0]) == pytest.approx(100.0, abs=1.0)  # breathes
    assert np.ptp(20 * np.log10(np.abs(slow[0]))) > 2


def test_reverberation_falls_as_asked_after_each_shot():
    own = {
        "array_depth_m": 20.0, "layback_m": 150.0,
        "sources": [{"name": "gun", "kind": "gun", "level_db": 100.0, "first_s": 1.0, "interval_s": 50.0}],
        "reverberation": {"source": "gun", "level_db": 100.0, "slope_db": 0.0, "decay_db": 12.0},
    }  # fmt: skip
    heard = Sea(small_scene(own=own), ["reverberation"]).read(6 * RATE)
    distance = np.hypot(110.0, 14.0)  # the gun is 40 m behind the ship and 6 m deep
    shot = round((1.0 + distance / SPEED) * RATE)
    assert not heard[:, :shot].any()
    levels = [level_db(heard[:, shot + k * RATE : shot + k * RATE + RATE // 4]).mean() for k in range(4)]
    assert np.diff(levels) == pytest.approx([-12.0] * 3, abs=0.4)
    one = small_scene(own=own | {"layback_m": 150.0})
    assert np.array_equal(Sea(one, ["reverberation"]).read(6 * RATE), heard)


def test_clock_that_runs_fast_takes_more_samples_of_each_cycle():
    scene = small_scene(clock={"drift_ppm": 500.0}, contacts=[contact()])
    heard = Sea(scene).read(8 * RATE)[0].astype(float)
    n = np.arange(RATE, 8 * RATE)
    turned = heard[RATE:] * np.exp(-2j * np.pi * 1000 / (RATE * 1.0005) * n)
    early, late = turned[: RATE // 2].mean(), turned[-RATE // 2 :].mean()
    assert abs(np.angle(late / early)) < 0.01  # with the nominal rate it would have turned by 20 rad
