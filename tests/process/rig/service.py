"""The service as a process: started from a settings file, watched from outside, ended in order, never left behind."""

import contextlib
import json
import os
import queue
import signal
import socket
import subprocess
import sys
import threading
import time
import urllib.error
import urllib.request
import uuid
from collections.abc import Callable
from pathlib import Path
from typing import Any

from rig.listener import Listener
from rig.toml_text import toml_text
from rig.wire import Feeder

__all__ = ["Service", "free_ports", "http_get", "processes_marked", "run_command", "wait_until"]

MARK = "PROCESS_TEST_MARK"  # set in the environment of the service; its children inherit it
ROOT = Path(__file__).resolve().parents[3]


def _environment(mark: str, extra_path: Path | None = None) -> dict[str, str]:
    """As it is here, with the package on the path: SERVICE_PYTHONPATH where set (a changed copy), else the repo's.

    extra_path : a folder that comes before it.
    """
    ours = os.pathsep.join([str(ROOT / "service"), str(ROOT / "clients" / "python")])
    path = os.environ.get("SERVICE_PYTHONPATH") or ours
    if extra_path is not None:
        path = f"{extra_path}{os.pathsep}{path}"
    return {**os.environ, "PYTHONPATH": path, MARK: mark, "PYTHONUNBUFFERED": "1"}


def free_ports(count: int) -> list[int]:
    """TCP ports that nobody has just now, for settings that must name them."""
    with contextlib.ExitStack() as stack:
        taken = [stack.enter_context(socket.socket()) for _ in range(count)]
        for one in taken:
            one.bind(("127.0.0.1", 0))
        return [one.getsockname()[1] for one in taken]


def processes_marked(mark: str) -> dict[int, str]:
    """Processes (not zombies) that carry the mark in their environment: pid -> command line."""
    found = {}
    for folder in Path("/proc").glob("[0-9]*"):
        try:
            if f"{MARK}={mark}".encode() not in (folder / "environ").read_bytes().split(b"\0"):
                continue
            if (folder / "stat").read_text().rpartition(")")[2].split()[0] == "Z":
                continue
            found[int(folder.name)] = (folder / "cmdline").read_bytes().replace(b"\0", b" ").decode()
        except OSError:  # it ended meanwhile, or belongs to someone else
            continue
    return found


def wait_until(what: str, condition: Callable[[], Any], deadline_s: float) -> Any:
    """The condition's value once it is true, asked every 20 ms; AssertionError at the deadline."""
    until = time.monotonic() + deadline_s
    pause = threading.Event()
    while not (value := condition()):
        if time.monotonic() >= until:
            raise AssertionError(f"within {deadline_s:g} s not: {what}")
        pause.wait(0.02)
    return value


def run_command(*arguments: str, cwd: Path, deadline_s: float = 30.0) -> subprocess.CompletedProcess[str]:
    """`soundrose ARGUMENTS` to its end."""
    return subprocess.run(
        [sys.executable, "-m", "soundrose", *arguments], cwd=cwd, env=_environment(uuid.uuid4().hex),
        capture_output=True, text=True, timeout=deadline_s, check=False, stdin=subprocess.DEVNULL,
    )  # fmt: skip


def http_get(url: str, headers: dict[str, str] | None = None) -> tuple[int, dict[str, str], bytes]:
    """Status, headers and body; an error status is an answer like any other."""
    request = urllib.request.Request(url, headers=headers or {})
    try:
        with urllib.request.urlopen(request, timeout=10) as answer:
            return answer.status, dict(answer.headers), answer.read()
    except urllib.error.HTTPError as error:
        with error:
            return error.code, dict(error.headers), error.read()


class Service:
    """`soundrose run` on its own ports. `ready` is its ready line; use as a context, which ends it in order."""

    def __init__(
        self, settings: dict[str, Any], folder: Path, deadline_s: float = 40.0, extra_path: Path | None = None
    ) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self.folder, self.mark = folder, uuid.uuid4().hex
        self.config = folder / "aft.toml"
        self.config.write_text(toml_text(settings), encoding="utf-8")
        self._error_file = (folder / "stderr.txt").open("wb")
        self.process = subprocess.Popen(
            [sys.executable, "-m", "soundrose", "run", "--config", str(self.config)], cwd=folder,
            env=_environment(self.mark, extra_path), stdin=subprocess.DEVNULL, stdout=subprocess.PIPE,
            stderr=self._error_file,
            start_new_session=True,
        )  # fmt: skip
        self._lines: queue.Queue[str | None] = queue.Queue()
        self._reader = threading.Thread(target=self._read, daemon=True)
        self._reader.start()
        try:
            self.ready = self._ready_line(deadline_s)
        except BaseException:
            self.kill()
            raise

    def _read(self) -> None:
        assert self.process.stdout
        for line in self.process.stdout:
            self._lines.put(line.decode())
        self._lines.put(None)

    def _ready_line(self, deadline_s: float) -> dict[str, Any]:
        try:
            line = self._lines.get(timeout=deadline_s)
        except queue.Empty:
            raise AssertionError(f"no ready line within {deadline_s:g} s; standard error:\n{self.stderr}") from None
        if line is None:
            raise AssertionError(f"ended with status {self.process.wait(10)} before ready:\n{self.stderr}")
        ready = json.loads(line)
        assert ready["ready"] is True, ready
        return ready

    @property
    def environment(self) -> dict[str, str]:
        """That of the service, for a process started beside it."""
        return _environment(self.mark)

    @property
    def stderr(self) -> str:
        return (self.folder / "stderr.txt").read_text(encoding="utf-8", errors="replace")

    @property
    def http(self) -> str:
        where = self.ready["http"]
        return where.rstrip("/") if "://" in where else f"http://{where}"

    def get(self, path: str, headers: dict[str, str] | None = None) -> tuple[int, dict[str, str], bytes]:
        return http_get(self.http + path, headers)

    def listener(self, *topics: str) -> Listener:
        """A listener that is known to be joined: a `status` has come."""
        listener = Listener(self.ready["publish"], topics or ("",))
        listener.wait_count("status", 1, 20)
        return listener

    def feeder(self, queue: int = 4) -> Feeder:
        return Feeder(self.ready["feed"], queue)

    def processes(self) -> dict[int, str]:
        return processes_marked(self.mark)

    def end(self, number: int = signal.SIGTERM, deadline_s: float = 5.0) -> int:
        """Signal it and wait for its end: the exit status; AssertionError if it is not gone in time."""
        self.process.send_signal(number)
        try:
            status = self.process.wait(deadline_s)
        except subprocess.TimeoutExpired:
            raise AssertionError(f"still there {deadline_s:g} s after signal {number}:\n{self.stderr}") from None
        finally:
            self._error_file.close()
        return status

    def kill(self) -> None:
        """End by force everything that carries this service's mark."""
        for pid in [self.process.pid, *self.processes()]:
            try:
                os.kill(pid, signal.SIGKILL)
            except ProcessLookupError:
                continue
        self.process.wait(10)
        self._reader.join(10)
        if self.process.stdout:
            self.process.stdout.close()
        self._error_file.close()

    def __enter__(self) -> "Service":
        return self

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        try:
            if self.process.poll() is None:
                status = self.end(deadline_s=10.0)
                if kind is None:
                    assert status == 0, f"exit status {status}:\n{self.stderr}"
                    wait_until("no process left", lambda: not self.processes(), 5.0)
        finally:
            if kind is not None:
                print(f"---- standard error of the service ----\n{self.stderr}", file=sys.stderr)
            self.kill()
