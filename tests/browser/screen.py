"""One page of the display: its texts, its canvases by what they say they show, its pixels."""

import io
import json
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from PIL import Image
from playwright.sync_api import Browser, ConsoleMessage, Page, Request

__all__ = ["FLAGS", "Plot", "Screen", "contrast", "luminance"]

FLAGS = [
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
]  # fmt: skip
COS_EDGE = 1.012  #: the bearing axis goes a little past both endfires
KEY = "soundrose.display.1"


@dataclass
class Plot:
    """Where data are drawn on the page, CSS pixels, and the range of the axis to the right."""

    left: float
    top: float
    width: float
    height: float
    low: float
    high: float

    def x(self, value: float) -> float:
        return self.left + (value - self.low) / (self.high - self.low) * self.width

    def y(self, cone_deg: float) -> float:
        return self.top + (COS_EDGE - math.cos(math.radians(cone_deg))) / (2 * COS_EDGE) * self.height


class Screen:
    """A page in a context of its own. faults : what must not happen, as it happened."""

    def __init__(
        self, browser: Browser, url: str, size: tuple[int, int] = (1280, 800), choices: dict[str, Any] | None = None,
        quiet: bool = False,
    ) -> None:  # fmt: skip
        self.url, self.quiet = url, quiet
        self.faults: list[str] = []
        context = browser.new_context(viewport={"width": size[0], "height": size[1]})
        self.page: Page = context.new_page()
        self.page.set_default_timeout(20_000)
        self.page.on("console", self._said)
        self.page.on("pageerror", lambda error: self.faults.append(f"error: {error}"))
        self.page.on("request", self._asked)
        if choices is not None:
            entry = json.dumps(json.dumps(choices))
            script = f"localStorage.getItem('{KEY}') ?? localStorage.setItem('{KEY}', {entry})"
            self.page.add_init_script(script)
        self.page.goto(url)

    def _said(self, message: ConsoleMessage) -> None:
        lost = "ERR_CONNECTION_REFUSED" in message.text or "WebSocket connection" in message.text
        if message.type in ("error", "warning") and not (self.quiet and lost):
            self.faults.append(f"{message.type}: {message.text}")

    def _asked(self, request: Request) -> None:
        if not request.url.startswith((self.url, self.url.replace("http", "ws"), "blob:", "data:")):
            self.faults.append(f"asked elsewhere: {request.url}")

    def wait(self, expression: str, what: object = None) -> None:
        """Until a JavaScript expression is true; `arg` in it is `what`."""
        self.page.wait_for_function(f"arg => {expression}", arg=what)

    def wait_live(self, maps: int = 2) -> None:
        """Until so many further maps have been drawn and the record has rows."""
        script = """([id, n]) => { const c = document.getElementById(id); window.seen ??= new Set();
            if (c.dataset.t) window.seen.add(c.dataset.t); return window.seen.size >= n; }"""
        self.page.evaluate("window.seen = undefined")
        self.page.wait_for_function(script, arg=["map", maps])
        self.wait("Number(document.getElementById('record').dataset.rows) > 0")

    def text(self, element: str) -> str:
        return self.page.inner_text(f"#{element}")

    def under_pointer(self) -> dict[str, str]:
        """Names and values of the read-out."""
        script = "l => [...l.querySelectorAll('dt')].map(d => [d.textContent, d.nextElementSibling.textContent])"
        return dict(self.page.eval_on_selector("#pointer", script))

    def plot(self, canvas: str) -> Plot:
        script = "c => ({ box: c.getBoundingClientRect().toJSON(), told: {...c.dataset} })"
        found = self.page.eval_on_selector(f"#{canvas}", script)
        told = {key: float(found["told"][key]) for key in ("left", "top", "width", "height", "low", "high")}
        return Plot(found["box"]["x"] + told["left"], found["box"]["y"] + told["top"], told["width"], told["height"],
                    told["low"], told["high"])  # fmt: skip

    def pixels(self) -> np.ndarray:
        """(height, width, 3) uint8 of the page."""
        return np.asarray(Image.open(io.BytesIO(self.page.screenshot())).convert("RGB"))

    def point(self, canvas: str, cone_deg: float, value: float) -> None:
        plot = self.plot(canvas)
        self.page.mouse.move(plot.x(value), plot.y(cone_deg))

    def colours(self, element: str, picture: np.ndarray | None = None) -> tuple[np.ndarray, np.ndarray]:
        """(text, ground) of an element (id, and what follows of a selector) as they are on the screen: its most common
        colour, and the one that differs most from it."""
        box = self.page.locator(f"#{element}").first.bounding_box()
        assert box is not None
        picture = self.pixels() if picture is None else picture
        part = picture[
            round(box["y"]) : round(box["y"] + box["height"]), round(box["x"]) : round(box["x"] + box["width"])
        ].reshape(-1, 3)
        ground = np.median(part, axis=0)
        light = luminance(part)
        base = luminance(ground[None])[0]
        letters = part[np.argmax(np.abs(np.log(light + 0.05) - np.log(base + 0.05)))]
        return letters, ground


def luminance(rgb: np.ndarray) -> np.ndarray:
    """(n,) relative luminance of (n, 3) sRGB, WCAG 2.2."""
    c = np.asarray(rgb, float) / 255
    linear = np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)
    return linear @ np.array([0.2126, 0.7152, 0.0722])


def contrast(one: np.ndarray, other: np.ndarray) -> float:
    """Contrast of two colours, WCAG 2.2."""
    low, high = sorted(float(luminance(np.asarray(c)[None])[0]) for c in (one, other))
    return (high + 0.05) / (low + 0.05)
