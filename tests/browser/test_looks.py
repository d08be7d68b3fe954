"""Looks: both sizes without scrolling, contrast read from pixels, sizes of letters, and that nothing else is red."""

import colorsys
from collections.abc import Iterator

import numpy as np
import pytest
from playwright.sync_api import Browser, Page
from rig import Service
from screen import Screen, contrast, luminance
from sea import Sea

TIMES = ("day", "dusk", "night")
SIZES = [(1280, 800), (1920, 1080)]
#: texts of every kind there is
TEXTS = ("array", "utc", "fresh", "feed", "latency", "pointer", "unit", "strip-text", "attention li", "cautions",
         "do-time", "do-limit-auto", "map-title")  # fmt: skip


@pytest.fixture(scope="module", params=TIMES)
def looks(request: pytest.FixtureRequest, watched: tuple[Service, Sea], chromium: Browser) -> Iterator[Screen]:
    """A page in each palette; what a test changes it puts back."""
    screen = Screen(chromium, watched[0].http, choices={"time": request.param})
    screen.wait_live()
    screen.wait("document.getElementById('attention').textContent.includes('Hydrophone 17')")
    yield screen
    screen.page.context.close()
    assert screen.faults == []


@pytest.mark.parametrize("size", SIZES, ids=str)
def test_all_fits_without_scrolling(watched: tuple[Service, Sea], opened, size: tuple[int, int]) -> None:
    """At 0.8 m on the small screen letters leave little room for plots: there the page may be crowded, not larger."""
    screen: Screen = opened(watched[0].http, size=size, choices={"distanceM": 0.5})
    screen.wait_live()
    page = screen.page
    for distance in (0.5, 0.6, 0.8):
        assert page.inner_text("#do-distance").startswith(f"eye {distance}")
        assert page.evaluate("[document.documentElement.scrollWidth, document.body.scrollHeight]") == list(size)
        out = page.evaluate("""() => [...document.querySelectorAll('#controls button, canvas, #cautions, #strip-text')]
            .filter((e) => { const b = e.getBoundingClientRect();
              return b.bottom > innerHeight + 0.5 || b.right > innerWidth + 0.5 || b.height < 4; }).map((e) => e.id)""")
        assert out == [], distance
        if distance <= 0.6:
            screen.wait_live(1)
            assert screen.plot("map").height > 0.4 * size[1]
            assert clipped(page) == [], distance
        page.keyboard.press("v")


def clipped(page: Page) -> list[str]:
    """Elements whose words do not fit in them."""
    script = """() => [...document.querySelectorAll('#pointer, #pointer dd, footer, #controls button, #limits, #unit,'
        + ' #record-box figcaption, #map-box figcaption, #response-box figcaption, #spectrum-box figcaption')]
        .filter((e) => e.scrollWidth > e.clientWidth + 1 || e.scrollHeight > e.clientHeight + 1)
        .filter((e) => getComputedStyle(e).display !== 'inline').map((e) => e.textContent)"""
    found: list[str] = page.evaluate(script)
    return found


def test_contrast_of_all_texts_is_enough_and_not_too_much(looks: Screen) -> None:
    """MSC/Circ.982 5.6.3: over 3:1, 7:1 preferred, under 15:1; WCAG 2.2 AA: 4.5:1. Read from pixels: anti-aliasing
    lowers what thin letters reach, so 4.5:1 is asked of them and 6.5:1 of the palette's own pair."""
    picture = looks.pixels()
    for element in TEXTS:
        assert 4.5 < contrast(*looks.colours(element, picture)) < 15, element
    script = "['--text', '--page', '--plate'].map((n) => document.documentElement.style.getPropertyValue(n))"
    found = looks.page.evaluate(script)
    text, page, plate = (np.array([int(v[i : i + 2], 16) for i in (1, 3, 5)]) for v in found)
    assert 6.5 < contrast(text, page) < 15
    assert 6.5 < contrast(text, plate) < 15


