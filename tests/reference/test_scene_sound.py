"""Sound of a scene at the hydrophones against formulas worked out by hand: bounces, Doppler, spreading, absorption."""

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parent.parent / "scene"))
from small_scene import RATE, SPEED, click, contact, level_db, small_scene

from soundrose.scene.engine import Sea
from soundrose.scene.sea import francois_garrison


def fine_peak(samples, near, width=24):
    """Index, to a fraction, and value of the strongest point around an index, on a grid 16 times finer."""
    part = samples[near - width : near + width].astype(float)
    spectrum = np.fft.rfft(part)
    fine = np.fft.irfft(np.pad(spectrum, (0, 15 * len(part) // 2)), 16 * len(part)) * 16
    at = int(np.argmax(np.abs(fine)))
    return near - width + at / 16, fine[at]


def test_direct_sound_and_bounces_arrive_when_and_as_strong_as_geometry_says():
    """Source 30 m deep, hydrophones' origin 20 m deep, 400 m apart, bottom at 100 m, 6 dB lost there. By hand:
    direct sqrt(400² + 10²) = 400.125 m; surface: image at -30, sqrt(400² + 50²) = 403.113 m, turned over;
    bottom: image at 170, sqrt(400² + 150²) = 427.200 m, half as strong; surface then bottom: 230, sqrt(400² + 210²) =
    451.774 m, turned over and half; bottom then surface: -170, sqrt(400² + 190²) = 442.832 m, the same."""
    ways = {400.125: 1, 403.113: -1, 427.200: 0.5, 442.832: -0.5, 451.774: -0.5}
    scene = small_scene(array={"hydrophones": 3}, contacts=[click(range_m=400.0, depth_m=30.0, bounces=2)])
    heard = Sea(scene).read(RATE)[1]
    for distance, factor in ways.items():
        at = (0.5 + 0.01 + distance / SPEED) * RATE  # the peak is in the middle of the click's 20 ms
        index, peak = fine_peak(heard, round(at), width=10)
        assert index == pytest.approx(at, abs=0.1)
        assert peak == pytest.approx(1e7 * factor / distance, rel=0.02)


def test_three_bounces_have_the_two_ways_of_the_second_bottom():
    """bottom, surface, bottom: image at 4 * 100 - 30 = 370 m, sqrt(400² + 350²) = 531.507 m, a quarter, turned over;
    surface, bottom, surface: image at -230 m, sqrt(400² + 250²) = 471.699 m, half, turned over twice."""
    scene = small_scene(array={"hydrophones": 3}, contacts=[click(range_m=400.0, depth_m=30.0, bounces=3)])
    heard = Sea(scene).read(RATE)[1]
    for distance, factor in ((531.507, -0.25), (471.699, 0.5)):
        at = (0.51 + distance / SPEED) * RATE
        index, peak = fine_peak(heard, round(at), width=10)
        assert index == pytest.approx(at, abs=0.1)
        assert peak == pytest.approx(1e7 * factor / distance, rel=0.02)


def test_wavefronts_near_the_array_are_curved():
    """Abeam of the middle at 5 m: a hydrophone d along the line hears it (sqrt(25 + d²) - 5)/c later, and weaker."""
    scene = small_scene(contacts=[click(range_m=5.0)])
    heard = Sea(scene).read(RATE)
    for m in range(8):
        distance = np.hypot(5.0, 1.75 - 0.5 * m)
        at = (0.51 + distance / SPEED) * RATE
        index, peak = fine_peak(heard[m], round(at))
        assert index == pytest.approx(at, abs=0.1)
        assert peak == pytest.approx(1e7 / distance, rel=0.01)


def test_forward_hydrophones_hear_a_sound_from_forward_first():
    """60 deg from forward, far away: p_m(t) = p(t + x_m cos(60 deg) / c), the plane wave of every array processor."""
    scene = small_scene(contacts=[click(range_m=20_000.0, bearing_deg=60.0)])
    heard = Sea(scene).read(15 * RATE)
    for m in (0, 7):
        x = 1.75 - 0.5 * m
        at = (13.51 + 20_000 / SPEED - x * 0.5 / SPEED) * RATE
        start = round(at) % RATE  # one click a second: the one that arrives in the last second
        index, _ = fine_peak(heard[m], 14 * RATE + start - RATE * (start > 0.9 * RATE))
        assert index % RATE == pytest.approx(at % RATE, abs=0.15)


@pytest.mark.parametrize("speed", [3.0, 15.0])
def test_tone_of_a_passing_source_is_heard_at_the_doppler_frequency(speed):
    """f (1 - v cos(a) / c)^-1 with a from the way to the line of sight at the time of emission; the whole curve of a
    passage 100 m off, by the phase of the tone against f t. Closed form of the retarded time:
    tau = (-v x + sqrt(v² x² + (c² - v²)(x² + d²))) / (c² - v²), x = x0 + v t along the way."""
    start = np.array([-60.0, 100.0])
    scene = small_scene(
        array={"hydrophones": 3},
        contacts=[
            contact(waypoints_m=[list(start), [1000.0, 100.0]], range_m=None, bearing_deg=None, speed_m_s=speed)
        ],
    )  # fmt: skip
    heard = Sea(scene).read(8 * RATE)[1].astype(float)
    t = np.arange(len(heard)) / RATE
    x = start[0] + speed * t
    excess = SPEED**2 - speed**2
    tau = (-speed * x + np.sqrt((speed * x) ** 2 + excess * (x**2 + 100.0**2))) / excess
    carrier = np.exp(-2j * np.pi * 1000 * (t - tau))
    taper = np.hanning(400) / np.hanning(400).sum()
    turned = np.convolve(heard * carrier, taper, "valid")  # what is left must stand still
    phase = np.unwrap(np.angle(turned[RATE:]))
    assert np.ptp(phase) < 2e-3


def test_spreading_is_spherical():
    """6.02 dB for each doubling of distance."""
    levels = []
    for distance in (250.0, 500.0, 1000.0):
        scene = small_scene(array={"hydrophones": 3}, contacts=[contact(range_m=distance)])
        levels.append(level_db(Sea(scene).read(2 * RATE)[1, RATE:]))
    assert levels[0] == pytest.approx(140 - 20 * np.log10(250), abs=0.01)
    assert np.diff(levels) == pytest.approx(-20 * np.log10(2), abs=0.01)


def test_absorption_takes_what_the_formula_says():
    """At 20 km and 3 kHz it is some 4 dB: more than rounding or chance."""
    water = {"absorption": "francois-garrison", "temperature_c": 10.0, "salinity": 35.0, "ph": 8.0}
    scene = small_scene(
        array={"hydrophones": 3}, water=water, contacts=[contact(range_m=20_000.0, tones=[[3000.0, 140.0]])]
    )
    loss = float(francois_garrison(3000.0, 10, 35, 20, 8)) * 20
    assert loss > 3
    found = level_db(Sea(scene).read(2 * RATE)[1, RATE:])
    assert found == pytest.approx(140 - 20 * np.log10(20_000) - loss, abs=0.01)
