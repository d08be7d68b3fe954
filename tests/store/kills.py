"""Kill the log's writer at random moments, again and again: python tests/store/kills.py [KILLS] [SEED].

What was appended a second before the kill must be in the log, in order and without a hole; the file must be whole. A
disk whose commits took longer than the fifth of a second that is left of that second is given the difference.
"""

import os
import random
import shutil
import signal
import sqlite3
import subprocess
import sys
import tempfile
import threading
import time
from dataclasses import dataclass
from pathlib import Path

from store_rig import everything

from soundrose.settings_types import StoreSettings
from soundrose.store.event_log import EventLog
from soundrose.store.schema import FILE_NAME

TOGETHER = 5  #: logs written at the same time
DISK_S = 0.2  #: of the second, left for the commit itself


def write(folder: str, first: int) -> None:
    """The victim: appends numbers for ever, and says what it appends, before it does, with the time."""
    log = EventLog(StoreSettings(folder))
    n = first
    while True:
        sys.stdout.write(f"{n} {time.monotonic()} {log.facts()['commit_s']}\n")
        sys.stdout.flush()
        log.append("note", n, {"n": n, "text": "x" * (n % 400)})
        n += 1
        time.sleep(0.002)


@dataclass
class Killed:
    """What one kill left. last : the newest number in the log; due : the newest that had to be there."""

    last: int
    due: int
    appended: int


class Victim:
    """A writer of one log, killed and started again."""

    def __init__(self, folder: Path) -> None:
        self.folder, self.first = folder, 0

    def kill_once(self, after_s: float) -> Killed:
        process = subprocess.Popen(
            [sys.executable, __file__, "write", str(self.folder), str(self.first)], stdout=subprocess.PIPE, text=True,
            env={**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)},
        )  # fmt: skip
        lines: list[str] = []
        with process:
            assert process.stdout
            lines.append(process.stdout.readline())
            reader = threading.Thread(target=lambda: lines.extend(process.stdout))
            reader.start()
            time.sleep(after_s)
            killed_at = time.monotonic()
            process.send_signal(signal.SIGKILL)
            reader.join()
        said = [line.split() for line in lines if line.endswith("\n")]
        slow_s = max(0.0, max(float(commit_s) for _, _, commit_s in said) - DISK_S)
        due = [int(n) for n, at, _ in said if float(at) < killed_at - 1.0 - slow_s]
        last = self.look()
        self.first = last + 1
        return Killed(last, max(due, default=self.first - 1), len(said))

    def look(self) -> int:
        """The newest number in the log, after it was opened again; all before it are there."""
        EventLog(StoreSettings(str(self.folder))).close()
        numbers = [item["n"] for item in everything(self.folder, ["note"])]
        assert numbers == list(range(len(numbers))), "a hole or a repeat in the log"
        connection = sqlite3.connect(self.folder / FILE_NAME)
        try:
            assert connection.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
        finally:
            connection.close()
        assert not list(self.folder.glob("*damaged*")), "the log was taken for damaged"
        return len(numbers) - 1


def run(kills: int, seed: int) -> list[Killed]:
    """Kill so often in all, over TOGETHER logs at a time. AssertionError for anything lost."""
    chance = random.Random(seed)
    base = Path(tempfile.mkdtemp(prefix="kills-"))
    found: list[Killed] = []
    faults: list[BaseException] = []
    waits = [[chance.uniform(0.0, 3.0) for _ in range(i, kills, TOGETHER)] for i in range(TOGETHER)]

    def one(number: int) -> None:
        victim = Victim(base / str(number))
        try:
            for after_s in waits[number]:
                killed = victim.kill_once(after_s)
                assert killed.last >= killed.due, f"{killed.due} was due, and {killed.last} is the last"
                found.append(killed)
        except BaseException as fault:
            faults.append(fault)

    threads = [threading.Thread(target=one, args=(number,)) for number in range(TOGETHER)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    shutil.rmtree(base)
    if faults:
        raise faults[0]
    return found


if __name__ == "__main__":
    if sys.argv[1:2] == ["write"]:
        write(sys.argv[2], int(sys.argv[3]))
    results = run(int(sys.argv[1]) if len(sys.argv) > 1 else 300, int(sys.argv[2]) if len(sys.argv) > 2 else 1)
    appended, late = sum(killed.appended for killed in results), max(k.last - k.due for k in results)
    print(f"{len(results)} kills, {appended} events appended, none due was missing; at most {late} more than due")
