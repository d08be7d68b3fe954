"""The writer: order, bounds, retention, and what it does when the disk does not let it."""

import errno
import os
import sqlite3

import pytest
from store_rig import everything, flush, opened, wait_for

from soundrose.errors import StartError, UsageError
from soundrose.store.event_log import PAYLOAD_BYTES
from soundrose.store.items import RESERVED, NewEvent
from soundrose.store.log_file import COMMANDS
from soundrose.store.schema import FILE_NAME, VERSION, connect_writer


class Faulty:
    """A connection that fails where told: a disk that is full, and then is not."""

    def __init__(self, path):
        self.real = connect_writer(path)
        self.failing = None

    def execute(self, sql, parameters=(), /):
        if self.failing and sql.startswith(("INSERT INTO event", "COMMIT")):
            raise self.failing
        return self.real.execute(sql, parameters)

    def close(self):
        self.real.close()


class FaultyDisk:
    def __init__(self):
        self.connection = None

    def __call__(self, path):
        self.connection = Faulty(path)
        return self.connection


def full_disk() -> sqlite3.OperationalError:
    return sqlite3.OperationalError("database or disk is full")


def numbers(items):
    return [item["n"] for item in items if "n" in item]


def test_events_come_back_in_the_order_of_append(tmp_path):
    with opened(tmp_path) as log:
        for n in range(2500):
            assert log.append("health" if n % 3 else "note", -n, {"n": n})
        flush(log)
        items = everything(tmp_path)
    assert numbers(items) == list(range(2500))
    assert items[0]["what"] == "log-begun"
    assert [item["t"] for item in items[1:4]] == [0, -1, -2]
    assert len({item["cursor"] for item in items}) == 2501


def test_events_of_one_entry_are_written_together_with_what_is_kept(tmp_path):
    with opened(tmp_path) as log:
        entry = log.append_all([NewEvent("note", 1, {"n": 1}), NewEvent("note", 2, {"n": 2})], keep={"k": {"a": [1]}})
        assert entry.items is None
        flush(log)
        assert entry.items == everything(tmp_path)[1:]
        assert log.kept("k") is None  # what was known when it was opened
    with opened(tmp_path) as log:
        assert log.kept("k") == {"a": [1]}


def test_closing_writes_what_waits(tmp_path):
    with opened(tmp_path) as log:
        log.append("note", 1, {"n": 1})
    assert numbers(everything(tmp_path)) == [1]
    assert not log.append("note", 2, {"n": 2})
    assert log.facts()["lost"] == 1


def test_without_hurry_many_events_share_one_commit(tmp_path):
    with opened(tmp_path) as log:
        entries = [log.append_all([NewEvent("note", 1, {"n": n})]) for n in range(100)]
        wait_for(lambda: entries[0].items is not None, "the first is written")
        assert all(entry.items is not None for entry in entries)


def test_what_finds_no_room_is_counted_and_the_log_says_so(tmp_path):
    disk = FaultyDisk()
    with opened(tmp_path, queue_events=10, connect=disk) as log:
        disk.connection.failing = full_disk()
        taken = [log.append("note", n, {"n": n}) for n in range(25)]
        assert taken == [True] * 10 + [False] * 15
        wait_for(lambda: log.facts()["problem"], "the log says what is wrong")
        assert "full" in log.facts()["problem"]
        assert (log.facts()["lost"], log.facts()["waiting"]) == (15, 10)
        disk.connection.failing = None
        wait_for(lambda: log.facts()["waiting"] == 0, "what waited is written")
        assert log.facts()["problem"] is None
        assert log.append("note", 99, {"n": 99})
        flush(log)
    items = everything(tmp_path)
    assert numbers(items) == [*range(10), 99]
    assert [item["lost"] for item in items if item.get("what") == "events-lost"] == [15]


def test_a_commit_that_fails_leaves_nothing_half(tmp_path):
    disk = FaultyDisk()
    with opened(tmp_path, connect=disk) as log:
        log.append("note", 1, {"n": 1})
        flush(log)
        disk.connection.failing = full_disk()
        log.append_all([NewEvent("note", n, {"n": n}) for n in (2, 3, 4)], keep={"k": 1})
        wait_for(lambda: log.facts()["problem"], "a commit has failed")
        assert numbers(everything(tmp_path)) == [1]
        disk.connection.failing = None
    assert numbers(everything(tmp_path)) == [1, 2, 3, 4]


def test_a_folder_that_cannot_be_written_is_tried_again(tmp_path, monkeypatch, caplog):
    real, refuse = os.open, [True]

    def no_disk(path, *rest, **more):
        if refuse[0] and str(path).endswith(".lock"):
            raise OSError(errno.EROFS, os.strerror(errno.EROFS), path)
        return real(path, *rest, **more)

    monkeypatch.setattr(os, "open", no_disk)
    with opened(tmp_path / "away") as log:
        assert "Read-only" in log.facts()["problem"]
        assert "Read-only" in caplog.text
        assert log.append("note", 1, {"n": 1})
        refuse[0] = False
        flush(log)
        assert log.facts()["problem"] is None
    assert numbers(everything(tmp_path / "away")) == [1]


def test_a_log_taken_away_while_open_is_begun_anew(tmp_path):
    with opened(tmp_path) as log:
        log.append("note", 1, {"n": 1})
        flush(log)
        for suffix in ("", "-wal", "-shm"):
            os.rename(tmp_path / f"{FILE_NAME}{suffix}", tmp_path / f"old.sqlite{suffix}")
        log.append("note", 2, {"n": 2})
        flush(log)
        assert numbers(everything(tmp_path)) == [2]


