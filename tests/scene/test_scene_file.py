"""Scene files: every mistake at once, each as a line; defaults; the scenes that come with the program."""

import pytest
from small_scene import contact, raw_scene, small_scene

from soundrose.errors import ConfigError, UsageError
from soundrose.scene.scene_file import load_scene, shipped, shipped_names
from soundrose.scene.scene_tables import parse_scene
from soundrose.scene.scene_types import Clicks, Events, Motor, Pulse, Sweep
from soundrose.settings import load_settings

CALL = {"shape": "sweep", "level_db": 150.0, "length_s": 0.5, "from_hz": 500.0, "to_hz": 900.0}


def problems(**tables):
    with pytest.raises(ConfigError) as caught:
        parse_scene(raw_scene(**tables), "night.toml")
    return list(caught.value.problems)


def animal(**keys):
    plain = {"kind": "animal", "level_db": None, "tones": None, "interval_s": 2.0, "calls": [CALL]}
    return contact(**(plain | keys))


#: tables, and the one line that they bring
MISTAKES = [
    (
        {"contacts": [contact(), contact(name="two", speed_m_s=-3)]},
        "contacts[1].speed_m_s: got -3; must be a number of m/s from 0 to 50",
    ),
    ({"contacts": [contact(depth_m=100.0)]}, "contacts[0].depth_m: got 100.0; must be a number of metres above 0"),
    ({"contacts": [contact(depth_m=None)]}, "contacts[0].depth_m: missing; must be"),
    ({"contacts": [contact(bounces=4)]}, "contacts[0].bounces: got 4; must be 0, 1, 2 or 3"),
    ({"contacts": [contact(kind="shp")]}, "did you mean 'ship'?"),
    ({"contacts": [contact(name=None)]}, "contacts[0].name: missing; must be a name"),
    ({"contacts": [contact(name="hum")]}, 'contacts[0].name: got "hum"; must be none of ambient'),
    ({"contacts": [contact(), contact()]}, 'got two sources named "one"'),
    ({"contacts": [contact(range_m=None)]}, "contacts[0].range_m: missing; must be"),
    ({"contacts": [contact(bearing_deg=400)]}, "contacts[0].bearing_deg: got 400; must be degrees from 0 to 360"),
    ({"contacts": [contact(level_db=None)]}, "contacts[0].level_db: missing; must be a level in dB"),
    ({"contacts": [contact(corner_hz=9000)]}, "contacts[0].corner_hz: got 9000; must be above 0, at most 3600"),
    ({"contacts": [contact(modulation=2)]}, "contacts[0].modulation: got 2; must be from 0 to 1"),
    ({"contacts": [contact(tones=[[3700.0, 100.0]])]}, "contacts[0].tones: got [[3700.0, 100.0]]; must be pairs"),
    ({"contacts": [contact(tonse=[])]}, "contacts[0].tonse: unknown key; did you mean 'tones'?"),
    ({"contacts": [contact(legs=3)]}, "contacts[0].legs: got 3; must be a list of tables"),
    ({"contacts": [contact(legs=[{"turn_deg_s": 1}])]}, "contacts[0].legs[0].seconds: missing; must be"),
    ({"contacts": [contact(laps=0)]}, "contacts[0].laps: got 0; must be a whole number"),
    ({"contacts": [contact(waypoints_m=[[0, 0]], range_m=None, bearing_deg=None)]}, "contacts[0].waypoints_m: got"),
    (
        {"contacts": [contact(waypoints_m=[[0, 0], [1, 1], [0, 0]], laps=2, range_m=None, bearing_deg=None)]},
        "contacts[0].laps: got 2; waypoints_m must not end where they begin",
    ),
    (
        {"contacts": [contact(waypoints_m=[[0, 0], [1, "x"]], range_m=None, bearing_deg=None)]},
        'contacts[0].waypoints_m[1]: got [1, "x"]; must be two or more different places',
    ),
    ({"contacts": [animal(calls=[])]}, "contacts[0].calls: got []; must be tables"),
    ({"contacts": [animal(calls=[CALL | {"to_hz": 5000.0}])]}, "contacts[0].calls[0].to_hz: got 5000.0; must be"),
    ({"contacts": [animal(calls=[CALL | {"shape": "song"}])]}, 'contacts[0].calls[0].shape: got "song"; must be'),
    ({"contacts": [animal(interval_s=None)]}, "contacts[0].interval_s: missing; must be a number of seconds"),
    ({"contacts": [animal(interval_s=[3, 1])]}, "contacts[0].interval_s: got [3, 1]; must be a number of seconds"),
    ({"contacts": [animal(bout_s=5)]}, "contacts[0].bout_s: bout_s and silence_s go together"),
    ({"contacts": 5}, "contacts: got 5; must be tables [[contacts]]"),
    ({"own": {"sources": [{"name": "g", "kind": "gun", "level_db": 1, "interval_s": 5, "frequency_hz": 900}]}},
     "own.sources[0].frequency_hz: got 900; must be above 0, at most 1/40 of the rate"),
    ({"own": {"reverberation": {"source": "g", "level_db": 90}}}, "own.reverberation.source: got"),
    ({"own": {"array_depth_m": 100.0}}, "own.array_depth_m: got 100; must be above the bottom"),
    ({"own": {"heading_deg": -1}}, "own.heading_deg: got -1; must be a number of degrees from 0 to 360"),
    ({"water": {"absorption": "thorp"}}, 'water.absorption: got "thorp"; must be one of francois-garrison'),
    ({"water": {"depth_m": 0}}, "water.depth_m: got 0; must be a number of metres above 0"),
    ({"ambient": {"shape": "round"}}, 'ambient.shape: got "round"; must be one of isotropic, surface'),
    ({"ambient": {"shipping": 2}}, "ambient.shipping: got 2; must be from 0"),
    ({"feed": {"type": "u8"}}, 'feed.type: got "u8"; must be one of i2, i3, i4, f4'),
    ({"feed": {"rate_hz": 10}}, "feed.rate_hz: got 10; must be a number of samples a second from 1000 to 400000"),
    ({"hum": {}}, "hum.tones: missing; must be pairs"),
    ({"flow": {"level_db": 80, "convection": 2}}, "flow.convection: got 2; must be above 0, at most 1"),
    ({"strum": {"tones": [[20, 100]], "decay_m": 0}}, "strum.decay_m: got 0; must be"),
    ({"faults": [{"channel": 8}]}, "faults[0].channel: got 8; must be a channel number from 0 to 7"),
    ({"faults": [{"channel": 1, "state": "exchanged"}]}, "faults[0].with: missing; must be a channel number"),
    ({"faults": [{"channel": 1, "state": "exchanged", "with": 1}]}, "faults[0].with: got 1; must be another channel"),
    ({"faults": [{"channel": 1, "from_s": 5, "to_s": 4}]}, "faults[0].to_s: got 4; must be a number of seconds after"),
    ({"gaps": [{"at_s": 1}]}, "gaps[0].length_s: missing; must be above 0"),
    ({"clock": {"drift_ppm": 2000}}, "clock.drift_ppm: got 2000; must be from -1000 to 1000"),
    ({"navigation": {"every_s": -1}}, "navigation.every_s: got -1; must be a number, 0 or more"),
    ({"seed": -1}, "seed: got -1; must be a whole number"),
    ({"name": 7}, "name: got 7; must be some text"),
    ({"oceans": {}}, "oceans: unknown key"),
    ({"array": {"spacing_m": -1}}, "array.spacing_m: got -1; must be"),
]  # fmt: skip


