"""Every mistake in a settings file is one line: where, what was got, what is allowed. Ten at once are ten lines."""

import copy
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose.errors import ConfigError
from soundrose.settings import TABLES, parse_settings

RIGHT: dict[str, Any] = {
    "array": {"id": "aft", "hydrophones": 48, "spacing_m": 0.375, "exclude": []},
    "feed": {"bind": "tcp://127.0.0.1:5510", "rate_hz": 16000.0, "overload": "drop"},
    "calibration": {"sensitivity_db": -180.0, "gain_db": 20.0, "full_scale_v": 2.5, "delay_s": 0.0},
    "water": {"sound_speed_m_s": 1500.0},
    "bands": [
        {"name": "main", "band_hz": [50.0, 4000.0], "frame": 4096, "beams": 145, "shading": "hann", "average_s": 2.0}
    ],
    "detection": {}, "stream": {}, "publish": {"bind": "tcp://127.0.0.1:5511"},
    "serve": {"host": "127.0.0.1", "port": 8080}, "store": {"path": "soundrose-data"},
}  # fmt: skip
GONE = object()


def spoilt(changes: dict[str, Any]) -> dict[str, Any]:
    """The right settings with values put in (or taken out: GONE) at paths like "bands.0.frame"."""
    raw = copy.deepcopy(RIGHT)
    for path, value in changes.items():
        *way, last = path.split(".")
        table: Any = raw
        for step in way:
            table = table[int(step)] if step.isdigit() else table[step]
        if value is GONE:
            del table[last]
        else:
            table[last] = value
    return raw


def problems(changes: dict[str, Any], base_dir: Any = ".") -> tuple[str, ...]:
    with pytest.raises(ConfigError) as caught:
        parse_settings(spoilt(changes), base_dir, "aft.toml")
    assert str(caught.value) == "\n".join(caught.value.problems)
    return caught.value.problems


NAN, INF = float("nan"), float("inf")
NO_LINE = {"array.hydrophones": GONE, "array.spacing_m": GONE}
WAYS = "give hydrophones with spacing_m, or positions_m, or positions_file: exactly one of the three"
ENDPOINT = "must be tcp://host:port (port 0 or * for any free one) or ipc://path of at most 107 bytes"
ID = "must be a name of 1 to 64 printable characters without blanks at its ends"
NAME = "must be a lower-case letter, then up to 31 of a-z, 0-9 and '-'"
BAND = "must be two numbers of Hz, 0 <= low < high <= 0.45 of the rate (7200)"
CHANNELS = 'must be a slice "first:stop:step" or a list of at least 2 different channels, 0 to 47'
SECOND = {"name": "main-two", "band_hz": [50.0, 400.0]}

