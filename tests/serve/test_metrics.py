"""Metrics: read by the Prometheus parser, named by its rules, bounded, and true."""

import asyncio
import os
import re
import time

import httpx
import pytest
from fastapi import FastAPI
from prometheus_client.parser import text_string_to_metric_families

from soundrose.feed.intake import snapshot_facts
from soundrose.serve.latest import Latest, Message
from soundrose.serve.metrics import add_metrics, process_figures
from soundrose.status import status_header

LOG = {"written": 5, "lost": 1, "waiting": 2, "deleted": 3, "bytes": 40960, "commit_s": 0.002, "problem": None}
NAME = re.compile(r"soundrose_[a-z0-9]+(_[a-z0-9]+)*")


def status(**more):
    processes = [
        {
            "name": "ingest",
            "state": "up",
            "pid": os.getpid(),
            "restarts": 2,
            "since": 1,
            "why": None,
            "garbage": {"pauses": 3, "total_s": 0.5, "longest_ms": 20.0},
        },
        {"name": "band:main", "state": "down", "pid": None, "restarts": 0, "since": 1, "why": None},
        {"name": "serve", "state": "up", "pid": 2**22 + 5, "restarts": 0, "since": 1, "why": None},
    ]
    band = {
        "load": 0.25, "latency_ms": {"p50": 5.0, "p99": None}, "maps": 7, "dropped_hops": 1, "gaps": 2, "stale": True,
        "kernel": "pairs",
    }  # fmt: skip
    feed = {**snapshot_facts(b""), "disconnects": 4, "log": LOG, **more}
    feed["dropped"] = {**feed["dropped"], "shape": 3}
    return status_header(
        state="running", service_start=1_500_000_000, feed=feed, processes=processes, bands={"main": band}
    )


def latest(**more):
    found = Latest()
    found.put(Message("status", status(**more), None, time.monotonic()))
    channels = [{"i": i, "state": state} for i, state in enumerate(["good", "good", "dead"])]
    found.put(Message("health", {"used": 2, "channels": channels}, None, 0.0))
    return found


def scrape(messages):
    app = FastAPI()
    add_metrics(app, messages)

    async def get() -> httpx.Response:
        async with httpx.AsyncClient(transport=httpx.ASGITransport(app), base_url="http://here") as client:
            return await client.get("/metrics")

    answer = asyncio.run(get())
    assert answer.headers["content-type"].startswith("text/plain; version=")
    families = {family.name: family for family in text_string_to_metric_families(answer.text)}
    samples = {
        (sample.name, tuple(sorted(sample.labels.items()))): sample.value
        for family in families.values()
        for sample in family.samples
    }
    return families, samples


def test_names_units_and_help_are_by_the_rules():
    """Prometheus, 'Metric and label naming': application prefix, base units, plural unit suffix, _total on counters."""
    families, samples = scrape(latest())
    assert len(families) > 30
    for name, family in families.items():
        assert NAME.fullmatch(name)
        assert family.documentation
        assert family.type in ("counter", "gauge")
        assert not re.search(r"_(ms|milliseconds|kb|mb|count)\b", name)
    counters = {name for name, family in families.items() if family.type == "counter"}
    assert {name for name, _ in samples if name.endswith("_total")} == {f"{name}_total" for name in counters}


@pytest.mark.parametrize(
    ("name", "labels", "value"),
    [
        ("soundrose_feed_state", {"state": "running"}, 1), ("soundrose_feed_state", {"state": "stalled"}, 0),
        ("soundrose_feed_dropped_total", {"reason": "shape"}, 3), ("soundrose_feed_disconnects_total", {}, 4),
        ("soundrose_service_start_time_seconds", {}, 1.5),
        ("soundrose_process_restarts_total", {"process": "ingest"}, 2),
        ("soundrose_process_state", {"process": "band:main", "state": "down"}, 1),
        ("soundrose_process_gc_pauses_total", {"process": "ingest"}, 3),
        ("soundrose_process_gc_longest_pause_seconds", {"process": "ingest"}, 0.02),
        ("soundrose_band_load_ratio", {"band": "main"}, 0.25), ("soundrose_band_stale", {"band": "main"}, 1),
        ("soundrose_band_latency_seconds", {"band": "main", "quantile": "0.5"}, 0.005),
        ("soundrose_log_events_written_total", {}, 5), ("soundrose_log_failing", {}, 0),
        ("soundrose_hydrophones", {"state": "good"}, 2), ("soundrose_hydrophones_used", {}, 2),
    ],
)  # fmt: skip
def test_figures_are_those_of_the_messages(name, labels, value):
    _, samples = scrape(latest())
    assert samples[name, tuple(sorted(labels.items()))] == value


def test_what_is_not_known_is_not_shown():
    _, samples = scrape(latest())
    assert not [key for key in samples if ("quantile", "0.99") in key[1]]
    assert not [key for key in samples if key[0].endswith("memory_bytes") and ("process", "band:main") in key[1]]
    assert not [key for key in samples if key[0].endswith("memory_bytes") and ("process", "serve") in key[1]]


def test_before_the_first_message_the_rest_is_still_there():
    _, samples = scrape(Latest())
    assert samples["soundrose_status_age_seconds", ()] == -1
    assert [key[0] for key in samples] == ["soundrose_build_info", "soundrose_status_age_seconds"]


@pytest.mark.parametrize("log", [None, {**LOG, "problem": "cannot be written"}])
def test_the_log_failing_or_not_heard_of(log):
    _, samples = scrape(latest(log=log))
    assert samples.get(("soundrose_log_failing", ())) == (None if log is None else 1)


def test_process_figures_are_those_of_the_system():
    """Against the clock and the memory figures that the C library and /proc/self/statm give."""
    before = time.process_time()
    found = process_figures(os.getpid())
    after = time.process_time()
    assert before - 0.02 <= found["cpu_seconds"] <= after + 0.02  # the system counts in hundredths
    with open("/proc/self/statm") as source:
        pages = int(source.read().split()[1])
    assert found["resident_bytes"] == pytest.approx(pages * os.sysconf("SC_PAGE_SIZE"), rel=0.1)
    assert found["threads"] >= 1
    assert process_figures(2**22 + 5) is None
