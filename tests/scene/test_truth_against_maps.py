"""Short form of `truth_against_maps.py`: some seconds of the demo's scene, and a scene of its own with one contact."""

from dataclasses import replace

import numpy as np
import pytest
from small_scene import contact, raw_scene
from truth_against_maps import compare, summary

from soundrose.scene.scene_file import load_scene, shipped
from soundrose.scene.scene_tables import parse_scene
from soundrose.settings import load_settings, parse_settings


def test_maps_of_the_demo_show_what_is_there():
    """Level within 0.5 dB and bearing within 0.1 of a beam's width, for every contact 6 dB above all else."""
    report = compare(load_scene(shipped("demo.toml")), load_settings(shipped("demo-settings.toml")), 8.5)
    heard = {(row["band"], row["contact"]) for row in summary(report)}
    assert {
        ("low", "Skarvholm"),
        ("low", "Tindvik"),
        ("high", "Skarvholm"),
        ("high", "Tindvik"),
        ("high", "caller"),
    } <= heard
    assert len(report.findings) >= 12
    for finding in report.findings:
        assert abs(finding.level_db) < 0.5, finding
        assert abs(finding.widths or 0.0) < 0.1, finding
    bounce = [row for row in report.bounce if row[2] is not None]
    assert bounce
    for row in bounce:
        assert abs(row[3]) < 0.1
        assert abs(row[3] - row[4]) < 0.05  # also where another pulls at it


def test_hum_and_strum_are_where_their_waves_say():
    """Hum: the same everywhere, so its peak is at 90 deg. Strum of 68.4 Hz at 42 m/s on hydrophones 0.6 m apart turns
    by 0.977 cycles from one to the next, which looks like -0.023: cos = -0.023 * 1486 / (0.6 * 68.4) = -0.83."""
    scene = load_scene(shipped("demo.toml"))
    quiet = replace(scene, emitters=(), faults=(), gaps=(), strum=replace(scene.strum, decay_m=1000.0))
    settings = load_settings(shipped("demo-settings.toml"))
    low = replace(settings, bands=(settings.band("low"),))
    lines = {(row[0], row[1]): row for row in compare(quiet, low, 14.0).lines}
    for name, hertz, cone in (
        ("hum", 150.0, 90.0),
        ("hum", 250.0, 90.0),
        ("strum", 68.4, np.degrees(np.arccos(-0.83))),
    ):
        _, _, true, found, level_db, pattern_db = lines[name, hertz]
        assert true == pytest.approx(cone, abs=3.0)
        assert found == pytest.approx(true, abs=4.0)  # a broad peak, which wanders
        assert level_db == pytest.approx(0.0, abs=1.5 if name == "strum" else 0.4)  # strum breathes
        assert pattern_db < 0.3


def small_world():
    """16 hydrophones with a ship abeam, in water without absorption and noise known on each hydrophone."""
    tables = {
        "array": {"hydrophones": 16, "spacing_m": 0.5},
        "ambient": {"enabled": True, "shape": "surface", "flat_db": 60.0, "electronic_db": 40.0},
        "contacts": [contact(range_m=800.0, bearing_deg=70.0, speed_m_s=5.0, level_db=135.0, tones=None, bounces=1)],
    }  # fmt: skip
    raw = raw_scene(**tables)
    settings = {
        "array": raw["array"], "feed": {"rate_hz": 8000.0}, "calibration": raw["calibration"],
        "water": {"sound_speed_m_s": 1500.0},
        "bands": [{"name": "main", "band_hz": [200.0, 1400.0], "frame": 2048, "beams": 65, "average_s": 1.0}],
    }  # fmt: skip
    return parse_scene(raw, "small.toml"), parse_settings(settings)


def test_a_single_contact_is_where_it_is_and_as_loud_as_it_is():
    scene, settings = small_world()
    report = compare(scene, settings, 10.0)
    assert len(report.findings) >= 3
    for finding in report.findings:
        assert abs(finding.level_db) < 0.2
        assert finding.widths == pytest.approx(0, abs=0.03)
        assert finding.from_geometry == pytest.approx(0, abs=0.05)


def test_the_comparison_would_see_a_wrong_place_and_a_wrong_level():
    """The service believes in 0.6 dB more of gain than there is, then in hydrophones a fifth closer together."""
    scene, settings = small_world()
    wrong = replace(settings, calibration=replace(settings.calibration, gain_db=(0.6,) * 16))
    report = compare(scene, wrong, 7.0)
    assert np.mean([f.level_db for f in report.findings]) < -0.5
    closer = tuple((0.8 * x, y, z) for x, y, z in settings.array.positions_m)
    report = compare(scene, replace(settings, array=replace(settings.array, positions_m=closer)), 7.0)
    assert report.findings
    assert min(abs(f.from_geometry) for f in report.findings) > 0.1
