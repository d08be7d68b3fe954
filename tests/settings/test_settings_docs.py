"""docs/settings.md says every key, with the default that is in force, and its example is a file that loads."""

import re
import tomllib
from pathlib import Path

import pytest

from soundrose.settings import RESERVED, TABLES, load_settings, parse_settings
from soundrose.settings_reader import Table
from soundrose.settings_types import DetectionSettings

DOCS = (Path(__file__).parents[2] / "docs" / "settings.md").read_text(encoding="utf-8")
LEAST = tomllib.loads(re.search(r"```toml\n(.*?)```", DOCS, re.DOTALL)[1])


def documented() -> dict[str, str]:
    """ "table.key" -> the default cell, from the tables of the page."""
    found: dict[str, str] = {}
    for part in DOCS.split("\n## ")[1:]:
        heading = re.match(r"`\[+([a-z]+)\]+`", part)
        for key, default in re.findall(r"^\| `([a-z_.]+)` \|([^|]*)\|", part, re.MULTILINE):
            if heading and not key.startswith(("uniform", "hann", "hamming", "chebyshev", "taylor")):
                found[key if "." in key else f"{heading[1]}.{key}"] = default.strip()
    return {key: default for key, default in found.items() if key not in ("bands.low", "bands.mid", "bands.high")}


@pytest.fixture
def known(monkeypatch) -> set[str]:
    """Keys that the reader asks for, of the least file and of the other ways to say where hydrophones and water are."""
    keys: set[str] = set()
    close = Table.close

    def note_and_close(table: Table) -> None:
        keys.update(f"{table.where.split('[')[0]}.{key}" for key in table.known if table.where)
        close(table)

    monkeypatch.setattr(Table, "close", note_and_close)
    parse_settings(LEAST | {"water": {"temperature_c": 8, "salinity": 35}})
    return keys


def test_every_key_is_documented_and_no_other(known):
    assert set(documented()) == known


def test_documented_defaults_are_in_force():
    settings = parse_settings(LEAST)
    parts = {
        "feed": settings.feed, "bands": settings.bands[0], "detection": settings.detection, "stream": settings.stream,
        "publish": settings.publish, "serve": settings.serve, "store": settings.store, "log": settings.log,
        "calibration": settings.calibration, "water": settings.water,
    }  # fmt: skip
    checked = 0
    for where, default in documented().items():
        table, key = where.split(".")
        if default.startswith("`") and "the band" not in default and hasattr(parts.get(table), key):
            written = tomllib.loads(f"value = {default.strip('`')}")["value"]
            in_force = getattr(parts[table], key)
            assert (in_force[0] if table == "calibration" else in_force) == written, where
            checked += 1
    assert checked >= 25


def test_defaults_called_all_publish_everything():
    band = parse_settings(LEAST).bands[0]
    assert (band.map_rate_hz, band.map_beams, band.map_bins, len(band.channels)) == (None, None, None, 48)
    assert DetectionSettings().integrate_s is None


def test_every_table_and_reserved_table_is_on_the_page():
    for name in (*TABLES, *RESERVED):
        assert re.search(rf"\[+{name}\]+", DOCS), name


def test_numbers_of_the_worked_example_are_those_of_its_file():
    settings = load_settings(Path(__file__).parents[2] / "deploy" / "nested.toml")
    for name, spacing in (("low", 1.5), ("mid", 0.75), ("high", 0.375)):
        band = settings.band(name)
        onset = settings.water.sound_speed_m_s / (2 * spacing)
        low, high = (f"{edge:g}" for edge in band.band_hz)
        assert f"| {onset:.0f} Hz | {low}-{high} | 5.2° |" in DOCS
    assert f"{settings.water.sound_speed_m_s:.1f} m/s" in DOCS
