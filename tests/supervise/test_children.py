"""One child: back-off, and the reasons given for its end. Real processes."""

import os
import subprocess
import sys
import time

import pytest

from soundrose import children
from soundrose.children import Child, back_off_s


def test_back_off_is_at_once_then_doubles_up_to_half_a_minute():
    assert [back_off_s(n) for n in range(9)] == [0.0, 0.0, 1.0, 2.0, 4.0, 8.0, 16.0, 30.0, 30.0]


class Sheet:
    """Orders that the child below does not read."""

    def pack(self) -> bytes:
        return b""


@pytest.fixture
def spawn(monkeypatch):
    """A child that runs a line of Python in place of a process of the service."""
    started = []
    real = subprocess.Popen

    def start(line: str) -> Child:
        monkeypatch.setattr(
            children.subprocess, "Popen", lambda command, **keys: real([sys.executable, "-c", line], **keys)
        )
        child = Child("test")
        child.start(Sheet())
        started.append(child)
        return child

    yield start
    for child in started:
        child.kill()
        child.let_go()


def wait_for(condition, seconds: float = 20.0):
    end = time.monotonic() + seconds
    while (value := condition()) is None:
        assert time.monotonic() < end, "nothing happened"
        time.sleep(0.01)
    return value


def test_child_that_ends_is_down_with_its_status_and_due_at_once(spawn):
    child = spawn("raise SystemExit(7)")
    assert "status 7" in wait_for(child.check)
    assert (child.state, child.due, child.pid) == ("down", True, None)


def test_child_that_is_killed_is_down_with_the_signal(spawn):
    child = spawn("import os, signal; os.kill(os.getpid(), signal.SIGKILL)")
    assert "SIGKILL" in wait_for(child.check)


def test_second_failure_in_a_row_waits(spawn):
    child = spawn("raise SystemExit(1)")
    wait_for(child.check)
    child.start(Sheet())
    wait_for(child.check)
    assert not child.due
    assert 0 < child.start_s <= 1.0
    assert "2 in a row" in child.why


def test_silent_child_is_ended_and_an_excused_one_is_not(spawn, monkeypatch):
    child = spawn("import time; time.sleep(60)")
    assert child.hear(child.pid, ready=True, facts={})
    monkeypatch.setattr(children, "STUCK_S", 0.2)
    end = time.monotonic() + 0.4
    while time.monotonic() < end:
        child.excuse()
        assert child.check() is None
    assert "no progress" in wait_for(child.check)


def test_beat_of_another_pid_is_not_taken(spawn):
    child = spawn("import time; time.sleep(60)")
    assert not child.hear(child.pid + 1, ready=True, facts={})
    assert child.state == "starting"


def test_signal_without_a_name_is_told_by_its_number(spawn):
    child = spawn("import os; os.kill(os.getpid(), 40)")
    assert wait_for(child.check) == "ended by signal 40"


def test_start_that_the_system_refuses_is_a_failed_start(monkeypatch):
    def refuse(*_, **__):
        raise BlockingIOError(11, "Resource temporarily unavailable")

    monkeypatch.setattr(children.subprocess, "Popen", refuse)
    child = Child("test")
    child.start(Sheet())
    assert (child.state, child.pid, child.due) == ("down", None, True)
    child.start(Sheet())
    assert not child.due
    assert child.why == "cannot be started: Resource temporarily unavailable; 2 in a row"


def test_killed_process_that_a_disk_holds_up_is_not_waited_for(spawn, monkeypatch):
    child = spawn("import time; time.sleep(60)")
    process = child._process
    monkeypatch.setattr(process, "kill", lambda: None)  # as if it were not to be interrupted
    began = time.monotonic()
    child.kill()
    assert time.monotonic() - began < 20
    assert process.poll() is None
    monkeypatch.undo()


def test_fifty_restarts_leave_no_descriptor_and_no_zombie(spawn):
    child = spawn("raise SystemExit(1)")
    wait_for(child.check)
    before = sorted(os.listdir("/proc/self/fd"))
    for _ in range(50):
        child.start(Sheet())
        wait_for(child.check)
    assert sorted(os.listdir("/proc/self/fd")) == before
    with pytest.raises(ChildProcessError):
        os.waitpid(-1, os.WNOHANG)
