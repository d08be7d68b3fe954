"""Everything by keyboard; what is chosen is kept; single keys can be switched off."""

import re

import pytest
from rig import Service
from screen import Screen
from sea import Sea

KEYS = [
    "1",
    "2",
    "+",
    "-",
    "0",
    ",",
    ".",
    "↑",
    "↓",
    "←",
    "→",
    "M",
    "N",
    "H",
    "T",
    "R",
    "A",
    "J",
    "K",
    "U",
    "I",
    "P",
    "D",
    "C",
    "V",
    "F2",
    "?",
]


def pressed(screen: Screen, element: str) -> bool:
    return screen.page.get_attribute(f"#do-{element}", "aria-pressed") == "true"


def test_help_lists_every_key_and_the_cautions(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    screen.page.keyboard.press("?")
    screen.wait("document.getElementById('help').open")
    assert screen.page.eval_on_selector_all("#keys kbd", "all => all.map((k) => k.textContent)") == KEYS
    for words in ("Not a navigation or collision-avoidance aid", "50 to 3000 Hz, 50 to 900 Hz", "port from starboard"):
        assert words in screen.text("help-cautions")
        assert words in screen.text("cautions")
    screen.page.keyboard.press("Escape")
    screen.wait("!document.getElementById('help').open")


def test_the_pointer_moves_by_beam_and_bin(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    screen.point("map", 126, 900)
    screen.page.keyboard.press("h")
    screen.wait("document.querySelector('#pin').textContent === '· held'")
    angle = lambda: float(screen.under_pointer()["Cone angle"].split("°")[0])  # noqa: E731
    assert angle() == pytest.approx(126, abs=1.5)
    begin = angle()
    screen.page.keyboard.press("ArrowDown")
    one = angle() - begin
    assert 0.5 < one < 2  # a beam of 145 evenly in cosine, at 126 degrees
    screen.page.keyboard.press("Shift+ArrowUp")
    assert angle() == pytest.approx(begin - 9 * one, abs=1.5)
    hz = screen.under_pointer()["Frequency"]
    screen.page.keyboard.press("ArrowRight")
    assert screen.under_pointer()["Frequency"] != hz
    screen.page.keyboard.press("n")
    assert angle() == pytest.approx(126, abs=2)
    screen.page.keyboard.press("n")
    assert angle() == pytest.approx(64, abs=2)
    screen.page.keyboard.press("ArrowDown")
    screen.page.keyboard.press("m")  # the ship where its beam is narrowest
    assert angle() == pytest.approx(64, abs=2)
    assert float(screen.under_pointer()["Frequency"].split()[0]) > 1.1
    screen.page.keyboard.press("h")
    screen.wait("document.querySelector('#pin').textContent === ''")


def test_zoom_asks_for_the_part_shown_and_pans(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    whole = screen.plot("map")
    assert (whole.low, whole.high) == (50, 3000)
    screen.point("map", 90, 1000)
    screen.page.keyboard.press("+")
    screen.page.keyboard.press("+")
    screen.wait("Number(document.getElementById('map').dataset.high) < 2000")
    zoomed = screen.plot("map")
    assert zoomed.high - zoomed.low == pytest.approx((whole.high - whole.low) / 4, rel=0.01)
    assert zoomed.low < 1000 < zoomed.high
    screen.wait("document.getElementById('map-title').textContent.includes('bins of 3.91 Hz')")
    screen.page.keyboard.press(".")
    screen.wait("Number(document.getElementById('map').dataset.low) > arg", zoomed.low + 1)
    screen.page.keyboard.press("0")
    screen.wait("Number(document.getElementById('map').dataset.high) === 3000")
    assert pressed(screen, "zoom-all")


def test_bands_are_switched(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    screen.page.keyboard.press("2")
    screen.wait("Number(document.getElementById('map').dataset.high) === 900")
    screen.wait_live()
    assert pressed(screen, "band-low")
    assert not pressed(screen, "band-main")
    assert "of 24 hydrophones" in screen.text("map-title")


def test_level_limits_by_hand_and_back(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    plot = lambda: tuple(float(screen.page.get_attribute("#scale", f"data-{end}") or 0) for end in ("low", "high"))  # noqa: E731
    low, high = plot()
    for keys, want in (("Shift+K", (low + 5, high)), ("j", (low + 4, high)), ("Shift+U", (low + 4, high - 5))):
        screen.page.keyboard.press(keys)
        screen.wait("Number(document.getElementById('scale').dataset.low) === arg[0]"
                    " && Number(document.getElementById('scale').dataset.high) === arg[1]", list(want))  # fmt: skip
    assert not pressed(screen, "limit-auto")
    screen.page.keyboard.press("a")
    assert pressed(screen, "limit-auto")


def test_choices_are_kept_by_the_browser(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    for key in ("p", "p", "c", "t", "d", "r"):
        screen.page.keyboard.press(key)
    words = [screen.text(f"do-{name}") for name in ("time", "colours", "span", "dim", "part")]
    assert [re.sub(r"\s+\S+$", "", w) for w in words] == [
        "night",
        "viridis",
        "record 30 min",
        "dim 85 %",
        "range 1 of 4",
    ]
    screen.page.reload()
    screen.wait_live()
    assert [screen.text(f"do-{name}") for name in ("time", "colours", "span", "dim", "part")] == words


def test_single_keys_can_be_switched_off(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    screen.page.keyboard.press("F2")
    screen.page.keyboard.press("p")
    assert screen.text("do-time").startswith("day")
    screen.page.keyboard.press("F2")
    screen.page.keyboard.press("p")
    assert screen.text("do-time").startswith("dusk")


def test_every_button_is_reached_by_tab_and_large_enough(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    buttons = screen.page.eval_on_selector_all(
        "button[id^=do-]", "all => all.map((b) => [b.id, b.offsetHeight, b.offsetWidth])"
    )
    assert min(height for _, height, _ in buttons) >= 24
    assert min(width for _, _, width in buttons) >= 24
    reached = set()
    for _ in range(60):
        screen.page.keyboard.press("Tab")
        reached.add(screen.page.evaluate("document.activeElement.id"))
    assert {name for name, _, _ in buttons} <= reached
    assert {"map", "record"} <= reached
