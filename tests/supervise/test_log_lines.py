"""Lines on standard error: text or JSON, and no more than one a second of a kind."""

import json
import logging
import sys
from datetime import datetime

import pytest

from soundrose import child
from soundrose.child import SlowLog, set_up_logging


@pytest.fixture(autouse=True)
def _as_before():
    root = logging.getLogger()
    handlers, level = list(root.handlers), root.level
    yield
    root.handlers[:] = handlers
    root.setLevel(level)


def test_json_lines_hold_time_process_level_and_text(capsys):
    set_up_logging("band:low", "json")
    logging.getLogger("soundrose").warning("level %d dB re 1 µPa\nand a second line", 90)
    [line] = capsys.readouterr().err.splitlines()
    found = json.loads(line)
    assert datetime.fromisoformat(found.pop("time")).utcoffset().total_seconds() == 0
    assert found == {"process": "band:low", "level": "warning", "text": "level 90 dB re 1 µPa\nand a second line"}


def test_json_lines_hold_the_trace_of_a_fault(capsys):
    set_up_logging("serve", "json")
    try:
        raise ValueError("the fault")
    except ValueError:
        logging.getLogger("anything").exception("it broke")
    found = json.loads(capsys.readouterr().err)
    assert (found["level"], found["text"]) == ("error", "it broke")
    assert "ValueError: the fault" in found["trace"]


def test_text_lines_are_the_default(capsys):
    set_up_logging("ingest")
    logging.getLogger("soundrose").info("here")
    assert capsys.readouterr().err.endswith("soundrose ingest INFO here\n")
    assert sys.stderr is not None


def test_a_cause_is_logged_once_a_second_with_a_count_of_the_rest(monkeypatch, caplog):
    now = [100.0]
    monkeypatch.setattr(child.time, "monotonic", lambda: now[0])
    slow = SlowLog()
    for _ in range(5):
        slow.warn("shape", "bad shape")
    slow.warn("size", "bad size")
    now[0] = 101.0
    slow.warn("shape", "bad shape again")
    now[0] = 102.5
    slow.warn("shape", "and again")
    assert caplog.messages == ["bad shape", "bad size", "bad shape again (4 more of this kind not shown)", "and again"]
