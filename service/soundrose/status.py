"""core: the status message, put together from what the supervisor knows."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from soundrose.settings_types import BandSettings

__all__ = ["BandBook", "FeedWatch", "map_patience_s", "status_header"]

STALLED_S = 2.0  #: contract: no samples accepted for this long of host time
_COUNTED = ("maps", "dropped_hops", "gaps")


def map_patience_s(band: BandSettings, rate_hz: float) -> float:
    """Seconds without a map after which a band is stale: four frames or two maps, but not less than 2 s."""
    every_s = 1 / band.map_rate_hz if band.map_rate_hz else 0.0
    return max(2.0, 4 * band.frame / rate_hz, 2 * every_s)


@dataclass(slots=True)
class FeedWatch:
    """Tells waiting, running and stalled apart from a count that grows and a run that is there or not."""

    _blocks: int = -1
    _changed: float = 0.0

    def state(self, run: str | None, blocks: int, now: float) -> str:
        """now : seconds of any monotonic clock."""
        if blocks != self._blocks:
            self._blocks, self._changed = blocks, now
        if run is None:
            return "waiting"
        return "stalled" if now - self._changed > STALLED_S else "running"


@dataclass(slots=True)
class BandBook:
    """One band's figures over restarts of its process: counters go on, the rest is the newest."""

    facts: dict[str, Any] = field(default_factory=dict)
    _before: dict[str, int] = field(default_factory=lambda: dict.fromkeys(_COUNTED, 0))
    _last: dict[str, int] = field(default_factory=lambda: dict.fromkeys(_COUNTED, 0))
    _maps_changed: float = 0.0
    _running_since: float | None = None

    def take(self, facts: Mapping[str, Any], now: float) -> None:
        """Facts of a beat of the process that runs now. ValueError, TypeError, KeyError: they are none."""
        if not facts:
            return
        last = {key: int(facts[key]) for key in _COUNTED}
        latency = {key: None if (ms := facts["latency_ms"][key]) is None else float(ms) for key in ("p50", "p99")}
        self.facts = {"load": float(facts["load"]), "latency_ms": latency, "kernel": str(facts["kernel"])}
        if last["maps"] != self._last["maps"]:
            self._maps_changed = now
        self._last = last

    def restarted(self) -> None:
        """A new process counts from 0."""
        for key in _COUNTED:
            self._before[key] += self._last[key]
            self._last[key] = 0

    def entry(self, *, up: bool, running: bool, now: float, patience_s: float) -> dict[str, Any]:
        """The band's entry in the status message; `stale`: the feed runs, has done so for `patience_s`, and no
        map has come for as long."""
        if not running:
            self._running_since = None
        elif self._running_since is None:
            self._running_since = now
        counted = {key: self._before[key] + self._last[key] for key in _COUNTED}
        since = max(self._maps_changed, now if self._running_since is None else self._running_since)
        silent = now - since > patience_s
        return {
            "load": float(self.facts.get("load", 0.0)),
            "latency_ms": self.facts.get("latency_ms", {"p50": None, "p99": None}),
            **counted,
            "stale": not up or (running and silent),
            "kernel": self.facts.get("kernel"),
        }


def status_header(
    *,
    state: str,
    service_start: int,
    feed: Mapping[str, Any],
    processes: Sequence[Mapping[str, Any]],
    bands: Mapping[str, Mapping[str, Any]],
) -> dict[str, Any]:
    """The status message but for the envelope. feed : run, next, the counters, disconnects."""
    loads = [band["load"] for band in bands.values()]
    slowest = max(
        (band["latency_ms"] for band in bands.values()),
        key=lambda latency: latency["p99"] if latency["p99"] is not None else -1.0,
        default={"p50": None, "p99": None},
    )
    return {
        "state": state,
        "service_start": service_start,
        **feed,
        "processes": list(processes),
        "bands": dict(bands),
        "load": max(loads, default=0.0),
        "latency_ms": dict(slowest),
    }
