"""The terminal's picture: colours, places and labels."""

import matplotlib
import numpy as np
import pytest

from soundrose.errors import UsageError
from soundrose.scene.picture import MARGIN, colour, map_picture, scale_line

BEAMS, BINS = 61, 80
CONE = np.degrees(np.arccos(np.linspace(1, -1, BEAMS))).tolist()


def picture(level_db, **keys):
    return map_picture(level_db.astype(np.float32), CONE, 100.0, 10.0, **({"width": 80, "height": 23} | keys))


def cells(text):
    """{(line, column): (upper colour, lower colour)} of the half blocks."""
    found, plain = {}, text.plain
    for span in text.spans:
        if plain[span.start] == "▀":
            line = plain.count("\n", 0, span.start)
            column = span.start - (plain.rfind("\n", 0, span.start) + 1)
            found[line, column] = (span.style.color.name, span.style.bgcolor.name)
    return found


def test_colours_are_the_published_ones():
    """cividis as matplotlib ships it, to 6 of 255: between two anchors its blue has a bend."""
    published = matplotlib.colormaps["cividis"]
    for share in np.linspace(0, 1, 101):
        assert colour(float(share)) == pytest.approx([255 * v for v in published(float(share))[:3]], abs=6)


def test_colours_rise_evenly_in_lightness():
    """CIE L* of sRGB (IEC 61966-2-1), computed here: every step up, none more than 1.7 times the mean."""
    rgb = np.array([colour(v) for v in np.linspace(0, 1, 33)]) / 255
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    lightness = 116 * np.cbrt(linear @ [0.2126, 0.7152, 0.0722]) - 16
    steps = np.diff(lightness)
    assert steps.min() > 0
    assert steps.max() < 1.7 * steps.mean()
    assert colour(-5) == colour(0)
    assert colour(5) == colour(1)


def test_loud_spot_lies_at_its_frequency_and_cone_angle():
    levels = np.full((BEAMS, BINS), 40.0)
    beam, bin_i = 45, 62
    levels[beam, bin_i] = 90.0
    found = cells(picture(levels))
    bright = [place for place, pair in found.items() if pair[0] != pair[1]]
    ((line, column),) = bright
    assert column == MARGIN + beam
    # 80 bins in 40 rows: groups of 2; row r from below holds groups 2r and 2r + 1; the first line is the heading
    assert 20 - line == (bin_i // 2) // 2
    upper, lower = found[line, column]
    assert (upper > lower) == bool((bin_i // 2) % 2)


def test_axes_are_labelled_in_hertz_degrees_and_decibels():
    text = picture(np.full((BEAMS, BINS), 61.0)).plain
    lines = text.split("\n")
    assert lines[20].startswith(" 115 Hz ")  # bins 0 to 3: 100 to 130 Hz
    axis = lines[21]
    for tick in (0, 60, 90, 120, 180):
        middle = axis.index(f" {tick}°") + 1 + len(f"{tick}°") // 2
        assert middle == MARGIN + round((1 - np.cos(np.radians(tick))) / 2 * (BEAMS - 1))
    assert lines[22].split()[0] == "25"
    assert lines[22].endswith("65 dB re 1 µPa²/Hz")


def test_picture_keeps_within_its_size():
    for width, height in ((30, 6), (64, 11), (110, 30)):
        lines = picture(np.zeros((BEAMS, BINS)), width=width, height=height).plain.split("\n")
        assert len(lines) <= height
        assert max(len(line) for line in lines) <= width + 4  # the last label may stand over the edge


def test_no_room_is_said():
    with pytest.raises(UsageError, match="at least 30 x 6"):
        picture(np.zeros((BEAMS, BINS)), width=29)


def test_scale_goes_from_lowest_to_highest():
    line = scale_line(100.0, 80)
    names = [span.style.color.name for span in line.spans]
    assert (names[0], names[-1]) == ("#00224e", "#fee838")