@pytest.mark.parametrize(("tables", "line"), MISTAKES, ids=[line[:50] for _, line in MISTAKES])
def test_each_mistake_is_one_line_that_says_what_was_got_and_what_is_allowed(tables, line):
    found = problems(**tables)
    assert len(found) == 1, found
    assert found[0].startswith("night.toml: ")
    assert line in found[0]


def test_every_mistake_is_told_at_once():
    found = problems(
        contacts=[contact(speed_m_s=-3, bounces=7)], gaps=[{"at_s": -1, "length_s": 1}], seed="x", clock={"drift": 1}
    )
    assert len(found) == 5


def test_what_is_read_is_what_was_written():
    scene = small_scene(
        contacts=[
            contact(blade_hz=5.0, modulation=0.5, tones=[[50.0, 140.0]]),
            animal(name="a", calls=[
                CALL,
                {"shape": "pulse", "level_db": 1.0, "length_s": 0.1, "frequency_hz": 800.0},
                {"shape": "clicks", "level_db": 2.0, "count": 3, "gap_s": 0.05, "frequency_hz": 1500.0},
            ], bout_s=[10, 20], silence_s=60),
            contact(name="p", kind="pinger", tones=None, frequency_hz=3000.0, length_s=0.2, level_db=120.0,
                    interval_s=9),
        ]
    )  # fmt: skip
    motor, calls, ping = (emitter.sound for emitter in scene.emitters)
    assert motor == Motor(-300.0, 80.0, 20.0, 5.0, 0.5, ((50.0, 140.0),))
    assert isinstance(calls, Events)
    assert calls.shapes == (Sweep(150.0, 0.5, 500.0, 900.0), Pulse(1.0, 0.1, 800.0), Clicks(2.0, 3, 0.05, 1500.0))
    assert (calls.schedule.interval_s, calls.schedule.bout_s, calls.schedule.silence_s) == ((2, 2), (10, 20), (60, 60))
    assert ping.shapes == (Sweep(120.0, 0.2, 3000.0, 3000.0),)


def test_sound_speed_follows_from_the_water_where_it_is_not_given():
    """At 20 m depth, against Mackenzie 1981 (JASA 70(3) 807-812): 1448.96 + 4.591 T - 0.05304 T² + 0.0002374 T³ +
    1.34 (S - 35) + 0.0163 D = 1482.74 m/s; the two formulas agree to some tenths."""
    raw = raw_scene(water={"temperature_c": 8.0, "salinity": 35.0})
    del raw["water"]["sound_speed_m_s"]
    assert parse_scene(raw).water.sound_speed_m_s == pytest.approx(1482.74, abs=0.3)


def test_a_file_that_cannot_be_read_is_told(tmp_path):
    with pytest.raises(ConfigError, match=r"none\.toml: No such file"):
        load_scene(tmp_path / "none.toml")
    (tmp_path / "bad.toml").write_text("name = ")
    with pytest.raises(ConfigError, match=r"bad\.toml: "):
        load_scene(tmp_path / "bad.toml")
    (tmp_path / "large.toml").write_bytes(b"#" * (5 << 20))
    with pytest.raises(ConfigError, match="at most"):
        load_scene(tmp_path / "large.toml")


def test_scenes_that_come_with_the_program_load():
    assert {"demo.toml", "demo-settings.toml"} <= set(shipped_names())
    scene, settings = load_scene(shipped("demo.toml")), load_settings(shipped("demo-settings.toml"))
    assert settings.warnings == ()
    assert scene.array == settings.array
    assert scene.calibration == settings.calibration
    assert scene.water.sound_speed_m_s == settings.water.sound_speed_m_s
    with pytest.raises(UsageError, match=r"no scene 'dawn\.toml'.*demo\.toml"):
        shipped("dawn.toml")
