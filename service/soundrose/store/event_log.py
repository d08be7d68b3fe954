"""process: the event log's one writer: takes events at once, puts them on the disk about once a second."""

import fcntl
import json
import logging
import os
import sqlite3
import threading
import time
from collections import deque
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from soundrose.errors import StartError, UsageError
from soundrose.settings_types import StoreSettings
from soundrose.store.items import RESERVED, NewEvent
from soundrose.store.log_file import LogFile, open_log_file
from soundrose.store.schema import FILE_NAME, Connection, Damaged, connect_writer, is_damage

__all__ = ["COMMIT_S", "PAYLOAD_BYTES", "QUEUE_EVENTS", "Entry", "EventLog"]

COMMIT_S = 0.8  #: from the first event of a batch to its commit; with the disk's own time, within a second
QUEUE_EVENTS = 10_000  #: waiting at most, for a disk that is slow or full
QUEUE_BYTES = 16 * 2**20  #: of their payloads
PAYLOAD_BYTES = 64 * 2**10
_URGENT_S = 0.1  #: between two commits that were asked for at once
_RETRY_S = 1.0
_TIDY_S = 30.0  #: without events, retention is looked at this often
_log = logging.getLogger("soundrose")


@dataclass(slots=True, eq=False)
class Entry:
    """What is written together or not at all: events, values to keep, the command they answer.

    items : the events as readers get them, once they are on the disk; None until then.
    """

    events: tuple[tuple[str, int, int, str], ...]  # kind, t, recorded, payload as JSON
    keep: Mapping[str, str] = field(default_factory=dict)
    command: str | None = None
    items: list[dict[str, Any]] | None = None

    @property
    def size(self) -> int:
        return sum(len(event[3]) for event in self.events) + sum(map(len, self.keep.values()))


