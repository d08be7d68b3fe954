"""The status message: states of the feed, figures of bands over restarts."""

import pytest

from soundrose.status import BandBook, FeedWatch, status_header


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
    assert book.entry(up=up, running=running, now=100.0 + silent_s, patience_s=2.0)["stale"] is stale


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
