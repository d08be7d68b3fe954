"""process: the supervisor (`soundrose run`): starts the children, keeps them up, publishes `status`, ends in order."""

import json
import logging
import os
import signal
import tempfile
import time
from pathlib import Path
from typing import Any, TextIO

import msgpack
import zmq

from soundrose.child import Orders, SlowLog, new_start, set_up_logging
from soundrose.children import Child
from soundrose.errors import StartError
from soundrose.feed.intake import snapshot_facts
from soundrose.feed.record import SharedRecord, make_record_file
from soundrose.notify import Systemd
from soundrose.product.codec import Envelope
from soundrose.product.proxy import bind_or_explain
from soundrose.product.publisher import Publisher
from soundrose.settings_types import BandSettings, Settings
from soundrose.status import BandBook, FeedWatch, map_patience_s, status_header
from soundrose.worker import EXIT_START

__all__ = ["Supervisor", "run_service"]

_TICK_MS = 50
_BEATS = 1000  #: taken in one turn at most: who sends without end does not keep the loop from its other work
_BEAT_BYTES = 2**20
_STATUS_S = 1.0
_END_S = 3.5  #: contract: an orderly end within 5 s; the interpreter itself takes half a second to go
_PAUSE_S = 1.0  #: a turn longer than this: this process itself was held up, and no child is to blame
_READERS = ("contacts", "serve")  #: subscribe to what is published, so they start once its address is known
_GIVE_UP = 5  #: failures in a row of one child before the service was ever ready
_log = logging.getLogger("soundrose")


