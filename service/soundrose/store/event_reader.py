"""process: reads the event log while another process writes it; never writes, never makes the writer wait."""

import contextlib
import json
import os
import sqlite3
import threading
from collections.abc import Collection
from pathlib import Path
from typing import Any

from soundrose.errors import StreamError, UsageError
from soundrose.store.cursors import Cursor, CursorGone
from soundrose.store.items import event_item
from soundrose.store.schema import APPLICATION_ID, FILE_NAME, VERSION, connect_reader, log_id

__all__ = ["MOST_ITEMS", "EventReader", "NoLog"]

MOST_ITEMS = 1000  #: in one answer


class NoLog(StreamError):
    """There is no log to read, or not now."""

    code = "no-log"


class EventReader:
    """Events of the log in `folder`, page by page. Safe to call from several threads, one at a time gets in.

    The log may come later than the reader, and may be set aside and begun anew under it: the next call finds it.
    """

    def __init__(self, folder: Path) -> None:
        self._path = folder / FILE_NAME
        self._lock = threading.Lock()
        self._connection: sqlite3.Connection | None = None
        self._file: tuple[int, int] | None = None  # device and inode of the open file
        self._log = ""

    def since(
        self,
        place: Cursor | int | None,
        kinds: Collection[str] | None = None,
        limit: int = 100,
        until: Cursor | None = None,
    ) -> tuple[list[dict[str, Any]], Cursor]:
        """Events after `place` in the order of the log, and the cursor from which the next call goes on.

        Parameters
        ----------
        place : a cursor, None for the first event there is, or a time, ns since 1970 UTC: from the first event of
            `kinds` on whose `t` is not before it. What follows in the log is given whatever its `t`.
        kinds : only these; None for all.   limit : 1 to MOST_ITEMS.
        until : only events up to this cursor.

        Raises
        ------
        CursorGone : events after the cursor were deleted by retention, or it is one of another log.
        NoLog : there is no log yet, or it cannot be read now.
        UsageError : a limit out of range.
        """
        if not 1 <= limit <= MOST_ITEMS:
            raise UsageError(f"limit is {limit!r}; it must be from 1 to {MOST_ITEMS}")
        with self._lock, self._reading() as connection:
            floor, newest = _ends(connection)
            if isinstance(place, Cursor):
                self._check(place, floor, newest)
            wanted = None if kinds is None else sorted(set(kinds))
            if isinstance(place, int):
                after = _before_time(connection, place, wanted, newest)
            else:
                after = floor if place is None else place.row
            last = newest if until is None or until.log != self._log else min(until.row, newest)
            rows = _rows(connection, after, last, wanted, limit)
        end = rows[-1][0] if len(rows) == limit else max(after, last)
        return [self._item(row) for row in rows], Cursor(self._log, end)

    def newest(self) -> Cursor:
        """The place after the newest event. Raises NoLog."""
        with self._lock, self._reading() as connection:
            return Cursor(self._log, _ends(connection)[1])

    def version(self) -> tuple[str, int]:
        """A value that differs from the last one whenever something was written since. Raises NoLog."""
        with self._lock:
            connection = self._open()
            with _explained():
                return self._log, int(connection.execute("PRAGMA data_version").fetchone()[0])

    def close(self) -> None:
        with self._lock:
            self._drop()

    def _check(self, place: Cursor, floor: int, newest: int) -> None:
        if place.log != self._log:
            raise CursorGone("another log")
        if place.row < floor:
            raise CursorGone("retention")
        if place.row > newest:
            raise CursorGone("ahead")

    def _item(self, row: tuple[int, str, int, int, str]) -> dict[str, Any]:
        number, kind, t_ns, recorded_ns, payload = row
        return event_item(Cursor(self._log, number), kind, t_ns, recorded_ns, json.loads(payload))

    @contextlib.contextmanager
    def _reading(self) -> Any:
        """One state of the log for several questions."""
        connection = self._open()
        with _explained():
            connection.execute("BEGIN")
            try:
                yield connection
            finally:
                if connection.in_transaction:
                    connection.execute("COMMIT")

    def _open(self) -> sqlite3.Connection:
        """The connection to the file that has the log's name now."""
        try:
            found = os.stat(self._path)
        except OSError as error:
            self._drop()
            raise NoLog(f"there is no event log at {self._path} yet ({error.strerror})") from None
        if self._connection is not None and self._file == (found.st_dev, found.st_ino):
            return self._connection
        self._drop()
        with _explained():
            connection = connect_reader(self._path)
            try:
                self._log = _checked_id(connection)
            except BaseException:
                connection.close()
                raise
        self._connection, self._file = connection, (found.st_dev, found.st_ino)
        return connection

    def _drop(self) -> None:
        if self._connection is not None:
            self._connection.close()
        self._connection = self._file = None


@contextlib.contextmanager
def _explained() -> Any:
    try:
        yield
    except sqlite3.Error as error:
        raise NoLog(f"the event log cannot be read now: {error}") from error


def _checked_id(connection: sqlite3.Connection) -> str:
    """The log's name, once its writer has made it whole."""
    if connection.execute("PRAGMA application_id").fetchone()[0] != APPLICATION_ID:
        raise NoLog("the event log is not there yet")
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    if version != VERSION:
        raise NoLog(f"the event log has version {version}, and this program reads version {VERSION}")
    return log_id(connection)


def _ends(connection: sqlite3.Connection) -> tuple[int, int]:
    """(last row deleted by retention, newest row ever written)."""
    floor = int(connection.execute("SELECT value FROM meta WHERE key = 'floor'").fetchone()[0])
    newest = connection.execute("SELECT seq FROM sqlite_sequence WHERE name = 'event'").fetchone()
    return floor, 0 if newest is None else int(newest[0])


def _before_time(connection: sqlite3.Connection, t_ns: int, kinds: list[str] | None, newest: int) -> int:
    """The row before the first whose `t` is not before t_ns; the newest row if there is none."""
    if kinds is None:
        kinds = [row[0] for row in connection.execute("SELECT DISTINCT kind FROM event")]
    found = [
        connection.execute("SELECT min(id) FROM event WHERE kind = ? AND t >= ?", (kind, t_ns)).fetchone()[0]
        for kind in kinds
    ]
    first = min((row for row in found if row is not None), default=None)
    return newest if first is None else int(first) - 1


def _rows(
    connection: sqlite3.Connection, after: int, last: int, kinds: list[str] | None, limit: int
) -> list[tuple[int, str, int, int, str]]:
    """At most `limit` rows in (after, last]. Kind by kind, so that rare kinds are found without reading all others."""
    columns = "SELECT id, kind, t, recorded, payload FROM event"
    order = "id > ? AND id <= ? ORDER BY id LIMIT ?"
    if kinds is None:
        return connection.execute(f"{columns} WHERE {order}", (after, last, limit)).fetchall()
    rows = []
    for kind in kinds:
        rows += connection.execute(
            f"{columns} INDEXED BY event_kind WHERE kind = ? AND {order}", (kind, after, last, limit)
        ).fetchall()
    return sorted(rows)[:limit]
