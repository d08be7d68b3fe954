"""What the whole service costs at 64 hydrophones, 16 kHz, 181 beams, live: processor time by process, and latency.

`python tests/bench/service_load.py [--seconds 60]`. Not part of the suite: its figures depend on the machine. The
beam stage is timed in the same minute, in this process, on the same settings.
"""

import argparse
import os
import sys
import tempfile
import threading
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "process"))

from rig import ArrayModel, Block, Service, block_message, encode_samples

ARRAY = ArrayModel(channels=64, spacing_m=0.375, rate_hz=16000.0)
BLOCK = 1024
BAND = ARRAY.band(band_hz=[50.0, 5900.0], frame=8192, beams=181, average_s=2.0)


def cpu_s(pid: int) -> float:
    """User and system seconds of a process so far."""
    fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def rss_mb(pid: int) -> float:
    return int(Path(f"/proc/{pid}/statm").read_text().split()[1]) * os.sysconf("SC_PAGE_SIZE") / 2**20


class Feed(threading.Thread):
    """Blocks at real time until told to end."""

    def __init__(self, feeder, data: bytes) -> None:
        super().__init__(daemon=True)
        self._feeder, self._data, self.done = feeder, data, threading.Event()

    def run(self) -> None:
        begun, number = time.monotonic(), 0
        while not self.done.is_set():
            block = Block(number * BLOCK, BLOCK, 10**18 + number * 64_000_000, self._data)
            self._feeder.send(block_message(ARRAY, block, "a", type="i2"))
            number += 1
            self.done.wait(max(0.0, begun + number * BLOCK / ARRAY.rate_hz - time.monotonic()))


def stage_s(config: Path, hops: int = 60) -> float:
    """Median processor seconds of one hop of the beam stage, transform to averaged power and map in dB."""
    from threadpoolctl import threadpool_limits

    from soundrose.beam.stage import BandStage
    from soundrose.feed.hop import Hop
    from soundrose.settings import load_settings

    settings = load_settings(config)
    stage, times = BandStage(settings, settings.bands[0]), []
    samples = np.random.default_rng(0).standard_normal((64, 4096), dtype=np.float32)
    bad, clipped = np.zeros(64, np.bool_), np.zeros(64, np.int32)
    with threadpool_limits(1):
        for number in range(hops):
            hop = Hop("a", 0, number * 4096, np.array([[number * 4096, 0]], np.int64), samples, bad, clipped)
            begun = time.thread_time()
            stage.push(hop)
            times.append(time.thread_time() - begun)
    return float(np.median(times[10:]))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seconds", type=float, default=60.0)
    seconds = parser.parse_args().seconds
    noise = np.random.default_rng(11).standard_normal((64, BLOCK)) * 0.01
    data = encode_samples(noise, "i2", "channel")
    with tempfile.TemporaryDirectory() as folder:
        settings = ARRAY.settings(BAND, overload="drop")
        with (
            Service(settings, Path(folder)) as service,
            service.feeder(queue=64) as feeder,
            service.listener("status") as listener,
        ):
            feed = Feed(feeder, data)
            feed.start()
            listener.wait_status("maps", lambda s: s["bands"]["main"]["maps"] > 20)
            pids = {p["name"]: p["pid"] for p in listener.of("status")[-1].header["processes"]}
            pids["run"] = service.process.pid
            before, begun = {name: cpu_s(pid) for name, pid in pids.items()}, time.monotonic()
            stage = stage_s(service.config)
            feed.done.wait(max(0.0, seconds - (time.monotonic() - begun)))
            wall = time.monotonic() - begun
            used = {name: (cpu_s(pid) - before[name]) / wall for name, pid in pids.items()}
            band = listener.of("status")[-1].header["bands"]["main"]
            sizes = {name: rss_mb(pid) for name, pid in pids.items()}
            feed.done.set()
            feed.join()
    report(stage, used, sizes, band, wall)


def report(stage: float, used: dict[str, float], sizes: dict[str, float], band: dict, wall: float) -> None:
    maps = ARRAY.rate_hz / 4096
    for name, share in used.items():
        print(f"{name:<12}{share:8.3f} of a core{sizes[name]:9.0f} MB")
    counted = sum(share for name, share in used.items() if name != "contacts")
    allowed = stage * maps + 0.15
    print(f"in all, contacts not counted: {counted:.3f} of a core over {wall:.0f} s")
    print(f"beam stage {1000 * stage:.2f} ms a hop, {maps:.2f} hops a second: allowed {allowed:.3f}, and at most 0.3")
    print(f"latency p50 {band['latency_ms']['p50']} ms, p99 {band['latency_ms']['p99']} ms;", end=" ")
    print(f"allowed p99 {3000 * stage + 10:.1f} ms")
    print(f"dropped hops {band['dropped_hops']}, gaps {band['gaps']}, load {band['load']}")


if __name__ == "__main__":
    main()
