"""The settings file as a whole: what a right one gives, and files that cannot be read."""

import json
from pathlib import Path

import numpy as np
import pytest

from soundrose.errors import ConfigError
from soundrose.settings import RESERVED, load_settings, parse_settings
from soundrose.settings_types import DetectionSettings, Settings, StreamSettings

DEPLOY = Path(__file__).parents[2] / "deploy"

#: the smallest file that works
LEAST = '[array]\nid = "aft"\nhydrophones = 48\nspacing_m = 0.375\n[[bands]]\nname = "main"\nband_hz = [50, 4000]\n'


@pytest.fixture
def load(tmp_path):
    def write_and_load(text: str, name: str = "aft.toml") -> Settings:
        (tmp_path / name).write_text(text, encoding="utf-8")
        return load_settings(tmp_path / name)

    return write_and_load


def test_sample_files_load_without_a_mistake_or_a_warning():
    for name in ("line.toml", "nested.toml"):
        assert load_settings(DEPLOY / name).warnings == ()


def test_sample_line_is_the_array_it_says():
    settings = load_settings(DEPLOY / "line.toml")
    x = np.array(settings.array.positions_m)[:, 0]
    assert (len(x), settings.array.spacing_m) == (48, 0.375)
    assert x[0] == x.max() == 47 * 0.375 / 2, "channel 0 is the foremost"
    assert x.sum() == pytest.approx(0.0, abs=1e-12)
    np.testing.assert_allclose(np.diff(x), -0.375, rtol=1e-12)
    band = settings.band("main")
    assert (band.frame, band.beams, band.band_hz, band.channels) == (4096, 145, (50.0, 4000.0), tuple(range(48)))
    assert settings.calibration.given
    assert settings.calibration.sensitivity_db == (-180.0,) * 48
    assert settings.water.sound_speed_m_s == 1500.0


def test_nested_apertures_are_three_equally_spaced_lines_of_twenty_five():
    settings = load_settings(DEPLOY / "nested.toml")
    x = np.array(settings.array.positions_m)[:, 0]
    for name, spacing in (("low", 1.5), ("mid", 0.75), ("high", 0.375)):
        own = x[list(settings.band(name).channels)]
        np.testing.assert_allclose(own, spacing * np.arange(12, -13, -1), atol=1e-12)
        # no images in any direction: the alias onset at endfire, c/(2 d), is above the band
        assert settings.band(name).band_hz[1] < settings.water.sound_speed_m_s / (2 * spacing)


def test_defaults_are_those_of_the_docs(load):
    settings = load(LEAST)
    assert settings.feed.bind == "tcp://127.0.0.1:5510"
    assert (settings.feed.rate_hz, settings.feed.overload) == (16000.0, "drop")
    band = settings.bands[0]
    assert (band.frame, band.beams, band.shading, band.shading_db) == (4096, 145, "hann", 30.0)
    assert (band.average_s, band.place, band.kernel) == (2.0, "here", "auto")
    assert (band.map_rate_hz, band.map_beams, band.map_bins) == (None, None, None)
    assert settings.detection == DetectionSettings()
    assert settings.stream == StreamSettings()
    assert settings.publish.bind == "tcp://127.0.0.1:5511"
    assert (settings.serve.host, settings.serve.port, settings.store.path) == ("127.0.0.1", 8080, "soundrose-data")
    assert not settings.calibration.given
    assert [line.split(": ")[1] for line in settings.warnings] == ["calibration", "water"]


def test_same_file_gives_the_same_settings_and_they_survive_json(load):
    settings = load_settings(DEPLOY / "nested.toml")
    assert settings == load_settings(DEPLOY / "nested.toml")
    assert Settings.from_plain(json.loads(json.dumps(settings.as_plain()))) == settings


def test_pid_is_left_in_place_for_the_supervisor(load):
    assert "{pid}" in load(LEAST + '[stream]\ncontrol = "ipc://@x-{pid}"\n').stream.control


def test_positions_may_come_from_a_list_or_from_a_csv_file_beside_the_settings(load, tmp_path):
    rows = [(3.0, 0.0, 0.5), (1.0, 0.25, 0.5), (-1.0, 0.0, 0.5)]
    body = '[[bands]]\nname = "b"\nband_hz = [10, 100]\n'
    listed = load(f'[array]\nid = "a"\npositions_m = {[list(row) for row in rows]}\n{body}')
    csv = "\ufeffx_m, y_m, z_m\r\n" + "".join(f"{x},{y}, {z}\r\n" for x, y, z in rows) + "\r\n"
    (tmp_path / "array.csv").write_text(csv, encoding="utf-8", newline="")
    filed = load(f'[array]\nid = "a"\npositions_file = "array.csv"\n{body}')
    assert listed.array.positions_m == filed.array.positions_m == tuple(rows)
    assert filed.array.spacing_m is None


@pytest.mark.parametrize(
    ("channels", "expected"),
    [
        ('"0:48:2"', range(0, 48, 2)),
        ('":"', range(48)),
        ('"40:"', range(40, 48)),
        ("[5, 3, 9]", (5, 3, 9)),
        ('":4"', range(4)),
    ],
)
def test_channels_of_a_band_are_a_slice_or_a_list(load, channels, expected):
    assert load(LEAST + f"channels = {channels}\n").bands[0].channels == tuple(expected)


