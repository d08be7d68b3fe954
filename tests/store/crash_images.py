"""Files as a crash of the whole machine may leave them: python tests/store/crash_images.py [IMAGES] [SEED].

A log is written through a file system layer that records every write, truncation, deletion and sync. Up to a random
point these are played again into a new folder: what came before the last sync of its file is there; each write since
is there, or missing, or torn at any byte, or there in some of its sectors only. Then the log is opened as ever: it
must be whole, and every event whose commit had returned must be in it, in order.

The recording runs in the SQLite of apsw, the opening in that of the standard library; the writer's code is the same.
"""

import json
import os
import random
import shutil
import sqlite3
import sys
import tempfile
from dataclasses import dataclass, field
from pathlib import Path

import apsw
from store_rig import everything, opened

from soundrose.store.event_log import Entry
from soundrose.store.log_file import open_log_file
from soundrose.store.schema import FILE_NAME, prepare_writer

SECTOR = 512


@dataclass
class Recording:
    """What reached the file system, in order: (action, file name, offset or size, bytes)."""

    actions: list[tuple[str, str, int, bytes]] = field(default_factory=list)

    def note(self, action: str, name: str, where: int = 0, data: bytes = b"") -> None:
        self.actions.append((action, os.path.basename(name), where, data))


class RecordingFile(apsw.VFSFile):
    def __init__(self, recording: Recording, name, flags) -> None:
        super().__init__("", name, flags)
        self._recording = recording
        self._name = name if isinstance(name, str) else name.filename()

    def xWrite(self, data, offset):
        self._recording.note("write", self._name, offset, bytes(data))
        super().xWrite(data, offset)

    def xTruncate(self, size):
        self._recording.note("truncate", self._name, size)
        super().xTruncate(size)

    def xSync(self, flags):
        self._recording.note("sync", self._name)
        super().xSync(flags)


class RecordingSystem(apsw.VFS):
    def __init__(self, recording: Recording) -> None:
        self.recording = recording
        super().__init__("recording", "")

    def xOpen(self, name, flags):
        return RecordingFile(self.recording, name, flags)

    def xDelete(self, name, sync):
        self.recording.note("delete", name)
        super().xDelete(name, sync)


def record(folder: Path, chance: random.Random, commits: int = 60) -> Recording:
    """A log written, cut by retention, checkpointed and reopened; after each commit a note of its last number."""
    recording = Recording()
    system = RecordingSystem(recording)

    def connect(path: Path):
        connection = apsw.Connection(str(path), vfs="recording")
        prepare_writer(connection)
        connection.execute("PRAGMA wal_autocheckpoint=12")  # pages: checkpoints come often, and lie between commits
        return connection

    log, n = open_log_file(folder / FILE_NAME, connect, 0), 0
    recording.note("committed", "", 0)
    for commit in range(commits):
        events = []
        for _ in range(chance.randint(1, 12)):
            n += 1
            text = json.dumps({"n": n, "text": "x" * chance.choice([10, 300, 6000])})
            events.append((chance.choice(["note", "health"]), n, n, text))
        log.write([Entry(tuple(events), {"last": str(n)})], 0, 0)
        recording.note("committed", "", n)
        if commit % 4 == 3:
            log.tidy(n - 60, 10**12)
        if commit % 25 == 24:
            log.close()
            log = open_log_file(folder / FILE_NAME, connect, 0)
    log.close()
    system.unregister()
    return recording


def image(recording: Recording, point: int, folder: Path, chance: random.Random) -> int:
    """Make the files as a crash after `point` actions may leave them; the newest number that was committed then."""
    files: dict[str, bytearray] = {}
    unsure: dict[str, list[tuple[str, int, bytes]]] = {}
    committed = 0
    for action, name, where, data in recording.actions[:point]:
        match action:
            case "committed":
                committed = where
            case "sync":
                for waiting in unsure.pop(name, []):
                    _apply(files, name, *waiting)
                files.setdefault(name, bytearray())
            case "delete":  # a directory entry: there is no sync of a folder to wait for here, so it is kept or lost
                unsure.pop(name, None)
                files.pop(name, None)
            case _:
                unsure.setdefault(name, []).append((action, where, data))
    fate = chance.choice(["all lost", "each by chance", "torn", "last torn"])
    for name, waiting in unsure.items():
        for number, (action, where, data) in enumerate(waiting):
            if fate == "last torn":
                survivors = [(where, data)] if number < len(waiting) - 1 else _torn(where, data, chance)
            elif fate == "all lost" or chance.random() < 0.4:
                continue
            else:
                survivors = [(where, data)] if fate == "each by chance" else _torn(where, data, chance)
            for at, piece in survivors:
                _apply(files, name, action, at, piece)
    for name, content in files.items():
        (folder / name).write_bytes(bytes(content))
    return committed


def _torn(where: int, data: bytes, chance: random.Random) -> list[tuple[int, bytes]]:
    if not data:
        return [(where, data)]
    if chance.random() < 0.5:
        return [(where, data[: chance.randrange(len(data))])]
    pieces = [(where + at, data[at : at + SECTOR]) for at in range(0, len(data), SECTOR)]
    return [piece for piece in pieces if chance.random() < 0.5]


def _apply(files: dict[str, bytearray], name: str, action: str, where: int, data: bytes) -> None:
    content = files.setdefault(name, bytearray())
    if action == "truncate":
        del content[where:]
        return
    if len(content) < where:
        content.extend(bytes(where - len(content)))
    content[where : where + len(data)] = data


def check(folder: Path, committed: int) -> int:
    """Open what a crash left. Returns how many events were there beyond those that had to be."""
    with opened(folder) as log:
        assert log.facts()["problem"] is None, log.facts()
        kept = int(log.kept("last") or 0)
    assert not list(folder.glob("*damaged*")), "the log was taken for damaged"
    connection = sqlite3.connect(folder / FILE_NAME)
    try:
        assert connection.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
    finally:
        connection.close()
    numbers = [item["n"] for item in everything(folder, ["note", "health"])]
    last = numbers[-1] if numbers else kept
    assert numbers == list(range(last - len(numbers) + 1, last + 1)), "a hole or a repeat in the log"
    assert last == kept, "events and what is kept with them are apart"
    assert last >= committed, f"{committed} was committed, and {last} is the last"
    return last - committed


def run(images: int, seed: int) -> dict[str, int]:
    """So many crashes of recorded logs; figures. AssertionError for anything lost or broken."""
    chance, base = random.Random(seed), Path(tempfile.mkdtemp(prefix="crash-"))
    figures = {"images": 0, "actions": 0, "with writes beyond the last commit": 0}
    recording = Recording()
    for number in range(images):
        if number % 20 == 0:
            (base / f"log{number}").mkdir()
            recording = record(base / f"log{number}", chance)
            figures["actions"] += len(recording.actions)
        folder = base / f"image{number}"
        folder.mkdir()
        begun = recording.actions.index(("committed", "", 0, b""))
        more = check(folder, image(recording, chance.randrange(begun + 1, len(recording.actions)), folder, chance))
        figures["images"] += 1
        figures["with writes beyond the last commit"] += more > 0
        shutil.rmtree(folder)
    shutil.rmtree(base)
    return figures


if __name__ == "__main__":
    print(run(int(sys.argv[1]) if len(sys.argv) > 1 else 200, int(sys.argv[2]) if len(sys.argv) > 2 else 1))
