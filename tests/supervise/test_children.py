"""One child: back-off, and the reasons given for its end. Real processes."""

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
