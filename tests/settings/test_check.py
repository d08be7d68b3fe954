"""What `soundrose check` prints: the right figures, warnings, exit status; readable in 80 and 120 columns."""

import io
from pathlib import Path

import pytest
from rich.console import Console

from soundrose.array.limits import line_of
from soundrose.check import CAUTIONS, check_file, check_report, check_warnings
from soundrose.settings import load_settings, parse_settings

DEPLOY = Path(__file__).parents[2] / "deploy"


def printed(settings, width: int = 80) -> str:
    console = Console(file=io.StringIO(), width=width, color_system=None)
    console.print(check_report(settings), highlight=False)
    return console.file.getvalue()


def line_settings(band=None, **tables):
    raw = {
        "array": {"id": "aft", "hydrophones": 48, "spacing_m": 0.375},
        "calibration": {"sensitivity_db": -180.0, "gain_db": 20.0, "full_scale_v": 2.5},
        "water": {"sound_speed_m_s": 1500.0},
        "bands": [{"name": "main", "band_hz": [50.0, 4000.0], "beams": 241, "shading": "taylor"} | (band or {})],
    }
    return parse_settings(raw | tables)


def row(text: str, first: str) -> list[str]:
    """Cells of the one table row whose first cell is `first`."""
    found = [line.split() for line in text.splitlines() if line.split()[:1] == [first] and len(line.split()) > 2]
    assert len(found) == 1, f"{first!r} begins {len(found)} lines of\n{text}"
    return found[0]


@pytest.mark.parametrize("width", [80, 120])
@pytest.mark.parametrize("name", ["line.toml", "nested.toml"])
def test_report_fits_its_terminal_and_cuts_nothing_off(name, width):
    text = printed(load_settings(DEPLOY / name), width)
    assert max(len(line.rstrip()) for line in text.splitlines()) <= width
    assert "…" not in text


def test_figures_are_those_of_the_uniform_line():
    """48 hydrophones half a wavelength apart at 2 kHz, uniform: 2.1154 deg, 4.2403 deg steered to 30 deg, gain 16.81 dB
    both ways (see tests/reference); far field (48 x 0.375)^2 / 0.75 = 432 m."""
    text = printed(line_settings({"shading": "uniform", "band_hz": [50.0, 2000.0]}))
    assert row(text, "2000") == ["2000", "2.12", "4.24", "16.8", "16.8", "432"]
    assert row(text, "90") == ["90", "4000", "all"]
    assert row(text, "0,") == ["0,", "180", "2000", "all"]
    assert "11.75 ms, 0.046 of a frame" in text
    assert "P = 253 taps, P/N = 0.062" in text
    assert "3.906 Hz apart, noise bandwidth 5.859 Hz" in text
    assert "frame 256 ms, a new map each 128 ms" in text
    assert "highest side lobe -13.2 dB" in text
    assert "nothing above 2000 Hz" in text
    assert "pairs" in text


def test_widths_too_wide_for_a_bearing_stand_in_brackets():
    text = printed(line_settings({"band_hz": [20.0, 4000.0]}))
    assert row(text, "20")[1:3] == ["(all", "round)"]
    assert row(text, "58")[1].startswith("(")
    assert not row(text, "4000")[1].startswith("(")


def test_share_of_the_band_free_of_images_follows_the_onset():
    """At endfire 1500/(2 x 0.375) = 2000 Hz: (2000 - 50)/(4000 - 50) = 49 %."""
    assert row(printed(line_settings()), "0,") == ["0,", "180", "2000", "49", "%"]


def test_line_without_equal_spacing_has_no_onset_and_says_so():
    array = {"id": "a", "positions_m": [[x, 0, 0] for x in (5.0, 4.0, 1.0, -2.0, -5.0)]}
    text = printed(line_settings({"band_hz": [10, 200]}, array=array))
    assert "Alias onset: none by itself, the spacing is not equal" in text
    assert "general: the line is not mirror-symmetric about its middle" in text


def test_bands_that_leave_a_hole_are_told_apart():
    bands = [{"name": name, "band_hz": hz} for name, hz in (("a", [50, 400]), ("b", [300, 900]), ("c", [1000, 2000]))]
    assert "50-900 Hz, 1000-2000 Hz; nothing above 2000 Hz" in printed(line_settings(bands=bands))


def test_too_few_beams_are_told_with_the_number_that_would_do():
    (warning,) = check_warnings(line_settings({"beams": 90}))
    assert warning.startswith("band main: 90 beams are few: between two of them 2")
    beams = int(warning.split("; ")[1].split()[0])
    line = line_of(line_settings(), line_settings().bands[0])
    assert line.scalloping_db(4000.0, beams) <= 0.5 < line.scalloping_db(4000.0, beams - 1)
    assert check_warnings(line_settings({"beams": beams})) == ()
    assert len(check_warnings(line_settings({"beams": beams - 1}))) == 1


@pytest.mark.parametrize(
    ("band", "tables", "warning"),
    [
        ({"shading": "hann"}, {}, "band main: the shading gives hydrophones 0, 47 no weight"),
        (
            {"band_hz": [50.0, 400.0]},
            {"array": {"id": "a", "positions_m": [[x, 0.0, 2.0 * (x > 4)] for x in (6.0, 3.0, 0.0, -3.0, -6.0)]}},
            "band main: hydrophones are up to 1.6 m off the straight line, over 1/8 wavelength at 400 Hz",
        ),
        ({"beams": 4000, "kernel": "general"}, {}, "band main: the estimated load is "),
        ({}, {"zones": {}}, "settings: zones: reserved, not used by this version"),
    ],
)
def test_what_is_allowed_but_hardly_meant_is_warned_of(band, tables, warning):
    settings = line_settings(band, **tables)
    (found,) = check_warnings(settings)
    assert found.startswith(warning)
    assert "Warnings: 1" in printed(settings)


def test_excluded_hydrophones_are_listed_and_not_called_silent():
    settings = line_settings(array={"id": "aft", "hydrophones": 48, "spacing_m": 0.375, "exclude": list(range(1, 11))})
    text = printed(settings)
    assert "48, of which left out: 1, 2, 3, 4, 5, 6, 7, 8 and 2 more" in text
    assert "48 hydrophones, 38 with weight" in text
    assert not any("no weight" in warning for warning in check_warnings(settings))


def test_cautions_are_always_there():
    assert CAUTIONS.split(". ")[0] in " ".join(printed(line_settings()).split())


def test_right_file_prints_its_report_and_gives_0():
    out, errors = (Console(file=io.StringIO(), width=80) for _ in range(2))
    assert check_file(DEPLOY / "line.toml", out, errors) == 0
    assert out.file.getvalue().startswith("Array aft")
    assert errors.file.getvalue() == ""


def test_mistakes_are_whole_lines_on_standard_error_and_give_2(tmp_path, capsys):
    (tmp_path / "aft.toml").write_text("[array]\n[feed]\nbind = '[bold]x[/bold] " + "y" * 200 + "'\n", encoding="utf-8")
    out = Console(file=io.StringIO(), width=80)
    assert check_file(tmp_path / "aft.toml", out) == 2
    assert out.file.getvalue() == ""
    lines = capsys.readouterr().err.splitlines()
    assert len(lines) == 4
    assert all(line.startswith("aft.toml: ") for line in lines)
    assert "[bold]x[/bold]" in "".join(lines)
