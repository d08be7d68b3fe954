"""process: the open event log: one transaction per batch, retention in small steps."""

import contextlib
import json
import logging
import os
import sqlite3
from collections.abc import Callable, Mapping, Sequence
from math import ceil
from pathlib import Path
from typing import Any, Protocol

from soundrose.store.cursors import Cursor
from soundrose.store.items import event_item
from soundrose.store.schema import (
    Connection,
    Damaged,
    check_file,
    drop_oldest_aside,
    is_damage,
    log_id,
    migrate,
    set_aside,
)

__all__ = ["COMMANDS", "LogFile", "open_log_file"]

COMMANDS = 1000  #: answers remembered, so that a command repeated is not done twice
_STEP_ROWS = 500  #: deleted at once, at least
_VACUUM_PAGES = 256  #: given back to the file system at once
_log = logging.getLogger("soundrose")


class _Entry(Protocol):
    @property
    def events(self) -> tuple[tuple[str, int, int, str], ...]: ...

    @property
    def keep(self) -> Mapping[str, str]: ...

    @property
    def command(self) -> str | None: ...


class LogFile:
    """What the writer does to the file; used from one thread at a time.

    kept : values kept by key.  commands : id -> events that answered it, of the newest COMMANDS.
    deleted : rows deleted by retention.  size_bytes : of the pages in use.  untidy : retention has more to delete.
    """

    def __init__(self, connection: Connection, path: Path) -> None:
        self._connection, self._path = connection, path
        self._log = log_id(connection)
        found = os.stat(path)
        self._identity = (found.st_dev, found.st_ino)
        self.kept = {key: json.loads(text) for key, text in self._all("SELECT key, value FROM state")}
        self.commands = {
            name: json.loads(text) for name, text in self._all("SELECT id, answer FROM command ORDER BY number")
        }
        self.deleted, self.untidy, self._fresh = 0, False, 0
        self._floor = int(self._one("SELECT value FROM meta WHERE key = 'floor'"))
        self._page_bytes = int(self._one("PRAGMA page_size"))
        self.size_bytes = self._used_bytes()

    def in_place(self) -> bool:
        """The file that is open still has its name: it was not moved, deleted or replaced."""
        try:
            found = os.stat(self._path)
        except OSError:
            return False
        return (found.st_dev, found.st_ino) == self._identity

    @property
    def unused(self) -> bool:
        """No event was ever written."""
        return self._newest() == 0

    def write(self, entries: Sequence[_Entry], lost: int, now_ns: int) -> list[list[dict[str, Any]]]:
        """Write all entries in one transaction; the items of each. lost : events to be told of as lost, if any."""
        with self._transaction():
            items = [self._entry(entry) for entry in entries]
            if lost:
                payload = {"what": "events-lost", "lost": lost, "why": "the log could not be written"}
                self._event("status", now_ns, now_ns, json.dumps(payload))
            self._connection.execute(
                "DELETE FROM command WHERE number <= (SELECT max(number) FROM command) - ?", (COMMANDS,)
            )
        self._fresh += sum(map(len, items))
        return items

    def say(self, payload: Mapping[str, Any], now_ns: int) -> None:
        """One `status` event of the log's own."""
        with self._transaction():
            self._event("status", now_ns, now_ns, json.dumps(payload))

    def tidy(self, oldest_ns: int, most_bytes: int) -> None:
        """Delete the oldest events if they were recorded before oldest_ns or the log uses over most_bytes: a step.

        A step may delete twice what came since the last, so that it keeps up with any rate.
        """
        step, self._fresh = max(_STEP_ROWS, 2 * self._fresh), 0
        self.size_bytes = self._used_bytes()
        last = max(self._last_by_age(step, oldest_ns), self._last_by_size(step, most_bytes))
        self.untidy = last > self._floor
        if self.untidy:
            with self._transaction():
                self._connection.execute("DELETE FROM event WHERE id <= ?", (last,))
                self._connection.execute("UPDATE meta SET value = ? WHERE key = 'floor'", (str(last),))
            self.deleted += last - self._floor
            self._floor = last
        self._connection.execute(f"PRAGMA incremental_vacuum({_VACUUM_PAGES})").fetchall()
        self.untidy |= self._free_pages() > _VACUUM_PAGES
        self.size_bytes = self._used_bytes()

    def _last_by_age(self, step: int, oldest_ns: int) -> int:
        """The last of the oldest `step` rows that is too old: what lies before it is older, whatever its clock said."""
        window = "SELECT id, recorded FROM event ORDER BY id LIMIT ?"
        found = self._connection.execute(f"SELECT max(id) FROM ({window}) WHERE recorded < ?", (step, oldest_ns))
        return int(found.fetchone()[0] or self._floor)

    def _last_by_size(self, step: int, most_bytes: int) -> int:
        """The row up to which to delete, by the mean size of a row, so that the log is small enough."""
        rows, excess = self._newest() - self._floor, self.size_bytes - most_bytes
        if excess <= 0 or rows <= 0:
            return self._floor
        return self._floor + min(step, rows, ceil(rows * excess / self.size_bytes))

    def _newest(self) -> int:
        return int(self._one("SELECT coalesce(max(seq), 0) FROM sqlite_sequence WHERE name = 'event'"))

    def close(self) -> None:
        with contextlib.suppress(sqlite3.Error):
            self._connection.close()

    def _entry(self, entry: _Entry) -> list[dict[str, Any]]:
        items = [self._event(*event) for event in entry.events]
        for key, text in entry.keep.items():
            self._connection.execute("INSERT OR REPLACE INTO state VALUES (?, ?)", (key, text))
        if entry.command is not None:
            self._connection.execute(
                "INSERT INTO command (id, answer) VALUES (?, ?)", (entry.command, json.dumps(items))
            )
        return items

    def _event(self, kind: str, t_ns: int, recorded_ns: int, payload: str) -> dict[str, Any]:
        row = self._connection.execute(
            "INSERT INTO event (kind, t, recorded, payload) VALUES (?, ?, ?, ?) RETURNING id",
            (kind, t_ns, recorded_ns, payload),
        ).fetchall()[0][0]
        return event_item(Cursor(self._log, row), kind, t_ns, recorded_ns, json.loads(payload))

    @contextlib.contextmanager
    def _transaction(self) -> Any:
        self._connection.execute("BEGIN IMMEDIATE")
        try:
            yield
            self._connection.execute("COMMIT")
        except BaseException:
            with contextlib.suppress(sqlite3.Error):  # SQLite has rolled back by itself after some errors
                self._connection.execute("ROLLBACK")
            raise

    def _one(self, sql: str) -> Any:
        return self._connection.execute(sql).fetchone()[0]

    def _all(self, sql: str) -> list[Any]:
        return list(self._connection.execute(sql).fetchall())

    def _free_pages(self) -> int:
        return int(self._one("PRAGMA freelist_count"))

    def _used_bytes(self) -> int:
        return (int(self._one("PRAGMA page_count")) - self._free_pages()) * self._page_bytes


