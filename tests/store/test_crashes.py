"""Short forms of kills.py and crash_images.py, and that the latter can fail."""

import random

import crash_images
import kills
import pytest


def test_a_killed_writer_loses_at_most_its_last_second():
    assert len(kills.run(20, seed=7)) == 20


def test_crash_images_open_whole_with_everything_committed():
    assert crash_images.run(20, seed=7)["images"] == 20


def test_images_without_what_was_synced_are_told(tmp_path):
    """The check is one: a disk that lies about syncs loses committed events, and that is seen."""
    chance = random.Random(3)
    (tmp_path / "log").mkdir()
    recording = crash_images.record(tmp_path / "log", chance)
    lying = [action for action in recording.actions if action[0] != "sync" or not action[1].endswith("-wal")]
    begun = lying.index(("committed", "", 0, b""))
    seen = 0
    for number in range(20):
        folder = tmp_path / f"image{number}"
        folder.mkdir()
        point = chance.randrange(begun + 1, len(lying))
        committed = crash_images.image(crash_images.Recording(lying), point, folder, chance)
        try:
            crash_images.check(folder, committed)
        except AssertionError:
            seen += 1
    assert seen >= 5


@pytest.mark.parametrize("fate", [0, 1])
def test_torn_writes_are_parts_of_the_write(fate):
    chance = random.Random(fate)
    for _ in range(50):
        for where, piece in crash_images._torn(1000, bytes(range(256)) * 8, chance):
            assert piece == (bytes(range(256)) * 8)[where - 1000 : where - 1000 + len(piece)]
