"""Pictures, read back by another decoder: the loud beam is where it must be, and what must be said is said."""

import numpy as np
import png
import pytest
from matplotlib import colormaps
from web_rig import (
    BEAMS,
    BINS,
    DF_HZ,
    F0_HZ,
    LOUD_DEG,
    LOUD_HZ,
    Served,
    map_message,
    serving,
    small_settings,
)

from soundrose.product.reduce import ReducedMap
from soundrose.serve.palette import PALETTE, coloured
from soundrose.serve.pictures import Marks, Picture, draw_map, level_range, plot_size

LEFT, TOP = 66, 60  # of the map in the picture, pixels


def decoded(body: bytes) -> np.ndarray:
    """(rows, columns, 3) uint8 by a decoder that shares nothing with the encoder."""
    width, height, rows, info = png.Reader(bytes=body).read()
    assert (info["planes"], info["bitdepth"]) == (3, 8)
    return np.stack([np.frombuffer(bytes(row), np.uint8) for row in rows]).reshape(height, width, 3)


def picture(served: Served, **asked: object) -> np.ndarray:
    answer = served.get("/api/v1/map?format=png" + "".join(f"&{key}={value}" for key, value in asked.items()))
    assert (answer.status, answer.headers["content-type"]) == (200, "image/png")
    return decoded(answer.body)


def place(width: int, height: int, f_hz: float, cone_deg: float) -> tuple[int, int]:
    """(row, column): frequency linear across the bins, cone angle linear down from 0."""
    columns, rows = plot_size(width, height)
    low = F0_HZ - DF_HZ / 2
    return TOP + round(cone_deg / 180 * rows), LEFT + round((f_hz - low) / (DF_HZ * BINS) * columns)


@pytest.mark.parametrize(("width", "height"), [(1000, 620), (480, 320), (1400, 900), (801, 333)])
def test_loud_beam_is_at_its_frequency_and_angle(served: Served, width: int, height: int) -> None:
    pixels = picture(served, width=width, height=height, level_min=40, level_max=110)
    assert pixels.shape == (height, width, 3)
    row, column = place(width, height, LOUD_HZ, LOUD_DEG)
    np.testing.assert_array_equal(pixels[row, column], PALETTE[255])
    for f_hz, cone_deg in ((LOUD_HZ, LOUD_DEG - 12), (LOUD_HZ, LOUD_DEG + 12), (LOUD_HZ - 150, LOUD_DEG)):
        row, column = place(width, height, f_hz, cone_deg)
        apart = np.abs(PALETTE.astype(int) - pixels[row, column].astype(int)).sum(axis=1)
        level = 40 + 70 * int(np.argmin(apart)) / 255
        assert apart.min() == 0
        assert 44 < level < 80  # noise: 60 dB, 4 dB spread


def test_every_level_is_where_its_axes_say(served: Served) -> None:
    """Each pixel of an unmarked map has the colour of the bin it lies in and the beam nearest in cosine."""
    levels = np.random.default_rng(3).uniform(30, 90, (9, 40)).astype(np.float32)
    cone = np.degrees(np.arccos(np.linspace(1, -1, 9)))
    made = ReducedMap(levels, cone.tolist(), 100.0, 10.0)
    header = {"array": "aft", "band": "main", "span_s": 0.0, "unit": "dB"}
    body = draw_map(Picture(made, header, ("a", "b"), (), Marks(None, None), (30.0, 90.0), 600, 400))
    pixels, (columns, rows) = decoded(body), plot_size(600, 400)
    agree = 0
    for row in range(rows):
        beam = int(np.argmin(np.abs(np.cos(np.radians(cone)) - np.cos(np.pi * (row + 0.5) / rows))))
        bins = ((np.arange(columns) + 0.5) / columns * 40).astype(int)
        expected = PALETTE[np.rint((levels[beam, bins] - 30) / 60 * 255).astype(int)]
        agree += int((pixels[TOP + row, LEFT : LEFT + columns] == expected).all(axis=1).sum())
    assert agree > 0.97 * rows * columns  # the rest is the words "forward" and "aft"


