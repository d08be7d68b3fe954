"""The file: versions, migration from a recorded one, damage, other programs' files."""

import os
import sqlite3
from pathlib import Path

import pytest
from store_rig import everything, flush, opened

from soundrose.errors import StartError
from soundrose.store import schema
from soundrose.store.cursors import Cursor
from soundrose.store.event_reader import EventReader, NoLog
from soundrose.store.schema import FILE_NAME, VERSION, Damaged, check_file, connect_reader, drop_oldest_aside, migrate

RECORDED = Path(__file__).parent / "version1.sql"


def make_version1(folder: Path) -> Path:
    path = folder / FILE_NAME
    connection = sqlite3.connect(path)
    connection.executescript(RECORDED.read_text())
    connection.close()
    return path


def make_log(folder: Path, events: int) -> Path:
    with opened(folder) as log:
        for n in range(events):
            log.append("note", n, {"n": n, "text": "x" * 200})
    return folder / FILE_NAME


def test_a_recorded_version_1_file_is_brought_up_and_loses_nothing(tmp_path):
    make_version1(tmp_path)
    with opened(tmp_path) as log:
        log.append_all([], keep={"k": 1}, command="c")
        log.append("note", 5, {"n": 4})
        flush(log)
        items = everything(tmp_path)
    assert [item["cursor"] for item in items] == [f"00112233445566aa-{row}" for row in (2, 3, 4)]
    assert items[0]["why"] == "no variation"
    assert items[0]["t"] == 1796133601000000000
    reader = EventReader(tmp_path)
    assert reader.since(Cursor("00112233445566aa", 1))[0] == items
    reader.close()


def test_every_version_up_to_ours_is_reached_step_by_step(tmp_path):
    path = make_version1(tmp_path)
    connection = sqlite3.connect(path, isolation_level=None)
    migrate(connection, path)
    migrate(connection, path)
    assert connection.execute("PRAGMA user_version").fetchone() == (VERSION,)
    tables = {row[0] for row in connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}
    connection.close()
    assert tables == {"meta", "event", "sqlite_sequence", "state", "command"}


def test_a_migration_cut_short_changes_nothing(tmp_path, monkeypatch):
    path = make_version1(tmp_path)
    broken = (schema.MIGRATIONS[0], (schema.MIGRATIONS[1][0], "CREATE TABLE nonsense"))
    monkeypatch.setattr(schema, "MIGRATIONS", broken)
    connection = sqlite3.connect(path, isolation_level=None)
    with pytest.raises(sqlite3.OperationalError):
        migrate(connection, path)
    connection.close()
    monkeypatch.undo()
    with opened(tmp_path) as log:
        flush(log)
    assert len(everything(tmp_path)) == 2


def test_a_reader_waits_for_the_migration(tmp_path):
    make_version1(tmp_path)
    reader = EventReader(tmp_path)
    with pytest.raises(NoLog, match="version 1"):
        reader.since(None)
    with opened(tmp_path):
        assert len(reader.since(None)[0]) == 2
    reader.close()


def test_a_newer_file_is_refused_and_left_alone(tmp_path):
    path = make_log(tmp_path, 3)
    connection = sqlite3.connect(path)
    connection.execute(f"PRAGMA user_version={VERSION + 1}")
    connection.close()
    with pytest.raises(StartError, match=rf"version {VERSION + 1}; this program knows versions up to {VERSION}"):
        opened(tmp_path).__enter__()
    assert [name for name in os.listdir(tmp_path) if "damaged" in name] == []
    connection = sqlite3.connect(path)
    connection.execute(f"PRAGMA user_version={VERSION}")
    connection.close()
    with opened(tmp_path) as log:  # the refusal has let go of everything
        flush(log)
        assert len(everything(tmp_path)) == 4


def test_another_programs_file_is_refused_and_left_alone(tmp_path):
    path = tmp_path / FILE_NAME
    connection = sqlite3.connect(path)
    connection.execute("CREATE TABLE holiday (photo BLOB)")
    connection.close()
    with pytest.raises(StartError, match="no event log"):
        opened(tmp_path).__enter__()
    assert path.exists()


def overwrite(path: Path, first: int, data: bytes) -> None:
    with path.open("r+b") as file:
        file.seek(first)
        file.write(data)


@pytest.mark.parametrize(
    ("first", "data"),
    [(0, b"this is not a database, and never was one"), (4096 * 3, b"\xff" * 8192), (100, b"\x07" * 60)],
    ids=["header", "pages", "schema"],
)
def test_a_damaged_log_is_set_aside_and_said_first_in_the_new_one(tmp_path, caplog, first, data):
    path = make_log(tmp_path, 300)
    reader = EventReader(tmp_path)
    old = reader.newest()
    overwrite(path, first, data)
    with opened(tmp_path) as log:
        log.append("note", 1, {"n": 1})
        flush(log)
        items = everything(tmp_path)
        place = reader.newest()
    reader.close()
    assert [item.get("what") for item in items] == ["log-begun", None]
    assert "damaged" in items[0]["why"]
    aside = tmp_path / items[0]["moved_to"]
    assert aside.read_bytes()[first : first + len(data)] == data
    assert aside.name in caplog.text
    assert place.log != old.log


def test_damage_met_while_running_is_set_aside_too(tmp_path):
    with opened(tmp_path) as log:
        for n in range(300):
            log.append("note", n, {"n": n, "text": "x" * 200})
        flush(log)
        checkpoint = sqlite3.connect(tmp_path / FILE_NAME)
        checkpoint.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        checkpoint.close()
        overwrite(tmp_path / FILE_NAME, 4096, b"\xff" * 4096 * 30)
        log._file._connection.execute("PRAGMA shrink_memory")  # its pages come from the file again
        log.append("note", 1, {"n": -1})
        flush(log)
        items = everything(tmp_path)
    assert [item.get("n", item.get("what")) for item in items] == ["log-begun", -1]
    assert "damaged" in items[0]["why"]


def test_only_the_newest_damaged_logs_are_kept(tmp_path):
    for day in range(1, 8):
        (tmp_path / f"events-damaged-2026120{day}T000000Z.sqlite").touch()
        (tmp_path / f"events-damaged-2026120{day}T000000Z.sqlite-wal").touch()
    drop_oldest_aside(tmp_path / FILE_NAME)
    left = [f"events-damaged-2026120{day}T000000Z.sqlite" for day in (5, 6, 7)]
    assert sorted(os.listdir(tmp_path)) == sorted([*left, *(f"{name}-wal" for name in left)])


def test_two_damaged_logs_of_one_second_have_names_of_their_own(tmp_path):
    names = set()
    for _ in range(3):
        (tmp_path / FILE_NAME).touch()
        names.add(schema.set_aside(tmp_path / FILE_NAME, 1_796_133_600_000_000_000).name)
    assert "events-damaged-20261201T140000Z.sqlite" in names
    assert len(names) == 3


def test_the_check_ends_in_time(tmp_path):
    path = make_log(tmp_path, 5000)
    connection = connect_reader(path)
    assert check_file(connection)
    assert not check_file(connection, limit_s=-1.0)
    connection.close()


def test_a_file_that_is_no_database_is_damaged(tmp_path):
    path = tmp_path / FILE_NAME
    path.write_bytes(b"x" * 5000)
    connection = sqlite3.connect(path)
    with pytest.raises(Damaged):
        check_file(connection)
    connection.close()


def test_a_reader_cannot_write(tmp_path):
    connection = connect_reader(make_log(tmp_path, 1))
    with pytest.raises(sqlite3.OperationalError, match="readonly"):
        connection.execute("DELETE FROM event")
    connection.close()
