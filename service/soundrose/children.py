"""process: one child process of the supervisor: start, judge by its beats, restart with back-off, end."""

import contextlib
import os
import signal
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from typing import Any, Literal

from soundrose.child import Orders

__all__ = ["STUCK_S", "Child", "ChildState", "back_off_s"]

ChildState = Literal["starting", "up", "down"]

STUCK_S = 2.0  #: no beat for this long after the first: the child is stuck, and is ended and started anew
START_S = 60.0  #: a child that has not sent its first ready beat by then is started anew
_STEADY_S = 10.0  #: up this long: the next failure is a first one again
_BACK_OFF_MOST_S = 30.0
_REAP_S = 0.5  #: a killed process that is held up by a disk may stay longer; nobody waits for it


def back_off_s(failures: int) -> float:
    """Wait before start number `failures` in a row that failed: at once, then 1, 2, 4 ... 30 s."""
    return 0.0 if failures <= 1 else min(2.0 ** (failures - 2), _BACK_OFF_MOST_S)


class Child:
    """A process `python -m soundrose child N`: its orders in a memory file, its lifeline on standard input."""

    def __init__(self, name: str) -> None:
        self.name = name
        self.state: ChildState = "down"
        self.since_ns = time.time_ns()
        self.restarts = -1  # the first start is none
        self.why: str | None = None  # of its last end; None while all is well
        self.facts: dict[str, Any] = {}
        self.garbage: dict[str, Any] | None = None  # the collector's pauses in the process that runs now
        self._process: subprocess.Popen[bytes] | None = None
        self._failures = 0
        self._start_at = 0.0
        self._started = self._heard = self._up_since = 0.0

    @property
    def pid(self) -> int | None:
        return None if self._process is None else self._process.pid

    @property
    def due(self) -> bool:
        """It is down and its wait is over."""
        return self._process is None and time.monotonic() >= self._start_at

    @property
    def start_s(self) -> float:
        """Seconds until it may start, 0 if it runs."""
        return 0.0 if self._process is not None else max(0.0, self._start_at - time.monotonic())

    def start(self, orders: Orders, inherit: Sequence[int] = ()) -> None:
        """Start the process; it inherits the descriptors named besides its orders.

        Where the system has no room for a process at the moment, that is a start that failed: `why` says so.
        """
        self.restarts += 1
        self._started = self._heard = time.monotonic()
        try:
            self._process = self._popen(orders, inherit)
        except OSError as error:
            self._set_back(self._started, f"cannot be started: {error.strerror}")
            return
        self._set("starting")

    def _popen(self, orders: Orders, inherit: Sequence[int]) -> "subprocess.Popen[bytes]":
        sheet = os.memfd_create(f"soundrose-{self.name}")
        try:
            os.write(sheet, orders.pack())
            return subprocess.Popen(
                [sys.executable, "-m", "soundrose", "child", str(sheet)],
                stdin=subprocess.PIPE,
                stdout=sys.stderr.fileno(),  # standard output belongs to the ready line
                env=_environment(os.environ),
                pass_fds=(sheet, *inherit),
                start_new_session=True,  # control-c in a terminal reaches the supervisor alone
            )
        finally:
            os.close(sheet)

    def hear(self, pid: int, ready: bool, facts: Mapping[str, Any]) -> bool:
        """Take a beat; True if it brought the child up."""
        if self._process is None or pid != self._process.pid:
            return False
        self._heard = time.monotonic()
        self.facts = dict(facts)
        if ready and self.state == "starting":
            self._up_since = self._heard
            self._set("up")
            return True
        return False

    def check(self) -> str | None:
        """Why it is down as of now (it is cleared away and its next start is set), or None if nothing has happened."""
        if self._process is None:
            return None
        code = self._process.poll()
        now = time.monotonic()
        if code is None:
            silent = now - self._heard
            if self.state == "up" and silent > STUCK_S:
                why = f"no progress for {silent:.1f} s"
            elif self.state == "starting" and now - self._started > START_S:
                why = f"not ready after {START_S:.0f} s"
            else:
                return None
            self.kill()
        else:
            why = f"ended by signal {_signal_name(-code)}" if code < 0 else f"ended with status {code}"
        self._clear(now, why)
        return why

    def excuse(self) -> None:
        """The supervisor was not listening until now: count silence from here."""
        self._heard = time.monotonic()

    @property
    def exit_code(self) -> int | None:
        return None if self._process is None else self._process.poll()

    def let_go(self) -> None:
        """Ask it to end: its lifeline closes."""
        if self._process is not None and self._process.stdin is not None:
            with contextlib.suppress(OSError):
                self._process.stdin.close()

    def kill(self) -> None:
        """End it now, stopped or not, and take its exit status if it has one in time."""
        if self._process is None:
            return
        with contextlib.suppress(ProcessLookupError):
            self._process.kill()
        with contextlib.suppress(subprocess.TimeoutExpired):
            self._process.wait(_REAP_S)

    def forget(self) -> None:
        """It has ended."""
        self._process, self.garbage = None, None
        self._set("down")

    def _clear(self, now: float, why: str) -> None:
        self.let_go()
        if self.state == "up" and now - self._up_since > _STEADY_S:
            self._failures = 0
        self.forget()
        self._set_back(now, why)

    def _set_back(self, now: float, why: str) -> None:
        self._failures += 1
        self._start_at = now + back_off_s(self._failures)
        self.why = f"{why}; {self._failures} in a row" if self._failures > 1 else why

    def _set(self, state: ChildState) -> None:
        self.state = state
        self.since_ns = time.time_ns()


def _signal_name(number: int) -> str:
    """SIGKILL and the like; most real-time signals have no name."""
    try:
        return signal.Signals(number).name
    except ValueError:
        return str(number)


def _environment(own: Mapping[str, str]) -> dict[str, str]:
    """One BLAS thread in every child, whatever the caller's environment says."""
    threads = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")
    return {**own, **dict.fromkeys(threads, "1"), "PYTHONUNBUFFERED": "1"}
