"""The display's own arithmetic against numpy, published tables and formulas; and its types."""

import json
import os
import subprocess
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import matplotlib
import msgpack
import numpy as np
import pytest
from playwright.sync_api import Browser
from rig import Service, tapered_weights
from screen import Screen, luminance
from sea import Sea

ROOT = Path(__file__).parents[2]
TYPESCRIPT = "5.9.3"


def ask(screen: Screen, module: str, expression: str, what: object = None) -> Any:
    """The value of an expression in which the module is `m` and the argument `arg`."""
    script = f"async (arg) => {{ const m = await import('/display/js/{module}.js'); return {expression}; }}"
    return screen.page.evaluate(script, what)


@pytest.fixture(scope="module")
def screen(watched: tuple[Service, Sea], chromium: Browser) -> Iterator[Screen]:
    """One page for all: nothing here changes it."""
    found = Screen(chromium, watched[0].http)
    yield found
    found.page.context.close()
    assert found.faults == []


def test_types_hold() -> None:
    """TypeScript reads the JSDoc types, strictly; its package is fetched once, pinned."""
    place = ROOT / "tests" / ".data" / "typescript"
    if not (place / "node_modules" / "typescript" / "bin" / "tsc").exists():
        subprocess.run(["npm", "install", "--silent", "--no-save", "--prefix", str(place), f"typescript@{TYPESCRIPT}"],
                       check=True, timeout=110, stdin=subprocess.DEVNULL, env={**os.environ, "CI": "1"})  # fmt: skip
    command = ["node", str(place / "node_modules/typescript/bin/tsc"), "-p", str(ROOT / "tests/browser/tsconfig.json")]
    done = subprocess.run(command, capture_output=True, text=True, timeout=110, check=False)
    assert done.returncode == 0, done.stdout


def test_viridis_is_the_published_table(screen: Screen) -> None:
    """matplotlib's table (CC0), rounded to 8 bits."""
    found = np.array(
        [ask(screen, "colourmaps", "[...Array(256).keys()].map((i) => m.colourOf('viridis', i / 255))")][0]
    )
    published = np.round(np.array(matplotlib.colormaps["viridis"].colors) * 255)
    assert np.abs(found - published).max() <= 1


def lightness(rgb: np.ndarray) -> np.ndarray:
    """CIE 1976 L* of (n, 3) sRGB."""
    y = luminance(rgb)
    return np.where(y > 216 / 24389, 116 * np.cbrt(y) - 16, y * 24389 / 27)


#: Machado, Oliveira, Fernandes 2009, severity 1.0, on linear light (memory of the published matrices; rows sum to 1)
BLIND = {
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritan": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}


def seen_as(rgb: np.ndarray, kind: str) -> np.ndarray:
    c = rgb / 255
    linear = np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4) @ np.array(BLIND[kind]).T
    linear = np.clip(linear, 0, 1)
    return 255 * np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)


@pytest.mark.parametrize("name", ["deep", "viridis", "grey"])
def test_colours_of_levels_rise_evenly_for_every_eye(screen: Screen, name: str) -> None:
    """Lightness rises throughout, each eighth by about the same, for normal eyes and the three deficient kinds."""
    colours = np.array(ask(screen, "colourmaps", f"[...Array(256).keys()].map((i) => m.colourOf('{name}', i / 255))"))
    for eyes in (None, *BLIND):
        seen = colours if eyes is None else seen_as(colours, eyes)
        steps = np.diff(lightness(seen)[np.linspace(0, 255, 9).round().astype(int)])
        assert steps.min() > 0, eyes
        assert steps.max() / steps.min() < (2.5 if name == "viridis" else 1.8), eyes


def test_deep_is_a_straight_line_in_oklab(screen: Screen) -> None:
    """Back from the rounded colours by the inverse of the published matrices."""
    colours = (
        np.array(ask(screen, "colourmaps", "[...Array(256).keys()].map((i) => m.colourOf('deep', i / 255))")) / 255
    )
    linear = np.where(colours <= 0.04045, colours / 12.92, ((colours + 0.055) / 1.055) ** 2.4)
    to_lms = np.array([[0.4122214708, 0.5363325363, 0.0514459929], [0.2119034982, 0.6806995451, 0.1073969566],
                       [0.0883024619, 0.2817188376, 0.6299787005]])  # fmt: skip
    to_lab = np.array([[0.2104542553, 0.7936177850, -0.0040720468], [1.9779984951, -2.4285922050, 0.4505937099],
                       [0.0259040371, 0.7827717662, -0.8086757660]])  # fmt: skip
    lab = np.cbrt(linear @ to_lms.T) @ to_lab.T
    inside = lab[16:]  # the darkest are outside of what a screen can show by a little, and clipped
    line = np.linspace([0.2, -0.005, -0.075], [0.93, -0.012, 0.1], 256)[16:]
    assert np.abs(inside - line).max() < 0.02