def test_beamwidth_and_alias_onset_are_drawn_in() -> None:
    flat = np.full((BEAMS, BINS), 50.0, "<f4")
    made = ReducedMap(flat, map_message().header["cone_deg"], F0_HZ, DF_HZ)
    header = {"array": "aft", "band": "main", "span_s": 0.0, "unit": "dB"}

    def drawn(marks: Marks) -> np.ndarray:
        return decoded(draw_map(Picture(made, header, ("a", "b"), (), marks, (40.0, 60.0), 1000, 620)))

    bare = drawn(Marks(None, None))
    rows = plot_size(1000, 620)[1]
    half_width, onset = 100.0, 1600.0
    marked = np.argwhere((drawn(Marks(half_width, None)) != bare).any(axis=2))
    at_800 = marked[np.abs(marked[:, 1] - place(1000, 620, 800, 0)[1]) < 12][:, 0]
    for side in (-1, 1):
        expected = TOP + np.degrees(np.arccos(side * half_width / 800)) / 180 * rows
        assert np.abs(at_800 - expected).min() <= 2
    marked = np.argwhere((drawn(Marks(None, onset)) != bare).any(axis=2))
    for cone in (5, 40, 140):
        expected = place(1000, 620, onset / (1 + abs(np.cos(np.radians(cone)))), cone)
        assert np.abs(marked - expected).max(axis=1).min() <= 9  # as far as the next dash


@pytest.mark.parametrize(
    "limits",
    [{"gap": True}, {"clipped": 0.02}, {"masked": 0.1}, {"channels_used": 20}],
    ids=lambda limits: next(iter(limits)),
)
def test_what_must_be_known_is_said_under_the_map(limits: dict[str, object]) -> None:
    with serving() as served:
        served.latest.put(map_message())
        plain = picture(served)
        usual = map_message().header["limits"]
        served.latest.put(map_message(seq=8, limits={**usual, **limits}))
        told = picture(served)
    changed = np.argwhere((plain != told).any(axis=2))
    assert len(changed) > 100
    assert changed[:, 0].min() > TOP + plot_size(1000, 620)[1] + 40


def test_uncalibrated_is_said() -> None:
    found = []
    for calibrated in (True, False):
        with serving(small_settings(calibrated)) as served:
            served.latest.put(map_message())
            found.append(picture(served))
    assert (found[0] != found[1]).any(axis=2).sum() > 100


def test_scale_is_on_whole_five_decibels_and_wide_enough() -> None:
    levels = np.random.default_rng(0).normal(63, 0.1, (50, 50)).astype(np.float32)
    low, high = level_range(levels, None, None)
    assert (low, high) == (45.0, 65.0)
    assert level_range(levels, 0.0, 100.0) == (0.0, 100.0)
    low, high = level_range(np.full((3, 3), -300, np.float32), None, None)
    assert low < high
    assert level_range(levels, 80.0, None) == (80.0, 100.0)


def test_colours_are_the_published_ones_and_rise_in_lightness() -> None:
    """Against matplotlib's table of the same name; lightness L* after IEC 61966-2-1 and CIE 15."""
    published = np.array(colormaps["viridis"].colors)
    np.testing.assert_allclose(PALETTE / 255, published, rtol=0, atol=0.5 / 255 + 1e-9)
    linear = np.where(published <= 0.04045, published / 12.92, ((published + 0.055) / 1.055) ** 2.4)
    lightness = 116 * np.cbrt(linear @ [0.2126, 0.7152, 0.0722]) - 16
    assert (np.diff(lightness) > 0).all()


def test_levels_outside_the_scale_take_its_end_colours() -> None:
    found = coloured(np.array([-300, 0, 50, 100, 400], np.float32), 0.0, 100.0)
    np.testing.assert_array_equal(found, PALETTE[[0, 0, 128, 255, 255]])


def test_picture_says_its_header_too(served: Served) -> None:
    header = served.get("/api/v1/map?format=png&width=500").headers["soundrose-map"]
    assert '"band":"main"' in header
    assert "\\u00b5Pa\\u00b2/Hz" in header
