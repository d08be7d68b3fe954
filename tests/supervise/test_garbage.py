"""The collector's pauses are measured, and what was there at the start is out of its way."""

import gc

import pytest

from soundrose.garbage import GarbageWatch


@pytest.fixture
def watch():
    watch = GarbageWatch()
    yield watch
    watch.close()
    gc.unfreeze()


def test_pauses_are_counted_and_measured(watch):
    watch.settle()
    before = watch.facts()
    gc.collect()
    after = watch.facts()
    assert after["pauses"] == before["pauses"] + 1
    assert after["total_s"] > before["total_s"]
    assert after["longest_ms"] > 0


def test_settling_takes_what_is_there_out_of_the_collectors_way(watch):
    kept = [[number] for number in range(10_000)]
    before = len(gc.get_objects())
    watch.settle()
    assert gc.get_freeze_count() >= 10_000
    assert len(gc.get_objects()) < before - 9_000
    frozen = gc.get_freeze_count()
    watch.settle()
    assert gc.get_freeze_count() == frozen
    assert len(kept) == 10_000


def test_cycles_made_later_are_still_collected(watch):
    watch.settle()
    loop = []
    loop.append(loop)
    del loop
    assert gc.collect() >= 1


def test_closed_watch_counts_no_more(watch):
    watch.close()
    gc.collect()
    assert watch.pauses == 0
    gc.callbacks.append(watch._called)  # the fixture takes it out again