def open_log_file(path: Path, connect: Callable[[Path], Connection], now_ns: int) -> LogFile:
    """Open the log at `path`, new if there is none; set a damaged one aside and begin anew.

    A new log's first event says that it is new, and why.

    Raises
    ------
    StartError : of a newer version, or no event log.   sqlite3.Error, OSError : the disk does not let us.
    """
    try:
        return _open(path, connect, now_ns, {"what": "log-begun", "why": "there was none"})
    except Damaged as error:
        aside = set_aside(path, now_ns)
        drop_oldest_aside(path)
        _log.error("event log: %s is damaged (%s); moved to %s, beginning a new one", path, error, aside)
        why = {"what": "log-begun", "why": f"the old one was damaged: {error}", "moved_to": aside.name}
        return _open(path, connect, now_ns, why)


def _open(path: Path, connect: Callable[[Path], Connection], now_ns: int, first: Mapping[str, Any]) -> LogFile:
    connection: Connection | None = None
    try:
        connection = connect(path)
        if isinstance(connection, sqlite3.Connection) and not check_file(connection):
            _log.warning("event log: %s is too large to be checked whole at a start; going on", path)
        migrate(connection, path)
        file = LogFile(connection, path)
        if file.unused:
            file.say(first, now_ns)
    except BaseException as error:
        if connection is not None:
            with contextlib.suppress(sqlite3.Error):
                connection.close()
        if is_damage(error):
            raise Damaged(str(error)) from error
        raise
    return file