def test_pattern_and_width_are_those_of_the_line(screen: Screen) -> None:
    x = (15.5 - np.arange(32)) * 0.5
    weights = tapered_weights(32)
    cos = np.linspace(1, -1, 97)
    line = {"x": x.tolist(), "weights": weights.tolist(), "soundSpeed": 1500.0, "halfPower": 0}
    found = ask(screen, "beams", """(() => { const line = { ...arg.line, x: Float64Array.from(arg.line.x),
        weights: Float64Array.from(arg.line.weights) }; const into = new Float32Array(arg.cos.length);
        m.patternLevels(line, Float64Array.from(arg.cos), 1000, 0.4, into); return [...into]; })()""",
        {"line": line, "cos": cos.tolist()})  # fmt: skip
    want = 20 * np.log10(np.abs(np.exp(2j * np.pi * 1000 / 1500 * np.outer(0.4 - cos, x)) @ weights))
    strong = want > -80
    assert strong.sum() > 40
    np.testing.assert_allclose(np.array(found)[strong], want[strong], atol=0.01)


@pytest.mark.parametrize(
    "value",
    [None, True, False, 0, 127, 128, -1, -32, -33, 255, 256, 65535, 65536, 2**32, -(2**31), 2**53, -(2**40), 1.5, "",
     "µPa²", "x" * 300, "y" * 70000, [1, [2, 3]], {"a": {"b": [None]}}, list(range(40)),
     {f"k{i}": i for i in range(40)}],
    ids=lambda v: str(v)[:12],
)  # fmt: skip
def test_msgpack_is_read_as_python_writes_it(screen: Screen, value: object) -> None:
    packed = list(msgpack.packb(value))
    assert ask(screen, "msgpack", "m.decode(Uint8Array.from(arg))", packed) == value


def test_msgpack_that_ends_too_soon_is_an_error(screen: Screen) -> None:
    for value in ("long enough", [1, 2, 3], {"k": 2.5}, b"bytes"):
        whole = msgpack.packb(value)
        script = """arg.map((_, cut) => { try { m.decode(Uint8Array.from(arg.slice(0, cut))); return 'read'; }
            catch (e) { return e.name; } })"""
        assert set(ask(screen, "msgpack", script, list(whole))) == {"RangeError"}


def test_waits_grow_are_bounded_and_spread(screen: Screen) -> None:
    for code, least in ((1006, 0.5), (1001, 0.5), (1012, 0.5), (1013, 2), (1008, 10)):
        first = [ask(screen, "link", f"m.waitBefore(0, {code}, {r})") for r in (0, 1)]
        assert first == [least / 2, least]
        later = ask(screen, "link", f"[...Array(20).keys()].map((n) => m.waitBefore(n, {code}, 1))")
        assert later == sorted(later)
        assert later[-1] == 15


def test_limits_move_slowly_and_in_whole_decibels(screen: Screen) -> None:
    """A loud minute after a quiet one: nothing jumps, and after three time constants it has arrived."""
    found = ask(screen, "levels", """(() => { const slow = new m.SlowLimits(); const seen = [];
        for (let t = 0; t < 200; t++) { slow.take(t < 60 ? { low: 50, high: 90 } : { low: 60, high: 110 }, t * 1000);
          seen.push([slow.shown.low, slow.shown.high]); } return seen; })()""")  # fmt: skip
    levels = np.array(found)
    assert (levels[:60] == [50, 90]).all()
    assert np.abs(np.diff(levels, axis=0)).max() <= 3
    assert np.abs(levels[-1] - [60, 110]).max() <= 2
    assert (levels == levels.round()).all()


def test_age_is_of_the_data_not_of_messages(screen: Screen) -> None:
    found = ask(screen, "freshness", """(() => { const age = new m.Age(); const seen = [age.state(0)];
        age.take(1000, 10); seen.push(age.state(11)); age.take(1000, 13); seen.push(age.state(13), age.state(21));
        age.take(2000, 22); seen.push(age.state(23)); const late = new m.Age(); late.take(5, 100, 63);
        seen.push(late.state(100), late.seconds(100)); return seen; })()""")  # fmt: skip
    assert found == ["none", "fresh", "stale", "covered", "fresh", "covered", 63]


def test_choices_that_make_no_sense_are_not_taken(screen: Screen) -> None:
    for stored in (
        "",
        "no json",
        "[]",
        "null",
        json.dumps({"time": "noon", "dim": 9, "spanS": 1, "low": 90, "high": 80}),
    ):
        found = ask(screen, "choices", "m.readChoices({ getItem: () => arg })", stored)
        assert (found["time"], found["dim"], found["spanS"], found["auto"], found["colours"]) == (
            "day",
            0,
            900,
            True,
            "deep",
        )


def test_holes_and_time_that_goes_back_in_the_pages_record(screen: Screen) -> None:
    found = ask(screen, "record", """(() => { const store = new m.RecordStore();
        const rows = (t, holes) => ({ tMs: Float64Array.from(t), cos: Float64Array.from([1, -1]), holes, next: "",
          levelDb: new Float32Array(2 * t.length), newestAgeS: 0, rangesHz: [], rangeHz: null });
        const seen = []; const look = () => seen.push([store.rows, store.holes.map((h) => h.why)]);
        store.take(rows([500, 1000], [{ tMs: 0, tEndMs: 0, why: "began" }])); look();
        store.take(rows([3000], [{ tMs: 1000, tEndMs: 2500, why: "gap" }])); look();
        store.take(rows([9000, 9500], [{ tMs: 8000, tEndMs: 8000, why: "began" }])); look();
        store.take(rows([100], [])); look(); return seen; })()""")  # fmt: skip
    assert found == [[2, []], [3, ["gap"]], [5, ["gap", "service restarted"]], [1, []]]
