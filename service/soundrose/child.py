"""process: what every child of `soundrose run` shares: its orders, its lifeline and its heartbeat."""

import contextlib
import ctypes
import json
import logging
import os
import secrets
import signal
import sys
import threading
import time
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import msgpack
import zmq
from threadpoolctl import threadpool_limits

from soundrose.garbage import GarbageWatch
from soundrose.product.connecting import connect_to
from soundrose.settings_types import LogFormat, Settings

__all__ = [
    "HEARTBEAT_S", "Heartbeat", "Lifeline", "Orders", "SlowLog", "clock_name", "new_start", "set_up_child",
    "set_up_logging",
]  # fmt: skip

HEARTBEAT_S = 0.25  #: a beat this often; the supervisor calls a child stuck after `supervise.STUCK_S`
_PR_SET_PDEATHSIG = 1
_log = logging.getLogger("soundrose")


@dataclass(frozen=True, slots=True)
class Orders:
    """What the supervisor tells a child: who it is, the settings, where to meet the others.

    endpoints : stream, collect, control, and (once known) feed, publish, http.
    record_fd : descriptor of the shared record, -1 for a child that has none.
    parent : pid of the supervisor, 0 for a band on another host.
    """

    name: str
    settings: Settings
    endpoints: Mapping[str, str]
    record_fd: int = -1
    parent: int = 0
    extra: Mapping[str, Any] = field(default_factory=dict)

    def pack(self) -> bytes:
        """Bytes for the descriptor that the child reads its orders from."""
        plain = {
            "name": self.name,
            "settings": self.settings.as_plain(),
            "endpoints": dict(self.endpoints),
            "record_fd": self.record_fd,
            "parent": self.parent,
            "extra": dict(self.extra),
        }
        return bytes(msgpack.packb(plain))

    @classmethod
    def unpack(cls, data: bytes) -> "Orders":
        plain = msgpack.unpackb(data)
        plain["settings"] = Settings.from_plain(plain["settings"])
        return cls(**plain)

    @classmethod
    def read(cls, descriptor: int) -> "Orders":
        """The orders in an open descriptor, read from its beginning."""
        with os.fdopen(descriptor, "rb") as source:
            source.seek(0)
            return cls.unpack(source.read())


class Lifeline:
    """Ends this process when the supervisor is gone or wants it to end.

    The supervisor holds the other end of this process's standard input; its end of file, SIGTERM or SIGINT set
    `ending`. A process that has not ended `grace_s` later is ended hard: no orphan survives a supervisor.
    """

    def __init__(self, parent: int, grace_s: float = 3.0) -> None:
        self.ending = threading.Event()
        self._grace_s = grace_s
        for number in (signal.SIGTERM, signal.SIGINT):
            signal.signal(number, lambda *_: self.ending.set())
        if not parent:
            return
        ctypes.CDLL(None, use_errno=True).prctl(_PR_SET_PDEATHSIG, signal.SIGKILL, 0, 0, 0)
        if os.getppid() != parent:  # it died before the line above
            os._exit(1)
        threading.Thread(target=self._watch, name="lifeline", daemon=True).start()

    def _watch(self) -> None:
        with contextlib.suppress(OSError):
            while os.read(0, 4096):
                pass
        self.ending.set()
        time.sleep(self._grace_s)
        os._exit(1)


class Heartbeat:
    """Tells the supervisor that the main loop goes round, and what there is to know about this process.

    Call `beat` from the loop itself, never from a thread of its own: a loop that is stuck must fall silent.
    """

    def __init__(self, context: "zmq.Context[zmq.Socket[bytes]]", endpoint: str, name: str) -> None:
        self._socket = context.socket(zmq.PUSH)
        self._socket.setsockopt(zmq.LINGER, 200)
        self._socket.setsockopt(zmq.SNDHWM, 64)
        connect_to(self._socket, endpoint)
        self._name, self._next = name, 0.0
        self._garbage = GarbageWatch()

    @property
    def due(self) -> bool:
        return time.monotonic() >= self._next

    def beat(self, *, ready: bool, facts: Mapping[str, Any] | None = None) -> None:
        """Send one beat. facts : small mapping of plain values, merged into what the supervisor knows of the child.

        The first ready beat finds the process warm: what it holds by then is taken out of the collector's way.
        """
        if ready:
            self._garbage.settle()
        self._next = time.monotonic() + HEARTBEAT_S
        message = {
            "name": self._name,
            "pid": os.getpid(),
            "ready": ready,
            "facts": dict(facts or {}),
            "garbage": self._garbage.facts(),
        }
        with contextlib.suppress(zmq.Again):
            self._socket.send(msgpack.packb(message), zmq.NOBLOCK)

    def close(self) -> None:
        self._garbage.close()
        self._socket.close()


class SlowLog:
    """Log lines at most once a second per cause, with a count of those left out."""

    def __init__(self) -> None:
        self._last: dict[str, float] = {}
        self._left_out: dict[str, int] = {}

    def warn(self, cause: str, text: str) -> None:
        now = time.monotonic()
        if now - self._last.get(cause, -1.0) < 1.0:
            self._left_out[cause] = self._left_out.get(cause, 0) + 1
            return
        self._last[cause] = now
        more = self._left_out.pop(cause, 0)
        _log.warning("%s%s", text, f" ({more} more of this kind not shown)" if more else "")


def new_start() -> str:
    """16 hex digits that name this start of this process."""
    return secrets.token_hex(8)


class _JsonLines(logging.Formatter):
    """One JSON object per line: time (RFC 3339 UTC), process, level, text, and the trace of an exception."""

    def __init__(self, process: str) -> None:
        super().__init__()
        self._process = process

    def format(self, record: logging.LogRecord) -> str:
        moment = datetime.fromtimestamp(record.created, UTC).isoformat(timespec="microseconds")
        line = {
            "time": moment.replace("+00:00", "Z"),
            "process": self._process,
            "level": record.levelname.lower(),
            "text": record.getMessage(),
        }
        if record.exc_info:
            line["trace"] = self.formatException(record.exc_info)
        return json.dumps(line, ensure_ascii=False)


def clock_name() -> str:
    """Names the host's monotonic clock: the boot it counts from. Two processes may compare times of one clock only."""
    try:
        return Path("/proc/sys/kernel/random/boot_id").read_text().strip()
    except OSError:
        return ""


def set_up_logging(name: str, form: LogFormat = "text") -> None:
    """Log lines to standard error: time, process, level, text."""
    logging.basicConfig(
        level=logging.INFO,
        stream=sys.stderr,
        format=f"%(asctime)s soundrose {name} %(levelname)s %(message)s",
        datefmt="%Y-%m-%dT%H:%M:%S%z",
        force=True,
    )
    if form == "json":
        for handler in logging.getLogger().handlers:
            handler.setFormatter(_JsonLines(name))


def set_up_child(orders: Orders) -> Lifeline:
    """Logging, one BLAS thread, lifeline: what comes first in every child."""
    set_up_logging(orders.name, orders.settings.log.format)
    threadpool_limits(1)  # small batched products: more threads were up to 700 times slower
    return Lifeline(orders.parent)
