"""The status message: states of the feed, figures of bands over restarts."""

from dataclasses import replace

import pytest

from soundrose.settings_types import BandSettings
from soundrose.status import BandBook, FeedWatch, map_patience_s, status_header


def facts(maps: int, dropped: int = 0, gaps: int = 0, p99: float | None = 9.0) -> dict:
    return {
        "load": 0.1,
        "latency_ms": {"p50": 5.0, "p99": p99},
        "maps": maps,
        "dropped_hops": dropped,
        "gaps": gaps,
        "kernel": "pairs",
    }


def test_feed_is_waiting_running_and_stalled_after_two_seconds():
    watch = FeedWatch()
    assert watch.state(None, 0, 0.0) == "waiting"
    assert watch.state("a", 1, 10.0) == "running"
    assert watch.state("a", 1, 11.9) == "running"
    assert watch.state("a", 1, 12.1) == "stalled"
    assert watch.state("a", 2, 12.2) == "running"
    assert watch.state(None, 2, 12.3) == "waiting"


def test_band_counters_go_on_over_a_restart_of_its_process():
    book = BandBook()
    book.take(facts(100, dropped=3, gaps=1), 0.0)
    book.restarted()
    book.take(facts(5, dropped=1), 1.0)
    entry = book.entry(up=True, running=True, now=1.0, patience_s=2.0)
    assert (entry["maps"], entry["dropped_hops"], entry["gaps"]) == (105, 4, 1)


@pytest.mark.parametrize(
    ("up", "running", "silent_s", "stale"),
    [(True, True, 1.0, False), (True, True, 3.0, True), (True, False, 3.0, False), (False, False, 0.0, True)],
)
def test_band_is_stale_when_it_is_down_or_silent_while_the_feed_runs(up, running, silent_s, stale):
    book = BandBook()
    book.take(facts(1), 100.0)
    book.entry(up=up, running=running, now=100.0, patience_s=2.0)
    assert book.entry(up=up, running=running, now=100.0 + silent_s, patience_s=2.0)["stale"] is stale


def test_band_is_not_stale_because_the_feed_was_away():
    book = BandBook()
    book.take(facts(1), 100.0)
    book.entry(up=True, running=False, now=200.0, patience_s=2.0)
    assert not book.entry(up=True, running=True, now=300.0, patience_s=2.0)["stale"]  # no map can be there yet
    assert not book.entry(up=True, running=True, now=301.0, patience_s=2.0)["stale"]
    assert book.entry(up=True, running=True, now=303.0, patience_s=2.0)["stale"]


def test_patience_with_a_band_follows_its_frames_and_the_rate_of_its_maps():
    band = BandSettings("a", (10.0, 400.0), 64, 9, (0, 1))
    assert map_patience_s(band, 1000.0) == 2.0
    assert map_patience_s(replace(band, frame=4096), 1000.0) == 4 * 4.096
    assert map_patience_s(replace(band, map_rate_hz=0.1), 1000.0) == 20.0


def test_load_and_latency_at_the_top_are_those_of_the_worst_band():
    fast, slow, silent = BandBook(), BandBook(), BandBook()
    fast.take(facts(1, p99=2.0), 0.0)
    slow.take({**facts(1, p99=40.0), "load": 0.7}, 0.0)
    silent.take(facts(0, p99=None), 0.0)
    bands = {
        name: book.entry(up=True, running=True, now=0.0, patience_s=2.0)
        for name, book in (("fast", fast), ("slow", slow), ("silent", silent))
    }
    header = status_header(state="running", service_start=1, feed={"blocks": 7}, processes=[], bands=bands)
    assert header["load"] == 0.7
    assert header["latency_ms"] == {"p50": 5.0, "p99": 40.0}
    assert header["blocks"] == 7
