"""SIGKILL to every process of the service at once, at a random moment, again and again, on one store.

As a program: `python tests/process/kill_everything.py [TIMES] [SEED]`. After each kill the log must open and pass
SQLite's own check; at the end every note that was answered must be there, once and in order.
"""

import json
import os
import random
import signal
import sqlite3
import sys
import tempfile
import threading
import time
import urllib.error
import urllib.request
from pathlib import Path
from typing import Any

from rig import ArrayModel, Service

__all__ = ["kill_again_and_again"]

ARRAY = ArrayModel(channels=8)


class Writer(threading.Thread):
    """Notes as fast as they are answered; keeps the texts of those that were."""

    def __init__(self, http: str, name: str) -> None:
        super().__init__(daemon=True)
        self._http, self._name = http, name
        self.asked: list[str] = []
        self.answered: list[str] = []

    def run(self) -> None:
        number = 0
        while True:
            text = f"{self._name} {number}"
            self.asked.append(text)
            body = json.dumps({"by": "watch", "note": text}).encode()
            request = urllib.request.Request(
                f"{self._http}/api/v1/notes", body, {"Content-Type": "application/json"}, method="POST"
            )
            try:
                with urllib.request.urlopen(request, timeout=5) as answer:
                    if answer.status == 201:
                        self.answered.append(text)
            except (OSError, urllib.error.URLError):
                return
            number += 1


def events(service: Service) -> list[dict[str, Any]]:
    """The whole log, page by page."""
    found, since = [], ""
    while True:
        query = f"?limit=1000{since}"
        code, _, body = service.get(f"/api/v1/events{query}")
        assert code == 200, body
        page = json.loads(body)
        if not page["items"]:
            return found
        found += page["items"]
        since = f"&since={page['next']}"


def check_file(store: Path) -> None:
    """The log opens without the service, and is whole."""
    for path in store.glob("*.sqlite*"):
        if path.name.endswith(("-wal", "-shm")):
            continue
        with sqlite3.connect(path) as log:
            assert log.execute("PRAGMA integrity_check").fetchone() == ("ok",), path
        log.close()


def kill_again_and_again(folder: Path, times: int, seed: int) -> dict[str, int]:
    """Do it `times` times; AssertionError for the first thing that is not as promised."""
    rng = random.Random(seed)
    settings = ARRAY.settings(ARRAY.band(beams=17), store=str(folder / "store"))
    answered: list[str] = []
    asked: set[str] = set()
    for turn in range(times):
        service = Service(settings, folder / "service")
        writer = Writer(service.http, f"turn {turn}")
        writer.start()
        time.sleep(rng.uniform(0.02, 1.5))
        for pid in service.processes():
            try:
                os.kill(pid, signal.SIGKILL)
            except ProcessLookupError:
                continue
        writer.join(10)
        service.kill()
        answered += writer.answered
        asked.update(writer.asked)
        check_file(folder / "store")
        if times > 20 and turn % 10 == 9:
            print(f"{turn + 1} kills, {len(answered)} notes answered", flush=True)
    with Service(settings, folder / "service") as service:
        log = events(service)
    notes = [event["note"] if "note" in event else event["text"] for event in log if event["kind"] == "note"]
    assert len(notes) == len(set(notes)), "a note stands twice"
    missing = set(answered) - set(notes)
    assert not missing, f"{len(missing)} of {len(answered)} answered notes are gone: {sorted(missing)[:5]}"
    assert set(notes) <= asked
    kept = [note for note in notes if note in set(answered)]
    assert kept == answered, "not in order"
    return {"kills": times, "answered": len(answered), "notes": len(notes), "events": len(log)}


if __name__ == "__main__":
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 300
    with tempfile.TemporaryDirectory() as place:
        print(kill_again_and_again(Path(place), count, int(sys.argv[2]) if len(sys.argv) > 2 else 1))
