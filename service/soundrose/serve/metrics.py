"""process: figures of the whole service as Prometheus text: from the newest status, from /proc, and serve's own."""

import os
import time
from collections.abc import Iterable, Iterator, Mapping
from typing import Any

from fastapi import FastAPI, Response
from prometheus_client import CONTENT_TYPE_LATEST, CollectorRegistry, generate_latest
from prometheus_client.core import CounterMetricFamily, GaugeMetricFamily, Metric
from prometheus_client.registry import Collector

from soundrose._version import __version__
from soundrose.serve.latest import Latest

__all__ = ["ServiceCollector", "add_metrics", "process_figures"]

_PAGE = os.sysconf("SC_PAGE_SIZE")
_TICKS = os.sysconf("SC_CLK_TCK")
_STATES = ("waiting", "running", "stalled")
_PROCESS_STATES = ("up", "starting", "down")
#: counters of the status message and what they say
_FEED = {
    "blocks": "Blocks accepted.",
    "samples": "Sample instants accepted (not times channels).",
    "gaps": "Gaps in the sample count.",
    "lost_samples": "Sample instants lost in gaps.",
    "trimmed_samples": "Sample instants trimmed off overlapping blocks.",
    "unused_samples": "Sample instants that filled no frame.",
    "restarts": "Runs that began again under their own name.",
    "clock_jumps": "Steps of block time against the sample count.",
    "late": "Notes that came after the time they act from.",
    "disconnects": "Connections of sources that ended.",
}


def process_figures(pid: int) -> dict[str, float] | None:
    """Resident bytes, processor seconds and threads of a process; None if it is not there."""
    try:
        with open(f"/proc/{pid}/stat", encoding="ascii", errors="replace") as source:
            fields = source.read().rpartition(")")[2].split()
    except OSError:
        return None
    return {
        "resident_bytes": float(int(fields[21]) * _PAGE),
        "cpu_seconds": (int(fields[11]) + int(fields[12])) / _TICKS,
        "threads": float(fields[17]),
    }


class ServiceCollector(Collector):
    """Metrics made when they are asked for. Labels come from the settings alone, so their number is bounded."""

    def __init__(self, latest: Latest, supervisor_pid: int) -> None:
        self._latest, self._supervisor_pid = latest, supervisor_pid

    def collect(self) -> Iterator[Metric]:
        yield _labelled("soundrose_build_info", "Version, in a label.", ["version"], [([__version__], 1.0)])
        status = self._latest.get("status")
        yield GaugeMetricFamily(
            "soundrose_status_age_seconds",
            "Time since the newest status message; -1 before the first.",
            value=-1.0 if status is None else max(0.0, time.monotonic() - status.heard_s),
        )
        if status is not None:
            yield from _feed(status.header)
            yield from _processes(status.header["processes"], self._supervisor_pid)
            yield from _bands(status.header["bands"])
            yield from _log(status.header.get("log"))
        yield from _health(self._latest)


def add_metrics(app: FastAPI, latest: Latest, *own: Collector) -> None:
    """Add `GET /metrics`. own : collectors of serve itself (clients, requests)."""
    registry = CollectorRegistry(auto_describe=False)
    registry.register(ServiceCollector(latest, os.getppid()))
    for collector in own:
        registry.register(collector)

    @app.get(
        "/metrics",
        summary="Figures of the service, Prometheus text",
        response_class=Response,
        responses={200: {"content": {"text/plain": {"example": "soundrose_feed_blocks_total 1800.0\n"}}}},
    )
    def metrics() -> Response:
        return Response(generate_latest(registry), media_type=CONTENT_TYPE_LATEST)


def _labelled(name: str, text: str, labels: list[str], rows: Iterable[tuple[list[str], float]]) -> Metric:
    kind = CounterMetricFamily if name.endswith("_total") else GaugeMetricFamily
    family = kind(name, text, labels=labels)
    for values, value in rows:
        family.add_metric(values, value)
    return family


def _one(name: str, text: str, value: float) -> Metric:
    return _labelled(name, text, [], [([], value)])


def _feed(status: Mapping[str, Any]) -> Iterator[Metric]:
    yield _one(
        "soundrose_service_start_time_seconds", "Start of the service, host time.", status["service_start"] / 1e9
    )
    yield _labelled(
        "soundrose_feed_state", "1 for the state the feed is in.", ["state"],
        [([state], float(state == status["state"])) for state in _STATES],
    )  # fmt: skip
    for key, text in _FEED.items():
        if key in status:
            yield _one(f"soundrose_feed_{key}_total", text, status[key])
    yield _labelled(
        "soundrose_feed_dropped_total", "Feed messages dropped, by reason.", ["reason"],
        [([reason], count) for reason, count in sorted(status["dropped"].items())],
    )  # fmt: skip