def test_calibration_takes_one_value_or_one_for_each_channel(load):
    calibration = load(LEAST + f"[calibration]\ngain_db = {list(range(48))}\nfull_scale_v = 5\n").calibration
    assert calibration.gain_db == tuple(float(i) for i in range(48))
    assert calibration.full_scale_v == (5.0,) * 48
    assert not calibration.given, "a sensitivity is assumed"


def test_water_may_be_measured(load):
    water = load(LEAST + "[water]\ntemperature_c = 10\nsalinity = 35\n").water
    assert water.sound_speed_m_s == pytest.approx(1489.82, abs=0.03)  # TEOS-10, see tests/reference
    assert "TEOS-10" in water.source


def test_own_weights_are_kept_in_band_order(load):
    settings = load(LEAST + 'channels = "0:3"\nshading = [1, 2, 1.5]\n')
    assert settings.bands[0].shading == (1.0, 2.0, 1.5)


def test_bands_edge_may_be_045_of_the_rate_exactly(load):
    assert load(LEAST.replace("4000", "7200")).bands[0].band_hz[1] == 7200.0
    odd = LEAST.replace("4000", repr(0.45 * 16001.7)) + "[feed]\nrate_hz = 16001.7\n"
    assert load(odd).bands[0].band_hz[1] == pytest.approx(7200.765)


@pytest.mark.parametrize("table", RESERVED)
def test_reserved_tables_are_accepted_and_said_to_be_unused(load, table):
    warnings = load(LEAST + f"[{table}]\nanything = 1\n").warnings
    assert f"aft.toml: {table}: reserved, not used by this version" in warnings


@pytest.mark.parametrize(
    ("text", "warning"),
    [
        ("[water]\nsound_speed_m_s = 343\n", "aft.toml: water.sound_speed_m_s: 343 m/s is outside 1400-1600"),
        ("[calibration]\ngain_db = 6\n", "aft.toml: calibration: not given in full; levels are NOT calibrated"),
        ('[serve]\nhost = "0.0.0.0"\n', 'aft.toml: serve.host: "0.0.0.0" may be reached from other hosts'),
        ('[feed]\nbind = "tcp://*:5510"\n', 'aft.toml: feed.bind: "tcp://*:5510" may be reached from other hosts'),
        ('place = "elsewhere"\n', "aft.toml: bands.main.place: 'elsewhere' on another host needs a tcp:// address"),
        ("frame = 1000\n", "aft.toml: bands[0].frame: 1000 is short for this array: P/N is 0.25"),
    ],
)
def test_what_is_allowed_but_hardly_meant_is_a_warning(load, text, warning):
    assert any(line.startswith(warning) for line in load(LEAST + text).warnings)


def test_loopback_addresses_and_full_calibration_warn_of_nothing(load):
    text = "[calibration]\nsensitivity_db = -190\ngain_db = 0\nfull_scale_v = 1\n[water]\nsound_speed_m_s = 1480\n"
    assert load(LEAST + text + '[serve]\nhost = "localhost"\n[feed]\nbind = "tcp://[::1]:*"\n').warnings == ()


@pytest.mark.parametrize(
    ("content", "line"),
    [
        (b"[array\nid = 1\n", "aft.toml: line 1, column 7: Expected ']' at the end of a table declaration; this is"),
        (b"a = 1\nb = \xff\n", "aft.toml: line 2: is not UTF-8 (byte 0xff); save it as UTF-8"),
        (b"a = " + b"[" * 5000, "aft.toml: cannot be read: brackets are nested too deep"),
        (b"a = " + b"9" * 5000, "aft.toml: Exceeds the limit (4300 digits) for integer string conversion"),
        (b"#" * (5 << 20), "aft.toml: is longer than 4194304 bytes; this is no settings or positions file"),
        (b'a = "', "aft.toml: end of document: Unterminated string; this is not TOML"),
    ],
)  # fmt: skip
def test_file_that_is_no_toml_is_one_clear_line(tmp_path, content, line):
    (tmp_path / "aft.toml").write_bytes(content)
    with pytest.raises(ConfigError) as caught:
        load_settings(tmp_path / "aft.toml")
    assert len(caught.value.problems) == 1
    assert caught.value.problems[0].startswith(line)


def test_file_that_cannot_be_read_is_one_clear_line(tmp_path):
    for path, why in ((tmp_path / "no.toml", "No such file"), (tmp_path, "Is a directory")):
        with pytest.raises(ConfigError) as caught:
            load_settings(path)
        assert len(caught.value.problems) == 1
        assert caught.value.problems[0].startswith(f"{path.name}: cannot be read: {why}")


def test_mark_of_utf8_and_windows_line_ends_do_no_harm(tmp_path):
    (tmp_path / "aft.toml").write_bytes(b"\xef\xbb\xbf" + LEAST.replace("\n", "\r\n").encode())
    assert load_settings(tmp_path / "aft.toml").array.id == "aft"


def test_empty_document_lacks_array_and_bands():
    with pytest.raises(ConfigError) as caught:
        parse_settings({})
    assert [line.split(": ")[1] for line in caught.value.problems] == ["array", "bands"]