def test_a_second_writer_is_refused(tmp_path):
    with opened(tmp_path), pytest.raises(StartError, match=r"another service writes .* choose another store.path"):
        opened(tmp_path).__enter__()
    with opened(tmp_path):
        pass


@pytest.mark.parametrize("key", sorted(RESERVED))
def test_a_payload_may_not_have_an_items_own_keys(tmp_path, key):
    with opened(tmp_path) as log, pytest.raises(UsageError, match=key):
        log.append("note", 1, {key: 1})


@pytest.mark.parametrize(
    ("payload", "word"),
    [({"a": object()}, "JSON"), ({"a": float("nan")}, "JSON"), ({"a": "x" * PAYLOAD_BYTES}, "bytes"),
     ({"a": "\ud800"}, "JSON")],
)  # fmt: skip
def test_a_payload_must_be_json_of_bounded_size(tmp_path, payload, word):
    with opened(tmp_path) as log:
        with pytest.raises(UsageError, match=word):
            log.append("note", 1, payload)
        assert log.append("note", 1, {"a": "x" * (PAYLOAD_BYTES - 8)})


@pytest.mark.parametrize("t_ns", [2**63, -(2**63), 1.5, True])
def test_a_time_must_fit(tmp_path, t_ns):
    with opened(tmp_path) as log, pytest.raises(UsageError, match="t_ns"):
        log.append("note", t_ns, {})


def test_bytes_waiting_are_bounded_too(tmp_path):
    disk = FaultyDisk()
    with opened(tmp_path, connect=disk) as log:
        disk.connection.failing = full_disk()
        payload = {"a": "x" * (PAYLOAD_BYTES - 100)}
        taken = sum(log.append("note", 1, payload) for _ in range(400))
        assert 250 <= taken <= 257  # 16 MiB of 64 KiB each
        disk.connection.failing = None


def test_old_events_are_deleted_by_age(tmp_path):
    host = [10**18]
    with opened(tmp_path, now_ns=lambda: host[0], monotonic=lambda: host[0] / 1e9, retain_days=1.0) as log:
        for n in range(3):
            log.append("note", 1, {"n": n})
            flush_with(log, host)
            host[0] += 10 * 3600 * 10**9
        host[0] += 1
        flush_with(log, host)
        flush_with(log, host)
        assert numbers(everything(tmp_path)) == [1, 2]  # 30 h, 20 h and 10 h old


def flush_with(log, host):
    """`flush` where the log's clock stands still unless it is moved."""
    entry = log.append_all([], urgent=True)

    def moved():
        host[0] += 10**8
        with log._wake:
            log._wake.notify()
        return entry.items is not None and log.facts()["waiting"] == 0

    wait_for(moved, "the log is written")


def test_a_step_of_the_host_clock_ages_no_event(tmp_path):
    host = [10**18]
    with opened(tmp_path, now_ns=lambda: host[0], retain_days=1.0) as log:
        log.append("note", 1, {"n": 1})
        flush(log)
        host[0] += 400 * 86_400 * 10**9
        flush(log)
        flush(log)
    assert numbers(everything(tmp_path)) == [1]


def test_a_log_that_is_too_big_gives_up_its_oldest_and_its_pages(tmp_path):
    with opened(tmp_path, retain_mb=1) as log:
        for n in range(400):
            log.append("note", n, {"n": n, "text": "x" * 20_000})
            if n % 40 == 39:
                flush(log)
        wait_for(lambda: (flush(log), log.facts()["bytes"] <= 10**6)[1], "the log is small again")
        left = numbers(everything(tmp_path))
        assert left == list(range(left[0], 400))
        assert 10 <= len(left) < 60
        assert log.facts()["deleted"] == 401 - len(left)
        wait_for(lambda: (flush(log), os.stat(tmp_path / FILE_NAME).st_size < 3 * 10**6)[1], "the file is small again")


def test_ids_are_never_given_twice(tmp_path):
    with opened(tmp_path, retain_days=1e-9) as log:
        log.append("note", 1, {"n": 1})
        flush(log)
        wait_for(lambda: (flush(log), not everything(tmp_path))[1], "all is deleted")
    with opened(tmp_path) as log:
        log.append("note", 1, {"n": 2})
        flush(log)
        assert [int(item["cursor"].split("-")[1]) for item in everything(tmp_path)] == [3]


def test_commands_are_remembered_over_a_restart_the_newest_of_them(tmp_path):
    with opened(tmp_path) as log:
        for n in range(COMMANDS + 5):
            log.append_all([NewEvent("note", 1, {"n": n})], command=f"id{n}")
        flush(log)
        flush(log)
        items = everything(tmp_path)
    with opened(tmp_path) as log:
        known = log.answered()
    assert list(known) == [f"id{n}" for n in range(5, COMMANDS + 5)]
    assert known["id7"] == [item for item in items if item.get("n") == 7]


def test_settings_of_the_file_are_those_that_keep_what_is_written(tmp_path):
    with opened(tmp_path):
        connection = sqlite3.connect(tmp_path / FILE_NAME)
        try:
            assert connection.execute("PRAGMA journal_mode").fetchone() == ("wal",)
            assert connection.execute("PRAGMA auto_vacuum").fetchone() == (2,)
            assert connection.execute("PRAGMA user_version").fetchone() == (VERSION,)
        finally:
            connection.close()
    writer = connect_writer(tmp_path / "other.sqlite")
    assert writer.execute("PRAGMA synchronous").fetchone() == (2,)
    writer.close()
