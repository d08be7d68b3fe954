"""The event log after SIGKILL to everything; the long form is `python tests/process/kill_everything.py`."""

from pathlib import Path

from kill_everything import kill_again_and_again


def test_log_is_whole_and_answered_notes_are_there_after_kills_of_everything(tmp_path: Path) -> None:
    counts = kill_again_and_again(tmp_path, 3, 7)
    assert counts["notes"] >= counts["answered"] > 0
