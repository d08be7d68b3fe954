"""Tool, not a test: time from the arrival of a sound at the feed socket to its pixel.

    python tests/bench/sound_to_pixel.py [--seconds 40]

The sea sends each block when its last sample is due and stamps it with the host's clock, so a map's `t_end` is the time
at which its last sample was sent. The page says on its canvas which map it has drawn; a look at the clock in the task
after that frame's callbacks, when the picture has been handed on, is taken for the time of the pixel. Both are of one
host, so there is one clock. Prints p50, p90, p99 and the most, ms, and the service's part of it.
"""

import argparse
import json
import os
import shutil
import sys
import tempfile
from pathlib import Path
from typing import Any

TESTS = Path(__file__).parents[1]
sys.path[:0] = [str(TESTS / "browser"), str(TESTS / "process")]

import numpy as np  # noqa: E402
from playwright.sync_api import sync_playwright  # noqa: E402
from screen import FLAGS  # noqa: E402
from sea import BLOCK_S, sea  # noqa: E402

WATCH = """() => { window.drawn = []; const now = () => performance.timeOrigin + performance.now();
    const canvas = document.getElementById('map');
    new MutationObserver(() => { const t = Number(canvas.dataset.t); const channel = new MessageChannel();
      channel.port1.onmessage = () => window.drawn.push([t, now()]); channel.port2.postMessage(0);
    }).observe(canvas, { attributeFilter: ['data-t'] }); }"""


def measure(seconds: float) -> dict[str, Any]:
    chromium = shutil.which("chromium")
    assert chromium, "chromium is missing. On Debian: apt-get install chromium"
    with tempfile.TemporaryDirectory() as place, sea(Path(place)) as (service, _), sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=chromium, args=FLAGS)
        page = browser.new_page(viewport={"width": 1920, "height": 1080})
        page.goto(service.http)
        page.wait_for_function("() => Number(document.getElementById('record').dataset.rows) > 4")
        page.evaluate(WATCH)
        page.wait_for_timeout(seconds * 1000)
        drawn = np.array(page.evaluate("window.drawn"))
        status = json.loads(service.get("/api/v1/status")[2])
        browser.close()
    delay = drawn[:, 1] - drawn[:, 0]
    p50, p90, p99 = np.percentile(delay, [50, 90, 99])
    return {
        "maps": len(delay), "maps_hz": round(len(delay) / seconds, 2),
        "sound_to_pixel_ms": {"p50": round(p50, 1), "p90": round(p90, 1), "p99": round(p99, 1),
                              "max": round(delay.max(), 1)},
        "service_ms": status["bands"]["main"]["latency_ms"], "block_ms": BLOCK_S * 1000,
        "machine_load": round(os.getloadavg()[0], 1),
    }  # fmt: skip


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seconds", type=float, default=40.0)
    print(json.dumps(measure(parser.parse_args().seconds), indent=1))
    return 0


if __name__ == "__main__":
    sys.exit(main())
