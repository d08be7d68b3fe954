"""What is drawn, against the truth of the sea: where contacts stand, what the read-out says, what the record keeps."""

import re

import numpy as np
import pytest
from rig import Service
from screen import Plot, Screen, luminance
from sea import WAVES, Sea

SHIP, TONE = WAVES
AWAY_DEG = 170.0
BOTH = [(1280, 800), (1920, 1080)]


def number(text: str) -> float:
    found = re.search(r"-?\d+(\.\d+)?", text)
    assert found, text
    return float(found[0])


def brightness(screen: Screen, plot: Plot) -> np.ndarray:
    """(rows, columns) luminance of the pixels inside a plot; the pointer is in a corner of it."""
    inside = screen.pixels()[
        round(plot.top) + 1 : round(plot.top + plot.height) - 1,
        round(plot.left) + 1 : round(plot.left + plot.width) - 1,
    ]
    light = luminance(inside.reshape(-1, 3)).reshape(inside.shape[:2])
    cross = round(plot.y(AWAY_DEG) - plot.top)
    assert light[cross - 3 : cross + 2].max() > 0.35, "the cross is not where it was pointed; the sea is dark there"
    light[cross - 4 :] = 0
    return light


def away(screen: Screen) -> None:
    """The cross to where it covers nothing of interest."""
    screen.page.locator("#map").focus()
    plot = screen.plot("map")
    screen.point("map", AWAY_DEG, plot.low + 0.995 * (plot.high - plot.low))
    screen.wait("document.querySelector('#pointer').textContent.includes('2.98')")


@pytest.mark.parametrize("size", BOTH, ids=str)
def test_contacts_stand_where_they_are_in_map_and_record(
    watched: tuple[Service, Sea], opened, size: tuple[int, int]
) -> None:
    """The ship's ridge is a mean over rows of pixels weighted by light: sub-pixel, within a degree and a pixel."""
    screen: Screen = opened(watched[0].http, size=size, choices={"colours": "grey", "time": "dusk", "spanS": 300})
    screen.wait_live(10)
    away(screen)
    screen.wait_live(3)
    plot = screen.plot("map")
    light = brightness(screen, plot)
    rows = np.arange(len(light)) + plot.top + 1.5
    columns = slice(round(plot.x(1000) - plot.left), round(plot.x(1300) - plot.left))
    profile = light[:, columns].mean(axis=1)
    top = profile > 0.9 * profile.max()
    assert rows[top].mean() == pytest.approx(plot.y(SHIP.cone_deg), abs=plot.height / 145 + 1)
    near = light[:, round(plot.x(850) - plot.left) : round(plot.x(950) - plot.left)]
    below = near[round(plot.y(100) - plot.top) :]
    row, column = np.unravel_index(np.argmax(below), below.shape)
    bin_px = 3.90625 / (plot.high - plot.low) * plot.width
    assert row + round(plot.y(100)) + 1 == pytest.approx(plot.y(TONE.cone_deg), abs=0.05 * plot.height)
    assert column + round(plot.x(850)) + 1 == pytest.approx(plot.x(900), abs=2 * bin_px + 3)
    assert profile.max() > 3 * np.median(light[:, round(plot.x(2200) - plot.left) :])
    check_record(screen)


def check_record(screen: Screen) -> None:
    screen.wait("Number(document.getElementById('record').dataset.rows) > 12")
    plot = screen.plot("record")
    light = brightness(screen, plot)[:, -5:-2].mean(axis=1)
    rows = np.arange(len(light)) + plot.top + 1.5
    top = light > 0.95 * light.max()
    assert rows[top].mean() == pytest.approx(plot.y(SHIP.cone_deg), abs=0.03 * plot.height)


def test_the_read_out_gives_bearing_level_and_width_of_the_ship(watched: tuple[Service, Sea], opened) -> None:
    """Beamwidth by the closed form 1.44 wavelengths over the length for Hann shading (Harris 1978, Table I: 3 dB width
    1.44 bins) in cosine, over the sine of the angle.

    One bin of a 1 s average of noise is worth about ten independent ones: 1.4 dB. The mean power of fifty bins, every
    other of them independent, is within 0.8 dB with four standard deviations; noise on the beam adds 0.01 dB.
    """
    screen: Screen = opened(watched[0].http)
    screen.wait_live(12)
    screen.point("map", SHIP.cone_deg, 980.0)
    screen.page.mouse.down()
    screen.page.mouse.up()
    screen.wait("document.querySelector('#pin').textContent === '· held'")
    found = screen.under_pointer()
    assert number(found["Frequency"]) == pytest.approx(980, abs=4)
    assert number(found["Cone angle"]) == pytest.approx(SHIP.cone_deg, abs=0.5)
    starboard, port = map(float, re.findall(r"(\d{3}\.\d)°", found["Relative"]))
    assert starboard == pytest.approx(SHIP.cone_deg, abs=0.5)
    assert starboard + port == pytest.approx(360, abs=0.11)
    width = np.degrees(1.44 * (1500 / 980) / (48 * 0.375) / np.sin(np.radians(SHIP.cone_deg)))
    assert number(found["Beamwidth"]) == pytest.approx(width, rel=0.06)
    onset = 1500 / (0.375 * (1 + np.cos(np.radians(SHIP.cone_deg))))
    assert number(found["Images"]) == pytest.approx(onset / 1000, abs=0.02)
    assert number(found["Over mean"]) > 5
    assert "re 1 µPa²/Hz" in found["Level"]
    assert "no heading" in found["True"]
    power, seen = [], set()
    for _ in range(50):
        screen.page.keyboard.press("ArrowRight")
        found = screen.under_pointer()
        seen.add(found["Frequency"])
        power.append(10 ** (number(found["Level"]) / 10))
    assert len(seen) > 45
    assert 10 * np.log10(np.mean(power)) == pytest.approx(SHIP.level_db, abs=0.8)


def test_a_reload_loses_nothing_of_the_record(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    screen.wait("Number(document.getElementById('record').dataset.rows) > 8")
    before = int(screen.page.get_attribute("#record", "data-rows") or 0)
    screen.page.reload()
    screen.wait("Number(document.getElementById('record').dataset.rows) >= arg", before)


def test_hydrophones_are_told_apart_by_shape_and_text(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait("document.getElementById('strip-text').textContent.includes('17 D dead')")
    screen.wait("document.getElementById('attention').textContent.includes('Hydrophone 17 dead')")
    assert "47 of 48" in screen.text("used")
    assert screen.page.get_attribute("#strip", "data-used") == "47"


def test_every_axis_and_level_says_its_unit(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    assert screen.text("unit") == "plane-wave equivalent, dB re 1 µPa²/Hz"
    assert screen.text("utc").endswith(" UTC")
    script = """async () => { const said = new Set(); const own = CanvasRenderingContext2D.prototype.fillText;
        CanvasRenderingContext2D.prototype.fillText = function (text, ...rest) {
          said.add(`${this.canvas.id}: ${text}`); return own.call(this, text, ...rest); };
        window.dispatchEvent(new Event('resize')); document.dispatchEvent(new Event('visibilitychange'));
        await new Promise((done) => setTimeout(done, 1500)); return [...said]; }"""
    said = set(screen.page.evaluate(script))
    assert {"map: frequency, Hz", "map: cone angle", "spectrum: dB re 1 µPa²/Hz", "spectrum: frequency, Hz",
            "response: dB re 1 µPa²/Hz", "record: cone angle", "map: images beyond",
            "response: filled: one wave"} <= said  # fmt: skip
    assert any(text.startswith("record: data time, UTC") for text in said)
    assert any("starboard|port" in text for text in said)
