"""What the display does when things go wrong: the feed stops, the web process is killed, samples are missing."""

import json
import os
import signal
from pathlib import Path

import numpy as np
from rig import Service, wait_until
from screen import Screen, contrast
from sea import Sea, sea


def test_a_stopped_feed_is_marked_and_covered_and_goes_on(watched: tuple[Service, Sea], opened) -> None:
    service, water = watched
    screen: Screen = opened(service.http)
    screen.wait_live()
    assert screen.text("fresh") == "picture is live"
    water.sending.clear()
    try:
        screen.wait("document.getElementById('fresh').textContent.startsWith('■ STALE')")
        assert screen.page.get_attribute("#fresh", "data-kind") == "caution"
        screen.wait("document.getElementById('feed').textContent === 'stalled'")
        screen.wait("document.getElementById('fresh').textContent.startsWith('✕ STALE 1')")
        assert screen.page.get_attribute("#fresh", "data-kind") == "wrong"
        assert "stale" in screen.under_pointer()["Level"]
        assert covered(screen, "map") > 0.02
        assert covered(screen, "spectrum") > 0.02
        fresh: Screen = opened(service.http)  # a page that comes now must not take the old picture for a new one
        fresh.wait("document.getElementById('fresh').textContent.startsWith('✕ STALE')")
        assert contrast(*fresh.colours("fresh")) > 4.5
    finally:
        water.sending.set()
    screen.wait("document.getElementById('fresh').textContent === 'picture is live'")
    screen.wait("Number(document.getElementById('record').dataset.holes) >= 1")


def test_it_comes_back_by_itself_when_serve_is_killed(tmp_path: Path, opened) -> None:
    """The record is kept by the page: the service's own is lost with the process, and the hole is shown."""
    with sea(tmp_path, serve={"host": "127.0.0.1", "port": 0}) as (service, _):
        screen: Screen = opened(service.http, quiet=True)
        screen.wait_live()
        screen.wait("Number(document.getElementById('record').dataset.rows) > 4")
        rows = int(screen.page.get_attribute("#record", "data-rows") or 0)
        status = json.loads(service.get("/api/v1/status")[2])
        (serve,) = [process["pid"] for process in status["processes"] if process["name"] == "serve"]
        os.kill(serve, signal.SIGKILL)
        screen.wait("document.getElementById('link').textContent.startsWith('lost (1006)')")
        screen.wait("document.getElementById('attention').textContent.includes('No link to the service')")
        wait_until("serve is back", lambda: _ready(service), 20)
        screen.wait("document.getElementById('link').textContent === 'open'")
        screen.wait("Number(document.getElementById('record').dataset.rows) > arg", rows)
        screen.wait_live()
        screen.wait("Number(document.getElementById('record').dataset.holes) >= 1")


def covered(screen: Screen, canvas: str) -> float:
    """Share of a plot that has the colour of what is wrong, as the mark in the top line has it."""
    plot = screen.plot(canvas)
    wrong = screen.page.evaluate("getComputedStyle(document.querySelector('#fresh')).backgroundColor")
    inside = screen.pixels()[
        round(plot.top) : round(plot.top + plot.height), round(plot.left) : round(plot.left + plot.width)
    ]
    return float(np.all(inside == [int(v) for v in wrong[4:-1].split(", ")], axis=2).mean())


def _ready(service: Service) -> bool:
    try:
        return service.get("/readyz")[0] == 200
    except OSError:
        return False


def test_without_calibration_it_says_so_where_levels_are(tmp_path: Path, opened) -> None:
    with sea(tmp_path, calibration=None) as (service, _):
        screen: Screen = opened(service.http)
        screen.wait("!document.getElementById('calibration').hidden")
        assert "uncalibrated" in screen.text("calibration")
        screen.wait("document.getElementById('attention').textContent.includes('Uncalibrated')")


def test_a_hidden_page_asks_for_no_maps(watched: tuple[Service, Sea], opened) -> None:
    screen: Screen = opened(watched[0].http)
    screen.wait_live()
    screen.page.evaluate("""() => { const own = WebSocket.prototype.send; window.sent = [];
        WebSocket.prototype.send = function (text) { window.sent.push(text); return own.call(this, text); };
        Object.defineProperty(document, 'hidden', { configurable: true, get: () => true });
        document.dispatchEvent(new Event('visibilitychange')); }""")
    screen.wait("window.sent.length === 1")
    assert json.loads(screen.page.evaluate("window.sent[0]"))["subscribe"] == ["health", "status"]
    screen.page.evaluate("""() => { delete document.hidden; document.dispatchEvent(new Event('visibilitychange')); }""")
    screen.wait("window.sent.length === 2")
    screen.wait_live()