def _processes(processes: Iterable[Mapping[str, Any]], supervisor_pid: int) -> Iterator[Metric]:
    listed = list(processes)
    yield _labelled(
        "soundrose_process_state", "1 for the state a process is in.", ["process", "state"],
        [([item["name"], state], float(state == item["state"])) for item in listed for state in _PROCESS_STATES],
    )  # fmt: skip
    yield _labelled(
        "soundrose_process_restarts_total", "Starts of a process after its first.", ["process"],
        [([item["name"]], item["restarts"]) for item in listed],
    )  # fmt: skip
    collected = [(item["name"], item["garbage"]) for item in listed if item.get("garbage")]
    yield _labelled(
        "soundrose_process_gc_pauses_total", "Pauses of the garbage collector since the process was warm.",
        ["process"], [([process], found["pauses"]) for process, found in collected],
    )  # fmt: skip
    yield _labelled(
        "soundrose_process_gc_pause_seconds_total", "Time in them.", ["process"],
        [([process], found["total_s"]) for process, found in collected],
    )  # fmt: skip
    yield _labelled(
        "soundrose_process_gc_longest_pause_seconds", "The longest of them.", ["process"],
        [([process], found["longest_ms"] / 1000) for process, found in collected],
    )  # fmt: skip
    pids = [("run", supervisor_pid), *((item["name"], item["pid"]) for item in listed if item["pid"] is not None)]
    figures = [(name, found) for name, pid in pids if (found := process_figures(pid)) is not None]
    for key, name, text in (
        ("resident_bytes", "soundrose_process_resident_memory_bytes", "Resident memory."),
        ("cpu_seconds", "soundrose_process_cpu_seconds_total", "Processor time, user and system."),
        ("threads", "soundrose_process_threads", "Threads."),
    ):
        yield _labelled(name, text, ["process"], [([process], found[key]) for process, found in figures])


def _bands(bands: Mapping[str, Mapping[str, Any]]) -> Iterator[Metric]:
    def of(name: str, text: str, key: str) -> Metric:
        return _labelled(name, text, ["band"], [([band], float(entry[key])) for band, entry in bands.items()])

    yield of("soundrose_band_load_ratio", "Processing time over real time.", "load")
    yield of("soundrose_band_maps_total", "Maps published.", "maps")
    yield of("soundrose_band_dropped_hops_total", "Hops a band missed because it had fallen behind.", "dropped_hops")
    yield of("soundrose_band_gaps_total", "Gaps a band saw, hops it missed among them.", "gaps")
    yield of("soundrose_band_stale", "1 while the feed runs and no map comes.", "stale")
    yield _labelled(
        "soundrose_band_latency_seconds",
        "Receipt of a frame's last sample to the send of its map, over the last maps.",
        ["band", "quantile"],
        [
            ([band, quantile], entry["latency_ms"][key] / 1000)
            for band, entry in bands.items()
            for key, quantile in (("p50", "0.5"), ("p99", "0.99"))
            if entry["latency_ms"][key] is not None
        ],
    )


def _log(figures: Mapping[str, Any] | None) -> Iterator[Metric]:
    if figures is None:
        return
    yield _one("soundrose_log_events_written_total", "Events written since contacts started.", figures["written"])
    yield _one("soundrose_log_events_lost_total", "Events for which there was no room.", figures["lost"])
    yield _one("soundrose_log_events_deleted_total", "Events deleted by retention.", figures["deleted"])
    yield _one("soundrose_log_events_waiting", "Events not yet on the disk.", figures["waiting"])
    yield _one("soundrose_log_size_bytes", "Size of the event log.", figures["bytes"])
    yield _one("soundrose_log_slowest_commit_seconds", "Longest commit since contacts started.", figures["commit_s"])
    yield _one("soundrose_log_failing", "1 while the log cannot be written.", float(figures["problem"] is not None))


def _health(latest: Latest) -> Iterator[Metric]:
    health = latest.get("health")
    if health is None:
        return
    states: dict[str, int] = {}
    for channel in health.header["channels"]:
        states[channel["state"]] = states.get(channel["state"], 0) + 1
    yield _one("soundrose_hydrophones_used", "Hydrophones in use.", health.header["used"])
    yield _labelled(
        "soundrose_hydrophones", "Hydrophones by state.", ["state"],
        [([state], count) for state, count in sorted(states.items())],
    )  # fmt: skip
