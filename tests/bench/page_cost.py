"""Tool, not a test: what the display costs: CPU of Chromium's processes, bytes over the socket, memory.

    python tests/bench/page_cost.py [--seconds 60] [--size 1920x1080]

A service with its sea (tests/browser/sea.py, 48 hydrophones, about 8 maps a second) is watched by one page without a
GPU. CPU is user and system time of all Chromium processes by /proc; bytes are those of the frames as they come.
Prints one JSON object; memory at the start, the middle and the end, after the record has been filled.
"""

import argparse
import json
import os
import shutil
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

TESTS = Path(__file__).parents[1]
sys.path[:0] = [str(TESTS / "browser"), str(TESTS / "process")]

from playwright.sync_api import sync_playwright  # noqa: E402
from screen import FLAGS  # noqa: E402
from sea import Array, sea  # noqa: E402

COUNT_BYTES = """() => { window.got = { bytes: 0, maps: 0 }; const own = window.WebSocket;
    window.WebSocket = class extends own { constructor(...a) { super(...a); this.addEventListener('message', (e) => {
      if (typeof e.data === 'string') window.got.bytes += e.data.length;
      else { window.got.bytes += e.data.byteLength; window.got.maps++; } }); } }; }"""


class FullBand(Array):
    """As at sea: 16 kHz, a map each 128 ms of 145 beams and 1011 bins."""

    def toml(self, **keys: Any) -> dict[str, Any]:
        return self.settings(self.band(band_hz=[50.0, 4000.0], frame=4096, beams=145, average_s=2.0), overload="drop")


def processes(folder: str) -> list[int]:
    """Processes of the Chromium whose user data lie in `folder`: the one that names it, and all below it."""
    parents = {}
    mine = set()
    for place in Path("/proc").glob("[0-9]*"):
        try:
            parents[int(place.name)] = int((place / "stat").read_text().rpartition(")")[2].split()[1])
            if f"--user-data-dir={folder}".encode() in (place / "cmdline").read_bytes():
                mine.add(int(place.name))
        except OSError:
            continue
    while more := {pid for pid, parent in parents.items() if parent in mine} - mine:
        mine |= more
    return sorted(mine)


def cpu_s(pids: list[int]) -> float:
    total = 0
    for pid in pids:
        try:
            fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
        except OSError:
            continue
        total += int(fields[11]) + int(fields[12])
    return total / os.sysconf("SC_CLK_TCK")


def memory_mb(pids: list[int]) -> float:
    """Proportional share of memory of all of them."""
    total = 0
    for pid in pids:
        try:
            lines = Path(f"/proc/{pid}/smaps_rollup").read_text().splitlines()
        except OSError:
            continue
        total += sum(int(line.split()[1]) for line in lines if line.startswith("Pss:"))
    return round(total / 1024, 1)


def measure(seconds: float, size: tuple[int, int]) -> dict[str, Any]:
    chromium = shutil.which("chromium")
    assert chromium, "chromium is missing. On Debian: apt-get install chromium"
    with (
        tempfile.TemporaryDirectory() as place,
        sea(Path(place) / "service", FullBand(rate_hz=16000.0)) as (service, _),
    ):
        profile = f"{place}/profile"
        with sync_playwright() as playwright:
            context = playwright.chromium.launch_persistent_context(
                profile,
                executable_path=chromium,
                args=[*FLAGS, "--enable-precise-memory-info"],
                viewport={"width": size[0], "height": size[1]},
            )
            page = context.new_page()
            page.add_init_script(f"({COUNT_BYTES})()")
            page.goto(service.http)
            page.wait_for_function("() => window.got.maps > 40")
            pids = processes(profile)
            got, began, used = page.evaluate("window.got"), time.monotonic(), cpu_s(pids)
            memory = [memory_mb(pids)]
            heap = [page.evaluate("performance.memory.usedJSHeapSize")]
            for _ in range(2):
                page.wait_for_timeout(seconds * 500)
                memory.append(memory_mb(pids))
                heap.append(page.evaluate("performance.memory.usedJSHeapSize"))
            spent, now = time.monotonic() - began, page.evaluate("window.got")
            cores = (cpu_s(pids) - used) / spent
            context.close()
    return {
        "size": list(size), "seconds": round(spent, 1), "cores": round(cores, 3),
        "maps_hz": round((now["maps"] - got["maps"]) / spent, 2),
        "kB_s": round((now["bytes"] - got["bytes"]) / spent / 1000, 1), "memory_mb": memory,
        "heap_mb": [round(h / 1e6, 1) for h in heap], "machine_load": round(os.getloadavg()[0], 1),
    }  # fmt: skip


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seconds", type=float, default=60.0)
    parser.add_argument("--size", default="1920x1080")
    arguments = parser.parse_args()
    width, height = (int(v) for v in arguments.size.split("x"))
    print(json.dumps(measure(arguments.seconds, (width, height)), indent=1))
    return 0


if __name__ == "__main__":
    sys.exit(main())
