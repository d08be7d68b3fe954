"""What the demo says it found."""

import numpy as np

from soundrose.scene.plane import Noise
from soundrose.scene.scenario import CHANNELS, SOUNDS, positions, settings_text
from soundrose.scene.tally import Finding, Tally
from soundrose.settings import parse_settings

CONE, FREQUENCY = np.array([0.0, 60.0, 90.0, 120.0]), np.array([100.0, 200.0, 300.0])


def level(beam, bin_i):
    levels = np.full((4, 3), 40.0, np.float32)
    levels[beam, bin_i] = 80.0
    return levels


def sound(name, true_deg, own_hz):
    from soundrose.scene.scenario import Sound

    return Sound(name, Noise(true_deg, 60.0, own_hz), own_hz)


def test_loudest_beam_is_judged_in_the_sounds_own_frequencies():
    tally = Tally(settle=0)
    for _ in range(3):
        tally.add(np.maximum(level(1, 0), level(3, 2)), CONE, FREQUENCY)
    sounds = [sound("a", 61.0, (50.0, 150.0)), sound("b", 118.0, (250.0, 350.0))]
    assert tally.findings(sounds) == [Finding("a", 61.0, 60.0), Finding("b", 118.0, 120.0)]
    assert tally.maps == 3


def test_first_maps_are_left_out_once_the_average_has_settled():
    tally = Tally(settle=2)
    for beam in (0, 0, 3, 3):
        tally.add(level(beam, 0) + (20 if beam == 0 else 0), CONE, FREQUENCY)
    assert tally.findings([sound("a", 1.0, (50.0, 350.0))])[0].found_deg == 120.0


def test_nothing_is_found_without_maps():
    assert Tally().findings(SOUNDS) == []


def test_scenario_is_the_array_its_settings_describe():
    import tomllib

    settings = parse_settings(tomllib.loads(settings_text("tcp://127.0.0.1:*", "tcp://127.0.0.1:*", 0, "store")))
    listed = np.array(settings.array.positions_m)
    assert len(listed) == CHANNELS
    assert np.allclose(listed - listed.mean(axis=0), positions(), atol=1e-12)


def test_no_sound_is_judged_where_it_throws_images():
    """Own frequencies end below c / (d (1 + |cos|)), where the first image enters the grid."""
    for item in SOUNDS:
        onset = 1500.0 / (0.375 * (1 + abs(np.cos(np.radians(item.wave.cone_deg)))))
        assert item.own_hz[1] < onset, item.name