#: what is changed, and the line that must come of it
MISTAKES: list[tuple[dict[str, Any], str]] = [
    ({"array": 3}, "array: got 3; must be a table"),
    ({"array.id": GONE}, f"array.id: missing; {ID}"),
    ({"array.id": " a"}, f'array.id: got " a"; {ID}'),
    ({"array.id": 7}, f"array.id: got 7; {ID}"),
    ({"array.hydrophones": 1}, "array.hydrophones: got 1; must be a whole number from 2 to 4096"),
    ({"array.hydrophones": True}, "array.hydrophones: got true; must be a whole number from 2 to 4096"),
    ({"array.hydrophones": 48.0}, "array.hydrophones: got 48.0; must be a whole number from 2 to 4096"),
    ({"array.hydrophones": GONE}, "array.hydrophones: missing; must be a whole number from 2 to 4096"),
    ({"array.spacing_m": GONE}, "array.spacing_m: missing; must be a number of metres above 0"),
    ({"array.spacing_m": 0}, "array.spacing_m: got 0; must be a number of metres above 0"),
    ({"array.spacing_m": INF}, "array.spacing_m: got inf; must be a number of metres above 0"),
    ({"array.spacing_m": True}, "array.spacing_m: got true; must be a number of metres above 0"),
    ({"array.spacing_m": 10**400}, "array.spacing_m: got an integer of 1329 bits; must be a number of metres above 0"),
    ({"array.positions_m": [[0, 0, 0], [1, 0, 0]]}, f"array: got 2 ways of saying where the hydrophones are; {WAYS}"),
    (NO_LINE, f"array: got 0 ways of saying where the hydrophones are; {WAYS}"),
    (NO_LINE | {"array.positions_m": 4}, "array.positions_m: got 4; must be a list of 2 to 4096 positions [x, y, z]"),
    (
        NO_LINE | {"array.positions_m": [[0, 0, 0]]},
        "array.positions_m: got 1 positions; must be a list of 2 to 4096 positions [x, y, z]",
    ),
    (
        NO_LINE | {"array.positions_m": [[0, 0, 0], [1, NAN, 0]]},
        "array.positions_m[1]: got [1, nan, 0]; must be three finite numbers x, y, z in metres",
    ),
    (
        NO_LINE | {"array.positions_m": [[0, 0], [1, 2, 0]]},
        "array.positions_m[0]: got [0, 0]; must be three finite numbers x, y, z in metres",
    ),
    (NO_LINE | {"array.positions_file": 5}, "array.positions_file: got 5; must be the name of a CSV file"),
    (
        NO_LINE | {"array.positions_file": "no.csv"},
        "array.positions_file: no.csv: cannot be read: No such file or directory",
    ),
    ({"array.exclude": [48]}, "array.exclude: got [48]; must be a list of different channel numbers from 0 to 47"),
    ({"array.exclude": [3, 3]}, "array.exclude: got [3, 3]; must be a list of different channel numbers from 0 to 47"),
    ({"array.exclude": 3}, "array.exclude: got 3; must be a list of different channel numbers from 0 to 47"),
    ({"array.exclud": []}, "array.exclud: unknown key; did you mean 'exclude'?"),
    ({"feed.a\nb": 1}, "feed.a\\nb: unknown key; keys here: bind, rate_hz, overload"),
    ({"feed.overload": "a\nµ"}, 'feed.overload: got "a\\nµ"; must be one of drop, hold'),
    ({"feeds": {}}, "feeds: unknown key; did you mean 'feed'?"),
    ({"zzz": {}}, f"zzz: unknown key; keys here: {', '.join(TABLES)}"),
    ({"feed.bind": "tcp://127.0.0.1"}, f'feed.bind: got "tcp://127.0.0.1"; {ENDPOINT}'),
    ({"feed.bind": "tcp://h:65536"}, f'feed.bind: got "tcp://h:65536"; {ENDPOINT}'),
    ({"feed.bind": "udp://h:5"}, f'feed.bind: got "udp://h:5"; {ENDPOINT}'),
    ({"feed.bind": 5510}, f"feed.bind: got 5510; {ENDPOINT}"),
    ({"feed.bind": "ipc://"}, f'feed.bind: got "ipc://"; {ENDPOINT}'),
    ({"feed.rate_hz": NAN}, "feed.rate_hz: got nan; must be a number of Hz above 0, at most 1e+07"),
    ({"feed.rate_hz": "16000"}, 'feed.rate_hz: got "16000"; must be a number of Hz above 0, at most 1e+07'),
    ({"feed.overload": "dropp"}, "feed.overload: got \"dropp\"; must be one of drop, hold; did you mean 'drop'?"),
    ({"feed.overload": []}, "feed.overload: got []; must be one of drop, hold"),
    ({"publish.bind": "tcp://127.0.0.1:5510"},
     'publish.bind: got "tcp://127.0.0.1:5510", which is that of feed.bind; must be an address of its own'),
    ({"calibration.sensitivity_db": INF},
     "calibration.sensitivity_db: got inf; must be a finite number of dB re 1 V/µPa, "
     "or a list with one for each channel"),
    ({"calibration.gain_db": [1.0, 2.0]}, "calibration.gain_db: got a list of 2; must be one value or a list of 48"),
    ({"calibration.full_scale_v": 0},
     "calibration.full_scale_v: got 0; must be a number of volts above 0, or a list with one for each channel"),
    ({"calibration.delay_s": [0.0] * 47 + [True]},
     "calibration.delay_s: got [0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0...; "
     "must be a finite number of seconds, or a list with one for each channel"),
    ({"calibration.gain": 1}, "calibration.gain: unknown key; did you mean 'gain_db'?"),
    ({"water.sound_speed_m_s": 0}, "water.sound_speed_m_s: got 0; must be a number of m/s above 0"),
    ({"water.salinity": 35}, "water: got sound_speed_m_s and salinity; give the speed, or what it follows from"),
    ({"water": {"temperature_c": 10}}, "water.salinity: missing; must be a practical salinity from 0 to 42"),
    ({"water": {"salinity": 35}}, "water.temperature_c: missing; must be a number of degrees Celsius from -2.5 to 40"),
    ({"water": {"salinity": 35, "temperature_c": 10, "depth_m": -1}},
     "water.depth_m: got -1; must be a number of metres from 0 to 11000"),
    ({"bands": GONE}, "bands: missing; must be 1 to 32 tables [[bands]]"),
    ({"bands": []}, "bands: got 0; must be 1 to 32 tables [[bands]]"),
    ({"bands": {"name": "main"}}, "bands: got a table; must be 1 to 32 tables [[bands]]"),
    ({"bands": [7]}, "bands[0]: got 7; must be a table"),
    ({"water": []}, "water: got []; must be a table"),
    ({"bands.0.name": GONE}, f"bands[0].name: missing; {NAME}"),
    ({"bands.0.name": "Main"}, f'bands[0].name: got "Main"; {NAME}'),
    ({"bands.0.name": "m" * 33}, f'bands[0].name: got "{"m" * 33}"; {NAME}'),
    ({"bands": [*RIGHT["bands"], SECOND]},
     'bands[1].name: got "main-two", which begins with the name of bands[0]; must not begin with another name'),
    ({"bands": [SECOND, *RIGHT["bands"]]},
     'bands[0].name: got "main-two", which begins with the name of bands[1]; must not begin with another name'),
    ({"bands": RIGHT["bands"] * 2},
     'bands[1].name: got "main", the name of bands[0]; must not begin with another name'),
    ({"bands.0.band_hz": GONE}, f"bands[0].band_hz: missing; {BAND}"),
    ({"bands.0.band_hz": [50, 7201]}, f"bands[0].band_hz: got [50, 7201]; {BAND}"),
    ({"bands.0.band_hz": [-1, 700]}, f"bands[0].band_hz: got [-1, 700]; {BAND}"),
    ({"bands.0.band_hz": [700, 700]}, f"bands[0].band_hz: got [700, 700]; {BAND}"),
    ({"bands.0.band_hz": [1, 2, 3]}, f"bands[0].band_hz: got [1, 2, 3]; {BAND}"),
    ({"bands.0.band_hz": 700}, f"bands[0].band_hz: got 700; {BAND}"),
    ({"bands.0.band_hz": [50, INF]}, f"bands[0].band_hz: got [50, inf]; {BAND}"),
    ({"bands.0.band_hz": [51, 52]},
     "bands[0].band_hz: got [51, 52]; must hold at least one bin; bins are 3.90625 Hz apart for this frame"),
    ({"bands.0.frame": 128}, "bands[0].frame: got 128; must be even and at least 504 for this array"),
    ({"bands.0.frame": 4097}, "bands[0].frame: got 4097; must be even and at least 504 for this array"),
    ({"bands.0.frame": 4096.0}, "bands[0].frame: got 4096.0; must be even and at least 504 for this array"),
    ({"bands.0.frame": 4098}, "bands[0].frame: got 4098; must have no factors but 2, 3, 5 and 7: 4116 is next"),
    ({"bands.0.frame": 1 << 21}, "bands[0].frame: got 2097152; must be at most 1048576"),
    ({"array.spacing_m": 1e6},
     "bands[0].frame: this array takes a frame of 1002666796; the longest allowed is 1048576"),
    ({"calibration.delay_s": [0.3, *[0.0] * 47]},
     "bands[0].frame: got 4096; must be even and at least 10104 for this array"),
    ({"bands.0.beams": 1}, "bands[0].beams: got 1; must be a whole number from 2 to 4096"),
    ({"bands.0.beams": 4097}, "bands[0].beams: got 4097; must be a whole number from 2 to 4096"),
    ({"bands.0.beams": 4096, "bands.0.frame": 262144, "bands.0.kernel": "general"},
     "bands[0].beams: got 4096; takes 94.8 GiB of steering weights; must be at most 172 here (4 GiB)"),
    ({"bands.0.channels": "0:49"}, f'bands[0].channels: got "0:49"; {CHANNELS}'),
    ({"bands.0.channels": "0:48:0"}, f'bands[0].channels: got "0:48:0"; {CHANNELS}'),
    ({"bands.0.channels": "48:0:-1"}, f'bands[0].channels: got "48:0:-1"; {CHANNELS}'),
    ({"bands.0.channels": "all"}, f'bands[0].channels: got "all"; {CHANNELS}'),
    ({"bands.0.channels": [1, 1]}, f"bands[0].channels: got [1, 1]; {CHANNELS}"),
    ({"bands.0.channels": [1]}, f"bands[0].channels: got [1]; {CHANNELS}"),
    ({"bands.0.channels": [1, 48]}, f"bands[0].channels: got [1, 48]; {CHANNELS}"),
    ({"bands.0.channels": [1, True]}, f"bands[0].channels: got [1, true]; {CHANNELS}"),
    ({"bands.0.channels": "0:3", "array.exclude": [0, 1]},
     "bands[0].channels: array.exclude leaves 1 of 3 hydrophones; must leave 2"),
    ({"bands.0.channels": "0:4", "array.exclude": [1, 2]},
     "bands[0].shading: the hydrophones that array.exclude leaves all have weight 0; choose another"),
    ({"bands.0.shading": "han"},
     "bands[0].shading: got \"han\"; must be one of uniform, hann, hamming, chebyshev, taylor; did you mean 'hann'?"),
    ({"bands.0.shading": 3}, "bands[0].shading: got 3; must be one of uniform, hann, hamming, chebyshev, taylor"),
    ({"bands.0.shading": [1.0, 2.0]},
     "bands[0].shading: shading has shape (2,); a list needs one weight for each of the 48 channels"),
    ({"bands.0.channels": "0:2", "bands.0.shading": [1.0, -2.0]},
     "bands[0].shading: got [1.0, -2.0]; must be finite weights, none below 0, not all 0"),
    ({"bands.0.channels": "0:2", "bands.0.shading": [0, 0]},
     "bands[0].shading: got [0, 0]; must be finite weights, none below 0, not all 0"),
    ({"bands.0.channels": "0:2"}, "bands[0].shading: shading 'hann' has 2 hydrophones; it needs at least 3"),
    ({"bands.0.channels": [0, 1, 3], "bands.0.shading": "chebyshev"},
     "bands[0].shading: shading 'chebyshev' needs equal spacing along x; this line has none: use taylor or hann"),
    (NO_LINE | {"array.positions_m": [[0, 0, z] for z in range(3)]},
     "bands[0].shading: shading 'hann' needs a line with some length along x; all hydrophones are at one x"),
    ({"bands.0.shading_db": 0}, "bands[0].shading_db: got 0; must be a number of dB above 0, at most 120"),
    ({"bands.0.average_s": -1}, "bands[0].average_s: got -1; must be a number of seconds, at least 0"),
    ({"bands.0.average_s": INF}, "bands[0].average_s: got inf; must be a number of seconds, at least 0"),
    ({"bands.0.place": "there"}, "bands[0].place: got \"there\"; must be one of here, elsewhere; did you mean 'here'?"),
    ({"bands.0.kernel": "pair"},
     "bands[0].kernel: got \"pair\"; must be one of auto, pairs, general; did you mean 'pairs'?"),
    ({"bands.0.kernel": "pairs", "bands.0.channels": [0, 1, 3]},
     'bands[0].kernel: got "pairs"; "pairs" cannot be used here: the line is not mirror-symmetric about its middle; '
     'must be "auto" or "general"'),
    ({"bands.0.kernel": "pairs", "calibration.delay_s": [1e-6, *[0.0] * 47]},
     'bands[0].kernel: got "pairs"; "pairs" cannot be used here: delay_s differs between channels; '
     'must be "auto" or "general"'),
    ({"bands.0.kernel": "pairs", "bands.0.channels": "0:2", "bands.0.shading": [1, 2]},
     'bands[0].kernel: got "pairs"; "pairs" cannot be used here: the shading is not symmetric about the middle; '
     'must be "auto" or "general"'),
    ({"bands.0.map_rate_hz": 8},
     "bands[0].map_rate_hz: got 8; must be a number of Hz above 0, at most 7.8125 (one for each half frame)"),
    ({"bands.0.map_beams": 146}, "bands[0].map_beams: got 146; must be from 2 to 145 (beams)"),
    ({"bands.0.map_bins": 0}, "bands[0].map_bins: got 0; must be from 1 to 1012 (bins in the band)"),
    ({"bands.0.band": 1}, "bands[0].band: unknown key; did you mean 'band_hz'?"),
    ({"detection.enabled": 1}, "detection.enabled: got 1; must be true or false"),
    ({"detection.pfa": 0}, "detection.pfa: got 0; must be a probability above 0 and at most 0.1"),
    ({"detection.integrate_s": -1}, "detection.integrate_s: got -1; must be a number of seconds, at least 0"),
    ({"detection.max_beams": 1}, "detection.max_beams: got 1; must be a whole number from 2 to 65536"),
    ({"detection.max_bins": 1.5}, "detection.max_bins: got 1.5; must be a whole number from 1 to 65536"),
    ({"detection.pf": 0.1}, "detection.pf: unknown key; did you mean 'pfa'?"),
    ({"stream.collect": "ipc://" + "p" * 108}, f'stream.collect: got "ipc://{"p" * 50}...; {ENDPOINT}'),
    ({"stream.control": "ipc://@" + "p" * 95 + "{pid}-more"}, f'stream.control: got "ipc://@{"p" * 49}...; {ENDPOINT}'),
    ({"stream.bnd": "x"}, "stream.bnd: unknown key; did you mean 'bind'?"),
    ({"publish.binds": "x"}, "publish.binds: unknown key; did you mean 'bind'?"),
    ({"serve.host": "a b"}, 'serve.host: got "a b"; must be a host name or address'),
    ({"serve.port": 65536}, "serve.port: got 65536; must be a port from 0 (any free one) to 65535"),
    ({"serve.ports": 1}, "serve.ports: unknown key; did you mean 'port'?"),
    ({"store.path": ""}, 'store.path: got ""; must be the path of a folder'),
    ({"store.retain_days": 0}, "store.retain_days: got 0; must be a number of days above 0, at most 36500"),
    ({"store.retain_mb": 0.5}, "store.retain_mb: got 0.5; must be a whole number of megabytes from 1 to 1000000"),
    ({"log": {"format": "jason"}}, "log.format: got \"jason\"; must be one of text, json; did you mean 'json'?"),
    ({"log": {"level": 1}}, "log.level: unknown key; keys here: format"),
    ({"stream.commands": "ipc"}, f'stream.commands: got "ipc"; {ENDPOINT}'),
    ({"store.paths": ""}, "store.paths: unknown key; did you mean 'path'?"),
]  # fmt: skip


