"""core: what has changed between one published message and the next, as events for the log.

`health` and `status` say each second how things are; the log keeps only what became different. What was known last is
a plain value (`known`) that is kept in the log with the events, so that a new start of this process compares with it
and logs no change that was none. A message that was missed costs nothing but detail: the next one shows the sum.
"""

from collections.abc import Mapping
from typing import Any

from soundrose.store.items import NewEvent

__all__ = ["ChangeWatch"]

_NO_NEWS = "not judged"  #: a hydrophone not judged yet (after a start) has not changed
_QUIET = ("good",)  #: a first judgement worth no event
_FIRST_FEED = (None, "waiting")  #: as every service begins
_WHY_CHARACTERS = 500


class ChangeWatch:
    """Published messages in, events out.

    known : what the last watch knew (its `known`), or None: everything is new.
    """

    def __init__(self, known: Mapping[str, Any] | None = None) -> None:
        self._take(known or {})

    def _take(self, known: Mapping[str, Any]) -> None:
        self._array: str | None = known.get("array")
        self._channels: dict[str, str] = dict(known.get("channels", {}))
        self._service: dict[str, Any] = dict(known.get("service", {}))
        self._processes: dict[str, dict[str, Any]] = dict(known.get("processes", {}))
        self._feed: dict[str, Any] = dict(known.get("feed", {}))

    @property
    def known(self) -> dict[str, Any]:
        """Plain value (JSON) to make the next watch with."""
        return {
            "array": self._array,
            "channels": dict(self._channels),
            "service": dict(self._service),
            "processes": dict(self._processes),
            "feed": dict(self._feed),
        }

    def push(self, topic: str, header: Mapping[str, Any], host_ns: int) -> list[NewEvent]:
        """Events that a message makes. header : its map.  host_ns : host time now, ns since 1970 UTC.

        Other topics than `health` and `status` make none.
        """
        if header.get("array") != self._array:  # another array: nothing known of the old one says anything
            self._take({"array": header.get("array")})
        if topic == "health":
            return self._health(header)
        return self._status(header, host_ns) if topic == "status" else []

    def end(self, host_ns: int) -> list[NewEvent]:
        """The service ends in order."""
        if not self._service:
            return []
        self._service["ended"] = True
        return [_status("service-ended", host_ns, service_start=self._service["start"])]

    def _health(self, header: Mapping[str, Any]) -> list[NewEvent]:
        events = []
        for channel in header["channels"]:
            name, state = str(channel["i"]), str(channel["state"])
            before = self._channels.get(name)
            if state in (before, _NO_NEWS):
                continue
            self._channels[name] = state
            if before is None and state in _QUIET:
                continue
            payload = {
                "channel": channel["i"],
                "from": before,
                "to": state,
                "why": _short(channel.get("why")),
                "level_db": channel.get("level_db"),
            }
            events.append(NewEvent("health", header["t"], payload))
        return events

    def _status(self, header: Mapping[str, Any], host_ns: int) -> list[NewEvent]:
        events = self._service_events(header, host_ns)
        for process in header["processes"]:
            events += self._process_events(process, host_ns)
        return events + self._feed_events(header, host_ns)

    def _service_events(self, header: Mapping[str, Any], host_ns: int) -> list[NewEvent]:
        start = header["service_start"]
        if self._service.get("start") == start:
            self._service["ended"] = False
            return []
        previous = None
        if self._service:
            previous = "ended" if self._service["ended"] else "not ended in order"
        self._service = {"start": start, "ended": False}
        self._processes, self._feed = {}, {}  # counters and processes begin anew with the service
        return [_status("service-started", host_ns, service_start=start, previous=previous)]

    def _process_events(self, process: Mapping[str, Any], host_ns: int) -> list[NewEvent]:
        name = str(process["name"])
        now = {key: process.get(key) for key in ("state", "pid", "restarts")}
        before, self._processes[name] = self._processes.get(name), now
        again = before is not None and (now["restarts"] != before["restarts"] or _new_pid(before, now))
        was_up = before is not None and before["state"] == "up"
        events = []
        if was_up and (now["state"] != "up" or again):
            events.append(_status("process-down", host_ns, name=name, why=_short(process.get("why"))))
        if now["state"] == "up" and (not was_up or again):
            events.append(_status("process-up", host_ns, name=name, pid=now["pid"], restarts=now["restarts"]))
        return events

    def _feed_events(self, header: Mapping[str, Any], host_ns: int) -> list[NewEvent]:
        now = {key: header[key] for key in ("state", "run", "gaps", "lost_samples", "restarts")}
        before, self._feed = self._feed, now
        events = []
        if (run := before.get("run")) != now["run"]:
            if run is not None:
                events.append(_status("run-ended", host_ns, run=_short(run)))
            if now["run"] is not None:
                events.append(_status("run-begun", host_ns, run=_short(now["run"])))
        if (state := before.get("state")) != now["state"] and (state, now["state"]) != _FIRST_FEED:
            events.append(_status("feed", host_ns, **{"from": state, "to": now["state"]}))
        if (gaps := now["gaps"] - before.get("gaps", 0)) > 0:
            lost = now["lost_samples"] - before.get("lost_samples", 0)
            events.append(_status("gap", host_ns, gaps=gaps, lost_samples=lost, run=_short(now["run"])))
        if (restarts := now["restarts"] - before.get("restarts", 0)) > 0:
            events.append(_status("run-restarted", host_ns, restarts=restarts, run=_short(now["run"])))
        return events


def _status(what: str, host_ns: int, **more: Any) -> NewEvent:
    return NewEvent("status", host_ns, {"what": what, **more})


def _new_pid(before: Mapping[str, Any], now: Mapping[str, Any]) -> bool:
    return bool(before["pid"] is not None and now["pid"] is not None and before["pid"] != now["pid"])


def _short(text: Any) -> str | None:
    return None if text is None else str(text)[:_WHY_CHARACTERS]