class Supervisor:
    """Owns the children, the shared record and the status topic. out : where the ready line goes."""

    def __init__(self, settings: Settings, out: TextIO) -> None:
        self._settings, self._out = settings, out
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._endpoints = _endpoints(settings)
        self._service_start = time.time_ns()
        self._record_fd = make_record_file()
        self._record = SharedRecord(self._record_fd)
        self._bands_here = [band for band in settings.bands if band.place == "here"]
        names = ["proxy", "ingest", *(f"band:{band.name}" for band in self._bands_here), "contacts", "serve"]
        self._children = {name: Child(name) for name in names}
        self._books = {band.name: BandBook() for band in settings.bands}
        self._elsewhere = {f"band:{band.name}": 0.0 for band in settings.bands if band.place == "elsewhere"}
        self._elsewhere_pids: dict[str, int] = {}
        self._watch, self._log = FeedWatch(), SlowLog()
        self._disconnects = self._disconnects_before = 0
        self._ending = False
        self._ready = self._published = False
        self._status_due = 0.0
        self._systemd = Systemd()
        self._turned = time.monotonic()
        self._control = self._context.socket(zmq.PULL)
        self._control.setsockopt(zmq.LINGER, 0)
        self._control.setsockopt(zmq.MAXMSGSIZE, _BEAT_BYTES)
        bind_or_explain(self._control, self._endpoints["control"], "stream.control")
        self._publisher = Publisher(
            self._context, self._endpoints["collect"], Envelope(settings.array.id, new_start()), largest=65536
        )

    def run(self) -> int:
        """Until SIGINT or SIGTERM; exit status 0 after an orderly end, 3 if the service cannot start here."""
        for number in (signal.SIGINT, signal.SIGTERM):
            signal.signal(number, self._end)
        code = 0
        try:
            while not self._ending and code == 0:
                self._start_due()
                self._take_beats()
                self._excuse_own_pause()
                code = self._check_children()
                self._publish_when_due()
                self._say_ready()
                self._systemd.watchdog()
        finally:
            self._systemd.stopping()
            self._end_children()
            self._publisher.close(0)  # the proxy has ended: nothing travels any more
            self._control.close()
            self._context.term()
            self._record.close()
            os.close(self._record_fd)
        return code

    def _end(self, *_: object) -> None:
        self._ending = True

    def _excuse_own_pause(self) -> None:
        """Beats that came while this process was held up are only being read now: do not count the pause."""
        now = time.monotonic()
        if now - self._turned > _PAUSE_S:
            for child in self._children.values():
                child.excuse()
        self._turned = now

    def _start_due(self) -> None:
        for child in self._children.values():
            if child.due and (child.name not in _READERS or self._published):
                inherit = (self._record_fd,) if child.name == "ingest" else ()
                child.start(self._orders(child.name), inherit)
                self._status_due = 0.0
                if child.pid is None:
                    _log.error("%s %s; trying again in %.0f s", child.name, child.why, child.start_s)

    def _orders(self, name: str) -> Orders:
        return Orders(
            name=name,
            settings=self._settings,
            endpoints=self._endpoints,
            record_fd=self._record_fd if name == "ingest" else -1,
            parent=os.getpid(),
            extra={"service_start": self._service_start} if name == "serve" else {},
        )

    def _take_beats(self) -> None:
        wait = _TICK_MS
        for _ in range(_BEATS):
            if not self._control.poll(wait):
                return
            wait = 0
            data = self._control.recv_multipart()[0]
            try:  # the socket is open to other hosts where a band is worked elsewhere
                self._take_beat(msgpack.unpackb(data))
            except (ValueError, TypeError, LookupError, AttributeError, ArithmeticError) as error:
                self._log.warn("beat", f"a message that is no beat came to stream.control: {error!r:.200}")

    def _take_beat(self, beat: dict[str, Any]) -> None:
        """Raises what reading a strange value may raise, for what is no beat."""
        name, pid, facts = beat["name"], beat["pid"], beat["facts"]
        if name in self._elsewhere:
            book = self._books[name.removeprefix("band:")]
            if self._elsewhere_pids.setdefault(name, pid) != pid:
                book.restarted()
                self._elsewhere_pids[name] = pid
            book.take(facts, time.monotonic())
            self._elsewhere[name] = time.monotonic()
        child = self._children.get(name)
        if child is None or pid != child.pid:
            return
        child.garbage = beat["garbage"]
        if child.hear(pid, beat["ready"], facts):
            _log.info("%s is up (pid %d)", name, pid)
            self._status_due = 0.0
        self._learn(child)

    def _learn(self, child: Child) -> None:
        """Endpoints with their ports filled in, counters, band figures."""
        self._published = self._published or "publish" in child.facts
        for key in ("feed", "publish", "http"):
            if key in child.facts:
                self._endpoints[key] = child.facts[key]
        if child.name == "ingest":
            self._disconnects = int(child.facts.get("disconnects", 0))
        if child.name.startswith("band:"):
            self._books[child.name.removeprefix("band:")].take(child.facts, time.monotonic())

    def _check_children(self) -> int:
        """Clear away what has ended; the exit status for the service, 0 to go on."""
        for child in self._children.values():
            status = child.exit_code
            why = child.check()
            if why is None:
                continue
            if not self._ready and status == EXIT_START:
                return EXIT_START
            self._status_due = 0.0
            if child.name.startswith("band:"):
                self._books[child.name.removeprefix("band:")].restarted()
            if child.name == "ingest":
                self._disconnects_before += self._disconnects
                self._disconnects = 0
            _log.error("%s %s; starting it again in %.0f s", child.name, why, child.start_s)
            if not self._ready and child.restarts + 1 >= _GIVE_UP:
                _log.error("%s has failed %d times before the service was ready; giving up", child.name, _GIVE_UP)
                return 1
        return 0

    def _publish_when_due(self) -> None:
        now = time.monotonic()
        if now < self._status_due:
            return
        self._status_due = now + _STATUS_S
        self._publisher.send_plain("status", self._status(now))

    def _status(self, now: float) -> dict[str, Any]:
        feed = snapshot_facts(self._record.read())
        feed["disconnects"] = self._disconnects_before + self._disconnects
        feed["log"] = self._children["contacts"].facts.get("log")
        state = self._watch.state(feed["run"], feed["blocks"], now)
        bands = {
            band.name: self._books[band.name].entry(
                up=self._band_is_up(band, now),
                running=state == "running",
                now=now,
                patience_s=map_patience_s(band, self._settings.feed.rate_hz),
            )
            for band in self._settings.bands
        }
        return status_header(
            state=state, service_start=self._service_start, feed=feed, processes=self._processes(now), bands=bands
        )

    def _band_is_up(self, band: BandSettings, now: float) -> bool:
        name = f"band:{band.name}"
        if name in self._elsewhere:
            return 0 < now - self._elsewhere[name] < 5.0
        return self._children[name].state == "up"

    def _processes(self, now: float) -> list[dict[str, Any]]:
        here = [
            {
                "name": child.name,
                "state": child.state,
                "pid": child.pid,
                "restarts": max(child.restarts, 0),
                "since": child.since_ns,
                "why": child.why,
                "garbage": child.garbage,
            }
            for child in self._children.values()
        ]
        elsewhere = [
            {
                "name": name,
                "state": "starting" if heard == 0.0 else "up" if now - heard < 5.0 else "down",
                "pid": None,
                "restarts": 0,
                "since": self._service_start,
                "why": None,
                "garbage": None,
            }
            for name, heard in self._elsewhere.items()
        ]
        return here + elsewhere

    def _say_ready(self) -> None:
        if self._ready or any(child.state != "up" for child in self._children.values()):
            return
        if not self._children["serve"].facts.get("sees_all", False):
            return
        self._ready = True
        line = {"ready": True, **{key: self._endpoints[key] for key in ("feed", "publish", "http")}}
        self._out.write(json.dumps(line) + "\n")
        self._out.flush()
        self._systemd.ready()
        _log.info("ready; the display is at %s", self._endpoints["http"])

    def _end_children(self) -> None:
        """The feed's end first, so that what was taken is worked off; then all others; then by force."""
        deadline = time.monotonic() + _END_S
        bands = [name for name in self._children if name.startswith("band:")]
        for names, share_s in ((["ingest"], 1.0), (bands, 1.5), (["contacts"], 1.5), (["serve", "proxy"], _END_S)):
            until = min(deadline, time.monotonic() + share_s)
            for name in names:
                self._children[name].let_go()
            while time.monotonic() < until and any(self._runs(name) for name in names):
                time.sleep(0.01)
        for child in self._children.values():
            child.kill()

    def _runs(self, name: str) -> bool:
        child = self._children[name]
        return child.pid is not None and child.exit_code is None


def _endpoints(settings: Settings) -> dict[str, str]:
    pid = str(os.getpid())
    inside = {
        "stream": settings.stream.bind,
        "collect": settings.stream.collect,
        "control": settings.stream.control,
        "commands": settings.stream.commands,
    }
    host = f"[{settings.serve.host}]" if ":" in settings.serve.host else settings.serve.host
    return {
        **{key: value.replace("{pid}", pid) for key, value in inside.items()},
        "feed": settings.feed.bind,
        "publish": settings.publish.bind,
        "http": f"http://{host}:{settings.serve.port}",
    }


def _check_store(path: str) -> None:
    """The store can be written. Raises StartError."""
    try:
        Path(path).mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=path):
            pass
    except OSError as error:
        raise StartError(
            f"store.path: cannot write to {path!r}: {error.strerror}. Make it writable or choose another store.path."
        ) from None


def run_service(settings: Settings, out: TextIO) -> int:
    """Run the whole service. Returns the exit status; raises StartError (exit status 3)."""
    set_up_logging("run", settings.log.format)
    for warning in settings.warnings:
        _log.warning("%s", warning)
    _check_store(settings.store.path)
    return Supervisor(settings, out).run()
