"""An event log in a folder of its own, and waiting for what its thread does."""

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from soundrose.settings_types import StoreSettings
from soundrose.store.event_log import EventLog
from soundrose.store.event_reader import EventReader

DEADLINE_S = 20.0


@contextmanager
def opened(folder: Path, **more: Any) -> Iterator[EventLog]:
    limits = {key: more.pop(key) for key in ("retain_days", "retain_mb") if key in more}
    log = EventLog(StoreSettings(str(folder), **limits), **more)
    try:
        yield log
    finally:
        log.close()


def wait_for(condition: Callable[[], Any], what: str) -> Any:
    """The condition's value once it is true; it depends on another thread or process."""
    until, pause = time.monotonic() + DEADLINE_S, threading.Event()
    while not (value := condition()):
        assert time.monotonic() < until, f"not within {DEADLINE_S} s: {what}"
        pause.wait(0.005)
    return value


def flush(log: EventLog) -> None:
    """All that was appended is on the disk, and a step of retention has been done."""
    entry = log.append_all([], urgent=True)
    assert entry is not None
    wait_for(lambda: entry.items is not None and log.facts()["waiting"] == 0, "the log is written")


def everything(folder: Path, kinds: list[str] | None = None, page: int = 1000) -> list[dict[str, Any]]:
    """Every event, page by page from the beginning."""
    reader, place, items = EventReader(folder), None, []
    try:
        while True:
            got, place = reader.since(place, kinds, page)
            items += got
            if not got:
                return items
    finally:
        reader.close()
