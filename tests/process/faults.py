"""Every fault that a process of the service can have, under live load, and what must hold afterwards.

As a program: `python tests/process/faults.py` goes through every process with every fault (long form; a table).
"""

import itertools
import os
import signal
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).parent))

from rig import ArrayModel, Block, Feeder, Listener, Service, block_message, encode_samples

__all__ = ["BACK_S", "FAULTS", "Bench", "Outcome", "live_bench"]

ARRAY = ArrayModel(channels=64, spacing_m=0.375, rate_hz=16000.0)
BLOCK = 1024
BACK_S = 5.0  #: every process up again within this
FAULTS = ("kill", "stop", "spin")
#: loaded by every Python process of the service under test: SIGUSR1 makes its main thread go round for ever
SPINNER = """
import signal

def _spin(*_):
    while True:
        pass

signal.signal(signal.SIGUSR1, _spin)
"""


class LiveFeed(threading.Thread):
    """An array at work: blocks at their own pace, never waiting to see how they fare."""

    def __init__(self, feeder: Feeder) -> None:
        super().__init__(daemon=True)
        self._feeder, self._stop_asked = feeder, threading.Event()
        rng = np.random.default_rng(11)
        noise = rng.standard_normal((ARRAY.channels, BLOCK)) * 0.01
        self._data = encode_samples(noise, "i2", "channel")
        self.sent = 0
        self.broken: BaseException | None = None

    def run(self) -> None:
        begun = time.monotonic()
        try:
            while not self._stop_asked.is_set():
                first = self.sent * BLOCK
                t_ns = 10**18 + round(first * 1e9 / ARRAY.rate_hz)
                self._feeder.send(block_message(ARRAY, Block(first, BLOCK, t_ns, self._data), "a", type="i2"))
                self.sent += 1
                self._stop_asked.wait(max(0.0, begun + self.sent * BLOCK / ARRAY.rate_hz - time.monotonic()))
        except BaseException as error:
            self.broken = error

    def end(self) -> None:
        self._stop_asked.set()
        self.join(20)
        assert self.broken is None, self.broken


@dataclass
class Outcome:
    """What one fault did."""

    name: str
    fault: str
    back_s: float
    pid: int
    holes: dict[str, int] = field(default_factory=dict)


@dataclass
class Bench:
    """A service under live load, to be hurt."""

    service: Service
    listener: Listener
    feed: LiveFeed

    def names(self) -> list[str]:
        return [process["name"] for process in self.status()["processes"]]

    def status(self) -> dict[str, Any]:
        return self.listener.of("status")[-1].header

    def entry(self, name: str, status: dict[str, Any] | None = None) -> dict[str, Any]:
        return next(p for p in (status or self.status())["processes"] if p["name"] == name)

    def hurt(self, name: str, fault: str, deadline_s: float) -> Outcome:
        """Do it, and wait until every process is up again and samples arrive as maps of every band."""
        before = self.entry(name)
        counts = {topic: len(self.listener.of(topic)) for topic in self.listener.topics()}
        done = time.monotonic()
        _hurt(before["pid"], fault)

        def is_back(status: dict[str, Any]) -> bool:
            new = self.entry(name, status)["pid"] != before["pid"]
            return new and all(p["state"] == "up" for p in status["processes"])

        self.listener.wait_status(f"{name} back after {fault}", is_back, deadline_s)
        back_s = time.monotonic() - done
        for topic in [topic for topic in counts if topic.startswith("map/")]:
            self.listener.wait_count(topic, counts[topic] + 12, 30.0)
        outcome = Outcome(name, fault, back_s, self.entry(name)["pid"])
        outcome.holes = {topic: self.check_topic(topic, done) for topic in counts}
        return outcome

    def check_topic(self, topic: str, since: float) -> int:
        """Messages missing by `seq` since then; a map after missing samples or a new process must say `gap`."""
        messages = [m for m in self.listener.of(topic) if m.came > since - 2.0]
        missing = 0
        for a, b in itertools.pairwise(messages):
            same = a.header["start"] == b.header["start"]
            if same:
                missing += b.header["seq"] - a.header["seq"] - 1
            if topic.startswith("map/"):
                hop_ns = (b.header["t_end"] - b.header["t"]) // 2
                seen_all = same and b.header["seq"] == a.header["seq"] + 1
                broken = not same or (seen_all and b.header["t"] - a.header["t"] != hop_ns)
                assert b.header["limits"]["gap"] or not broken, f"{topic}: break before {b.header['t']} not flagged"
        return missing

    def counters_are_exact(self) -> None:
        """Every sample instant sent is accepted or counted as lost, and the count stands where the feed does."""
        self.feed.end()
        sent = self.feed.sent * BLOCK

        def settled(status: dict[str, Any]) -> bool:
            return status["next"] == sent

        status = self.listener.wait_status(f"all of {sent} samples judged", settled, 20.0)
        assert status["samples"] + status["lost_samples"] == sent, status
        assert status["trimmed_samples"] == 0
        assert sum(status["dropped"].values()) == 0, status["dropped"]


def _hurt(pid: int, fault: str) -> None:
    if fault == "kill":
        os.kill(pid, signal.SIGKILL)
    elif fault == "stop":
        os.kill(pid, signal.SIGSTOP)
    else:
        os.kill(pid, signal.SIGUSR1)


@contextmanager
def live_bench(folder: Path) -> Iterator[Bench]:
    """64 hydrophones at 16 kHz, a band of 181 beams and a small one, live, in `drop`."""
    spinner = folder / "spinner"
    spinner.mkdir()
    (spinner / "sitecustomize.py").write_text(SPINNER)
    bands = [
        ARRAY.band(name="main", band_hz=[50.0, 5900.0], frame=8192, beams=181, average_s=0.5),
        ARRAY.band(name="low", band_hz=[20.0, 500.0], frame=4096, beams=61, average_s=0.5),
    ]
    settings = ARRAY.settings(*bands, overload="drop")
    with (
        Service(settings, folder / "service", extra_path=spinner) as service,
        service.listener() as listener,
        service.feeder(queue=64) as feeder,
    ):
        feed = LiveFeed(feeder)
        feed.start()
        for band in bands:
            listener.wait_count(f"map/{band['name']}", 6)
        yield Bench(service, listener, feed)
        feed.end()


def main() -> None:
    with tempfile.TemporaryDirectory() as folder, live_bench(Path(folder)) as bench:
        print(f"{'process':<14}{'fault':<8}{'back after':>11}  missing by seq")
        names = bench.names()
        turns = [(name, fault) for fault in FAULTS for name in names]
        turns += [(name, "kill") for name in names for _ in range(3)]
        for name, fault in turns:
            outcome = bench.hurt(name, fault, 40.0)
            holes = {topic: count for topic, count in outcome.holes.items() if count}
            print(f"{name:<14}{fault:<8}{outcome.back_s:>9.2f} s  {holes or 'none'}", flush=True)
        bench.counters_are_exact()
        print("counters exact:", {k: bench.status()[k] for k in ("blocks", "samples", "gaps", "lost_samples")})
        print("restarts:", {p["name"]: p["restarts"] for p in bench.status()["processes"]}, "of", len(turns), "faults")
        print("bands:", bench.status()["bands"])


if __name__ == "__main__":
    main()