def test_the_dimmer_leaves_letters_legible(looks: Screen) -> None:
    for _ in range(2):
        before = luminance(looks.pixels()[::4, ::4].reshape(-1, 3)).mean()
        looks.page.keyboard.press("d")
        looks.wait_live(1)
        picture = looks.pixels()
        assert luminance(picture[::4, ::4].reshape(-1, 3)).mean() < before
        assert contrast(*looks.colours("utc", picture)) > 4.5
        assert contrast(*looks.colours("attention li", picture)) > 4.5
    looks.page.keyboard.press("d")


def test_nothing_is_red_or_orange_while_nothing_is_wrong(looks: Screen) -> None:
    """Saturated hues from 340 to 40 degrees are kept for alerts; a caution's yellow lies at 50 to 60."""
    for _ in ("deep", "viridis", "grey"):
        strong = looks.pixels().reshape(-1, 3).astype(int)
        strong = strong[(strong.max(axis=1) > 60) & (np.ptp(strong, axis=1) > 0.5 * strong.max(axis=1))]
        packed = np.unique(strong @ [65536, 256, 1])
        hues = np.array([colorsys.rgb_to_hsv(c >> 16, (c >> 8) & 255, c & 255)[0] * 360 for c in packed.tolist()])
        assert not np.any((hues > 340) | (hues < 40)), packed[(hues > 340) | (hues < 40)][:5]
        looks.page.keyboard.press("c")
        looks.wait_live(1)


def test_focus_is_visible(looks: Screen) -> None:
    """WCAG 2.2: what has the focus shows it by a ring of at least 3:1 against what lies about it."""
    looks.page.keyboard.press("Tab")
    ring = looks.page.evaluate("""() => { const s = getComputedStyle(document.activeElement);
        return [s.outlineStyle, s.outlineWidth, s.outlineColor, getComputedStyle(document.body).backgroundColor]; }""")
    assert ring[:2] == ["solid", "3px"]
    colours = [np.array([int(v) for v in colour[4:-1].split(", ")]) for colour in ring[2:]]
    assert contrast(*colours) > 3


def test_night_is_dark_everywhere(watched: tuple[Service, Sea], opened) -> None:
    """No bright area: mean luminance under 4 %, no pixel above 0.42 (text of 8:1 on black is 0.35)."""
    screen: Screen = opened(watched[0].http, choices={"time": "night"})
    screen.wait_live()
    everything = luminance(screen.pixels().reshape(-1, 3))
    assert everything.mean() < 0.04
    assert everything.max() < 0.42
    screen.page.keyboard.press("?")
    screen.wait("document.getElementById('help').open")
    assert luminance(screen.pixels().reshape(-1, 3)).mean() < 0.04


def test_letters_are_as_large_as_the_distance_asks(watched: tuple[Service, Sea], opened) -> None:
    """Capitals 3.5 mm per metre at least (IEC 62288), body 1/200; a CSS pixel is 0.2646 mm, capitals 0.7 of a size."""
    screen: Screen = opened(watched[0].http, size=(1920, 1080), choices={"distanceM": 0.5})
    screen.wait_live()
    for distance in (0.5, 0.6, 0.8):
        sizes = screen.page.evaluate("""() => ['#cautions', 'body', '#utc'].map((s) =>
            parseFloat(getComputedStyle(document.querySelector(s)).fontSize))""")
        capitals = [0.7 * 0.2646 * size for size in sizes]
        assert capitals[0] >= 3.5 * distance
        assert capitals[1] == pytest.approx(5.0 * distance, rel=0.05)
        assert capitals[2] > capitals[1]
        least = screen.page.evaluate("""() => Math.min(...[...document.querySelectorAll('body *')]
            .filter((e) => e.textContent.trim()).map((e) => parseFloat(getComputedStyle(e).fontSize)))""")
        assert 0.7 * 0.2646 * least >= 3.5 * distance
        screen.page.keyboard.press("v")