class EventLog:
    """Append to the log in `settings.path`; one at a time per folder, held by a lock on a file beside it.

    A thread of its own writes. While the disk is full or away the events wait in a bounded queue and writing is tried
    again; those that find no room are lost, counted in `facts`, and the log says so as soon as it can. Order of
    `append` is order of the log. What `append` has taken is on the disk within a second while the disk keeps up.

    Parameters
    ----------
    settings : `path`, a folder (made if it is not there), `retain_days`, `retain_mb`.
    now_ns : host time, ns since 1970 UTC; monotonic : seconds, for intervals and for the age of events.
    connect : opens the file; the standard library's SQLite unless a test needs another.

    Raises
    ------
    StartError : another process writes this log, or it is of a newer version, or no event log.
    """

    def __init__(
        self,
        settings: StoreSettings,
        *,
        queue_events: int = QUEUE_EVENTS,
        now_ns: Callable[[], int] = time.time_ns,
        monotonic: Callable[[], float] = time.monotonic,
        connect: Callable[[Path], Connection] = connect_writer,
    ) -> None:
        self._settings, self._most = settings, queue_events
        self._path = Path(settings.path) / FILE_NAME
        self._now_ns, self._monotonic, self._connect = now_ns, monotonic, connect
        self._clock = (now_ns(), monotonic())
        self._wake = threading.Condition()
        self._queue: deque[Entry] = deque()
        self._waiting = self._waiting_bytes = 0
        self._oldest: float | None = None  # when the first entry of the queue came
        self._urgent = self._closing = False
        self._lost = self._lost_unsaid = self._written = 0
        self._commit_s = 0.0
        self._problem: str | None = None
        self._committed_at = self._tidied_at = -1e9
        self._file: LogFile | None = None
        self._lock_fd = -1
        self._kept: dict[str, Any] = {}
        try:
            self._try_open()
        except StartError:
            self._unlock()
            raise
        self._thread = threading.Thread(target=self._write_on, name="event log", daemon=True)
        self._thread.start()

    def append(self, kind: str, t_ns: int, payload: Mapping[str, Any]) -> bool:
        """Take one event; False if there was no room and it is lost (and counted)."""
        return self.append_all([NewEvent(kind, t_ns, payload)]) is not None

    def append_all(
        self,
        events: Sequence[NewEvent],
        *,
        keep: Mapping[str, Any] | None = None,
        command: str | None = None,
        urgent: bool = False,
    ) -> Entry | None:
        """Take events that belong together; None if there was no room and they are lost (and counted).

        keep : values that `kept` gives back after a restart, written with the events or not at all.
        command : id of the command these events answer; `answered` knows it from then on.
        urgent : commit as soon as may be, for somebody waits.

        Raises
        ------
        UsageError : a payload with a key of the item's own, not JSON, or over 64 KiB; an integer of over 64 bits.
        """
        recorded = self._now_ns()
        rows = tuple((event.kind, _whole(event.t_ns), recorded, _payload_text(event.payload)) for event in events)
        entry = Entry(rows, {key: json.dumps(value) for key, value in (keep or {}).items()}, command)
        with self._wake:
            full = self._waiting + len(rows) > self._most or self._waiting_bytes + entry.size > QUEUE_BYTES
            if full or self._closing:
                self._lost += len(rows)
                self._lost_unsaid += len(rows)
                return None
            self._queue.append(entry)
            self._waiting += len(rows)
            self._waiting_bytes += entry.size
            if self._oldest is None:
                self._oldest = self._monotonic()
            self._urgent |= urgent
            self._wake.notify()
        return entry

    def kept(self, key: str) -> Any:
        """The value kept under `key` when the log was opened, or None."""
        return self._kept.get(key)

    def answered(self) -> dict[str, list[dict[str, Any]]]:
        """Id -> events of the commands that the log remembers, oldest first, as they were when it was opened."""
        return {} if self._file is None else dict(self._file.commands)

    def facts(self) -> dict[str, Any]:
        """Figures for status and metrics: events written and lost since this start, waiting, size, what is wrong."""
        file = self._file
        return {
            "written": self._written,
            "lost": self._lost,
            "waiting": self._waiting,
            "deleted": 0 if file is None else file.deleted,
            "bytes": 0 if file is None else file.size_bytes,
            "commit_s": round(self._commit_s, 4),
            "problem": self._problem,
        }

    def close(self, wait_s: float = 2.0) -> None:
        """Write what waits, end the thread, let go of the file."""
        with self._wake:
            self._closing = True
            self._wake.notify()
        self._thread.join(wait_s)
        if self._thread.is_alive():
            _log.error("event log: %d events were not written in time at the end", self._waiting)
            return
        if self._file is not None:
            self._file.close()
            self._file = None
        self._unlock()

    # ---- the writer's thread ----

    def _write_on(self) -> None:
        while True:
            batch = self._next_batch()
            if batch is None:
                return
            if self._ready_file() and self._write(batch):
                self._forget(batch)
            elif self._closing:
                return
            else:
                with self._wake:
                    self._wake.wait_for(lambda: self._closing, _RETRY_S)

    def _next_batch(self) -> list[Entry] | None:
        """Wait until a commit is due; what it takes (nothing: only tidying), or None at the end."""
        with self._wake:
            while not self._closing:
                now = self._monotonic()
                wait = self._due() - now
                if wait <= 0:
                    break
                self._wake.wait(wait)
            if self._closing and not self._queue:
                return None
            self._urgent = False
            return list(self._queue)

    def _due(self) -> float:
        if self._oldest is None:
            return self._tidied_at + (COMMIT_S if self._file is not None and self._file.untidy else _TIDY_S)
        if self._urgent:
            return self._committed_at + _URGENT_S
        if self._waiting > self._most // 2:
            return self._oldest
        return self._oldest + COMMIT_S

    def _forget(self, batch: list[Entry]) -> None:
        """The batch is on the disk."""
        with self._wake:
            for entry in batch:
                self._queue.popleft()
                self._waiting -= len(entry.events)
                self._waiting_bytes -= entry.size
                self._written += len(entry.events)
            self._oldest = self._monotonic() if self._queue else None

    def _ready_file(self) -> bool:
        """The file is open and is still the one that has the log's name."""
        if self._file is not None and not self._file.in_place():
            _log.error("event log: %s was moved or deleted while it was open; beginning it anew", self._path)
            self._file.close()
            self._file = None
        if self._file is None:
            try:
                self._try_open()
            except StartError as error:
                self._trouble(str(error))
        return self._file is not None

    def _try_open(self) -> None:
        """Open the file, or say why not. StartError is for what only the operator can mend."""
        try:
            self._path.parent.mkdir(parents=True, exist_ok=True)
            self._lock()
            self._file = open_log_file(self._path, self._connect, self._now_ns())
        except (OSError, sqlite3.Error, Damaged) as error:
            self._trouble(f"cannot be opened: {error}")
            return
        self._kept = self._file.kept
        self._problem = None

    def _lock(self) -> None:
        if self._lock_fd >= 0:
            return
        descriptor = os.open(f"{self._path}.lock", os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            os.close(descriptor)
            raise StartError(
                f"store.path: another service writes the event log {self._path}. End it, or choose another store.path."
            ) from None
        self._lock_fd = descriptor

    def _unlock(self) -> None:
        if self._lock_fd >= 0:
            os.close(self._lock_fd)
            self._lock_fd = -1

    def _write(self, batch: list[Entry]) -> bool:
        assert self._file is not None
        begun, lost = self._monotonic(), self._lost_unsaid
        written = False
        try:
            if batch or lost:
                items = self._file.write(batch, lost, self._now_ns())
                written = True
                self._committed_at = self._monotonic()
                self._commit_s = max(self._commit_s, self._committed_at - begun)
                for entry, made in zip(batch, items, strict=True):
                    entry.items = made
                self._lost_unsaid -= lost
            self._tidy()
            self._problem = None
        except sqlite3.Error as error:
            self._trouble(f"cannot be written: {error}")
            if is_damage(error):  # opening it again checks it, and sets it aside
                self._file.close()
                self._file = None
        return written or not batch

    def _tidy(self) -> None:
        """A step of retention; what fails here is tried again with the next."""
        assert self._file is not None
        self._tidied_at = self._monotonic()
        begun_ns, begun = self._clock
        now_ns = begun_ns + int((self._tidied_at - begun) * 1e9)  # a step of the host's clock ages no event
        oldest_ns = now_ns - int(self._settings.retain_days * 86_400e9)
        self._file.tidy(oldest_ns, self._settings.retain_mb * 10**6)

    def _trouble(self, text: str) -> None:
        if text != self._problem:
            _log.error("event log: %s %s; going on without it and trying again", self._path, text)
        self._problem = text


def _whole(t_ns: int) -> int:
    if isinstance(t_ns, bool) or not isinstance(t_ns, int) or not -(2**63) < t_ns < 2**63:
        raise UsageError(f"t_ns is {t_ns!r}; it must be a whole number of nanoseconds in 64 bits")
    return t_ns


def _payload_text(payload: Mapping[str, Any]) -> str:
    if clash := RESERVED & payload.keys():
        raise UsageError(f"payload has {', '.join(sorted(clash))}; these keys are the item's own")
    try:
        text = json.dumps(payload, ensure_ascii=False, separators=(",", ":"), allow_nan=False)
        size = len(text.encode())
    except (TypeError, ValueError) as error:
        raise UsageError(f"payload cannot be written as JSON: {error}") from error
    if size > PAYLOAD_BYTES:
        raise UsageError(f"payload has {size} bytes; it may have {PAYLOAD_BYTES}")
    return text
