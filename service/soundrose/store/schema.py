"""process: the file of the event log: opened, checked, brought up to this program's version, or set aside."""

import contextlib
import os
import secrets
import sqlite3
import time
from collections.abc import Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, Protocol

from soundrose.errors import StartError

__all__ = [
    "APPLICATION_ID", "FILE_NAME", "MIGRATIONS", "VERSION", "Connection", "Damaged", "check_file", "connect_reader",
    "connect_writer", "drop_oldest_aside", "is_damage", "log_id", "migrate", "prepare_writer", "set_aside",
]  # fmt: skip

FILE_NAME = "events.sqlite"
APPLICATION_ID = 0x534E4452  #: in the file's header, so that no other program's file is taken for a log
CHECK_S = 2.0  #: the check of a large log ends here: a restart must not wait longer for it
KEPT_ASIDE = 3  #: damaged logs kept beside the log: a failing disk must not be filled by them
_BUSY_S = 2.0

#: Step k brings a file of version k to k + 1. Steps are never edited, only added: files of every version are out there.
MIGRATIONS: tuple[tuple[str, ...], ...] = (
    (
        "CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID",
        # AUTOINCREMENT: an id is never given twice, not even after its row was deleted
        "CREATE TABLE event (id INTEGER PRIMARY KEY AUTOINCREMENT, kind TEXT NOT NULL, t INTEGER NOT NULL,"
        " recorded INTEGER NOT NULL, payload TEXT NOT NULL)",
        "CREATE INDEX event_kind ON event (kind)",  # an index ends with the row id: the order of the log, kind by kind
        "CREATE INDEX event_t ON event (kind, t)",
        "INSERT INTO meta VALUES ('floor', '0')",  # no row up to this one is left
    ),
    (
        "CREATE TABLE state (key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID",
        "CREATE TABLE command (number INTEGER PRIMARY KEY AUTOINCREMENT, id TEXT NOT NULL UNIQUE,"
        " answer TEXT NOT NULL)",
    ),
)
VERSION = len(MIGRATIONS)

_DAMAGE = {sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB}


class Connection(Protocol):
    """What is used of a connection: the standard library's, or a stand-in that tests how files survive."""

    def execute(self, sql: str, parameters: Sequence[Any] = (), /) -> Any: ...

    def close(self) -> None: ...


class Damaged(Exception):
    """The file cannot be used as it is: not a database, or its pages contradict each other."""


def is_damage(error: BaseException) -> bool:
    """An error of SQLite that says the file is broken, not that the disk is full or away."""
    code = getattr(error, "sqlite_errorcode", None)
    return isinstance(error, sqlite3.DatabaseError) and code is not None and code & 0xFF in _DAMAGE


def connect_writer(path: Path) -> Connection:
    """The one connection that writes: WAL, and a commit is on the disk when it returns."""
    connection = sqlite3.connect(path, timeout=_BUSY_S, isolation_level=None, check_same_thread=False)
    prepare_writer(connection)
    return connection


def prepare_writer(connection: Connection) -> None:
    """Pragmas of the writer. The first takes effect in a new file alone, before its first table."""
    for pragma in (
        "auto_vacuum=INCREMENTAL",
        "journal_mode=WAL",
        "synchronous=FULL",
        "journal_size_limit=4194304",
        "foreign_keys=ON",
    ):
        connection.execute(f"PRAGMA {pragma}").fetchall()


def connect_reader(path: Path) -> sqlite3.Connection:
    """A connection that cannot write. sqlite3.OperationalError while there is no file."""
    uri = f"{path.absolute().as_uri()}?mode=ro"
    connection = sqlite3.connect(uri, uri=True, timeout=_BUSY_S, isolation_level=None, check_same_thread=False)
    connection.execute("PRAGMA query_only=ON")
    return connection


def check_file(connection: sqlite3.Connection, limit_s: float = CHECK_S) -> bool:
    """Look the file through. True if it is whole, False if time was up before it was seen to be. Raises Damaged."""
    until = time.monotonic() + limit_s
    connection.set_progress_handler(lambda: int(time.monotonic() > until), 10_000)
    try:
        found = connection.execute("PRAGMA quick_check(1)").fetchone()[0]
    except sqlite3.DatabaseError as error:
        if error.sqlite_errorcode == sqlite3.SQLITE_INTERRUPT:
            return False
        if is_damage(error):
            raise Damaged(str(error)) from error
        raise
    finally:
        connection.set_progress_handler(None, 0)
    if found != "ok":
        raise Damaged(str(found).splitlines()[0])
    return True


def migrate(connection: Connection, path: Path) -> None:
    """Bring the file up to VERSION, each step whole or not at all.

    Raises
    ------
    StartError : it was written by a newer program, or is no event log.
    """
    version = int(connection.execute("PRAGMA user_version").fetchone()[0])
    application = int(connection.execute("PRAGMA application_id").fetchone()[0])
    empty = int(connection.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]) == 0
    if version > VERSION:
        raise StartError(
            f"store.path: {path} is an event log of version {version}; this program knows versions up to {VERSION}."
            " Run the program that wrote it, or choose another store.path."
        )
    if not empty and (application != APPLICATION_ID or version < 1):
        raise StartError(f"store.path: {path} is no event log. Move it away, or choose another store.path.")
    for step in range(version, VERSION):
        connection.execute("BEGIN IMMEDIATE")
        for statement in MIGRATIONS[step]:
            connection.execute(statement)
        if step == 0:
            connection.execute(f"PRAGMA application_id={APPLICATION_ID}")
            connection.execute("INSERT INTO meta VALUES ('log', ?)", (secrets.token_hex(8),))
        connection.execute(f"PRAGMA user_version={step + 1}")
        connection.execute("COMMIT")


def log_id(connection: Connection) -> str:
    """The random name of this log, 16 hex digits."""
    return str(connection.execute("SELECT value FROM meta WHERE key = 'log'").fetchone()[0])


def set_aside(path: Path, now_ns: int) -> Path:
    """Move a damaged log and what belongs to it to a name with the time in it. Returns that of the log itself."""
    moment = datetime.fromtimestamp(now_ns // 10**9, UTC).strftime("%Y%m%dT%H%M%SZ")
    aside, number = path.with_name(f"{path.stem}-damaged-{moment}{path.suffix}"), 1
    while aside.exists():
        number += 1
        aside = path.with_name(f"{path.stem}-damaged-{moment}-{number}{path.suffix}")
    os.replace(path, aside)
    for suffix in ("-wal", "-shm"):
        with contextlib.suppress(FileNotFoundError):
            os.replace(f"{path}{suffix}", f"{aside}{suffix}")
    return aside


def drop_oldest_aside(path: Path, keep: int = KEPT_ASIDE) -> None:
    """Delete all but the newest `keep` logs that were set aside."""
    found = sorted(path.parent.glob(f"{path.stem}-damaged-*{path.suffix}"), key=lambda aside: aside.name)
    for aside in found[:-keep]:
        for suffix in ("", "-wal", "-shm"):
            with contextlib.suppress(FileNotFoundError):
                os.unlink(f"{aside}{suffix}")