@pytest.mark.parametrize(("changes", "line"), MISTAKES, ids=[line.split(";")[0][:70] for _, line in MISTAKES])
def test_mistake_is_one_line_that_says_what_is_allowed(changes, line):
    assert problems(changes) == (f"aft.toml: {line}",)


def test_ten_mistakes_at_once_are_ten_lines():
    found = problems({
        "array.id": "", "array.exclude": [99], "feed.overload": "wait", "feed.bandwidth": 3,
        "water.sound_speed_m_s": -1,
        "bands.0.beams": 1, "bands.0.shading": "round", "bands.0.average_s": NAN, "serve.port": 70000, "store.path": 4,
    })  # fmt: skip
    where = [line.split(": ")[1] for line in found]
    assert sorted(where) == sorted(
        ["array.id", "array.exclude", "feed.overload", "feed.bandwidth", "water.sound_speed_m_s", "bands[0].beams",
         "bands[0].shading", "bands[0].average_s", "serve.port", "store.path"]
    )  # fmt: skip
    assert all(line.startswith("aft.toml: ") and "\n" not in line for line in found)


@pytest.mark.parametrize(
    ("content", "line"),
    [
        ("", 'line 1: got ""; must be the header "x_m,y_m,z_m"'),
        ("x,y,z\n1,2,3\n", 'line 1: got "x,y,z"; must be the header "x_m,y_m,z_m"'),
        ("x_m,y_m,z_m\n1,2,3\n", "got 1 positions; must be 2 to 4096"),
        ("x_m,y_m,z_m\n1,2,3\n4,,5\n", 'line 3: got "4,,5"; must be three finite numbers x, y, z'),
        ("x_m,y_m,z_m\n1,2,3\n4,nan,5\n", 'line 3: got "4,nan,5"; must be three finite numbers x, y, z'),
        ("x_m,y_m,z_m\n1,2,3\n\n4,5\n", 'line 4: got "4,5"; must be three finite numbers x, y, z'),
        ('x_m,y_m,z_m\n1,2,"3\n', "unexpected end of data"),
    ],
)
def test_mistake_in_a_positions_file_says_its_line(tmp_path, content, line):
    (tmp_path / "array.csv").write_text(content, encoding="utf-8")
    found = problems(NO_LINE | {"array.positions_file": "array.csv"}, tmp_path)
    assert found == (f"aft.toml: array.positions_file: array.csv: {line}",)


@given(
    st.sampled_from([f"{table}.{key}" for table in RIGHT if isinstance(RIGHT[table], dict) for key in RIGHT[table]]
                    + [f"bands.0.{key}" for key in RIGHT["bands"][0]] + list(RIGHT)),
    st.recursive(
        st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8) | st.just("\x00"),
        lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
        max_leaves=6,
    ),
)  # fmt: skip
def test_any_value_anywhere_gives_settings_or_lines_never_another_error(path, value):
    lines: tuple[str, ...] = ("none",)
    try:
        parse_settings(spoilt({path: value}), ".", "aft.toml")
    except ConfigError as error:
        lines = error.problems
    assert lines
    assert lines == ("none",) or all(line.startswith("aft.toml: ") and "\n" not in line for line in lines)
