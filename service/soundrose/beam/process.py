"""process: one band: takes hops by credit, forms beams, publishes maps."""

import time
from collections import deque
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import zmq
from zmq.utils.monitor import recv_monitor_message

from soundrose.beam.stage import BandStage
from soundrose.child import HEARTBEAT_S, Heartbeat, Orders, SlowLog, clock_name, new_start, set_up_child
from soundrose.errors import WireError
from soundrose.feed.hop import Note
from soundrose.feed.ring import Given
from soundrose.feed.stream import Report, Welcome, decode_given, encode_report
from soundrose.product.codec import Envelope
from soundrose.product.connecting import connect_to
from soundrose.product.messages import MapProduct
from soundrose.product.publisher import Publisher
from soundrose.settings_types import BandSettings, Settings

__all__ = ["BandProcess", "BandTimes", "main"]

_POLL_MS = 100
_LATENCIES = 512  #: maps over which percentiles are taken
_LOAD_S = 10.0  #: feed time over which the load is taken


class BandTimes:
    """How long the work takes: load over the last ten seconds of feed, latency percentiles over the last maps."""

    def __init__(self, rate_hz: float) -> None:
        self._rate_hz = rate_hz
        self._work: deque[tuple[float, float]] = deque()  # (processing, feed) seconds of each hop
        self._feed_s = self._busy_s = 0.0
        self._latency_ms: deque[float] = deque(maxlen=_LATENCIES)

    def hop(self, samples: int, busy_s: float) -> None:
        feed_s = samples / self._rate_hz
        self._work.append((busy_s, feed_s))
        self._busy_s += busy_s
        self._feed_s += feed_s
        while self._feed_s > _LOAD_S and len(self._work) > 1:
            busy, feed = self._work.popleft()
            self._busy_s -= busy
            self._feed_s -= feed

    def latency(self, milliseconds: float) -> None:
        self._latency_ms.append(milliseconds)

    def facts(self) -> dict[str, Any]:
        """`load` and `latency_ms` as the status message has them."""
        load = round(self._busy_s / self._feed_s, 4) if self._feed_s > 0 else 0.0
        if not self._latency_ms:
            return {"load": load, "latency_ms": {"p50": None, "p99": None}}
        p50, p99 = np.percentile(np.fromiter(self._latency_ms, float), [50, 99])
        return {"load": load, "latency_ms": {"p50": round(float(p50), 2), "p99": round(float(p99), 2)}}


class BandProcess:
    """The sockets around a `BandStage`."""

    def __init__(
        self, orders: Orders, band: BandSettings, context: "zmq.Context[zmq.Socket[bytes]]", heart: Heartbeat,
        ending: Callable[[], bool] = bool,
    ) -> None:  # fmt: skip
        self._settings: Settings = orders.settings
        self._band = band
        self._start = new_start()
        self._log = SlowLog()
        self._heart, self._ending = heart, ending
        self._ingest, self._session = "", self._start
        self._stage = BandStage(orders.settings, band, progress=self.beat)
        self._times = BandTimes(orders.settings.feed.rate_hz)
        self._maps = self._dropped_hops = self._taken = 0
        self._same_clock = True
        self._report_due = 0.0
        self._hops = context.socket(zmq.DEALER)
        self._hops.setsockopt(zmq.IDENTITY, band.name.encode())
        self._hops.setsockopt(zmq.LINGER, 0)
        self._hops.setsockopt(zmq.RECONNECT_IVL, 20)
        self._hops.setsockopt(zmq.RECONNECT_IVL_MAX, 200)
        self._hops.setsockopt(zmq.IMMEDIATE, 1)
        self._hops.setsockopt(zmq.HEARTBEAT_IVL, 2000)  # a host that vanished without a word: the connection ends
        self._hops.setsockopt(zmq.HEARTBEAT_TIMEOUT, 10000)
        self._lost = self._hops.get_monitor_socket(zmq.EVENT_DISCONNECTED)
        connect_to(self._hops, orders.endpoints["stream"])
        self._publisher = Publisher(
            context,
            orders.endpoints["collect"],
            Envelope(orders.settings.array.id, self._start),
            patient=self._wait if orders.settings.feed.overload == "hold" else None,
            largest=4 * band.beams * band.frame // 2,
        )

    @property
    def joined(self) -> bool:
        """Ingest has answered."""
        return bool(self._ingest)

    def turn(self) -> None:
        """Once round: take what came from ingest, or wait a little for it."""
        if self._lost.poll(0):
            self._begin_session()
        if time.monotonic() >= self._report_due:
            self._report()
        if not self._hops.poll(_POLL_MS):
            return
        try:
            message = decode_given([frame.buffer for frame in self._hops.recv_multipart(copy=False)])
        except WireError as error:
            self._log.warn("stream", str(error))
            return
        match message:
            case Welcome():
                if message.ingest != self._ingest:
                    self._ingest, self._taken = message.ingest, 0
                    self._same_clock = message.clock == clock_name()
                self._report()
            case Given(session=self._session):
                self._take(message)
                self._taken += 1
                self._report()

    def facts(self) -> dict[str, Any]:
        return {
            **self._times.facts(),
            "maps": self._maps,
            "dropped_hops": self._dropped_hops,
            "gaps": self._stage.gaps,
            "kernel": self._stage.kernel,
        }

    def beat(self) -> None:
        """Send a beat if one is due; called from the loop, and while new weights are made."""
        if self._heart.due:
            self._heart.beat(ready=self.joined, facts=self.facts() if self.joined else None)

    def _wait(self) -> bool:
        """The proxy does not take a map: whether to wait on."""
        self.beat()
        return not self._ending()

    def close(self) -> None:
        self._hops.disable_monitor()
        self._lost.close()
        self._hops.close()
        self._publisher.close()

    def _begin_session(self) -> None:
        """The connection ended, and with it the hops that were on their way: join anew."""
        while self._lost.poll(0):
            recv_monitor_message(self._lost)
        self._session, self._taken = new_start(), 0
        self._report_due = 0.0

    def _report(self) -> None:
        self._report_due = time.monotonic() + HEARTBEAT_S
        report = Report(self._band.name, self._session, self._ingest, self._taken)
        try:
            self._hops.send(encode_report(report), zmq.NOBLOCK)
        except zmq.Again:  # ingest is away; the next report says the same
            pass

    def _take(self, given: Given) -> None:
        begun = time.perf_counter()
        for note in given.notes:
            self._note(note)
        self._dropped_hops += given.missed
        if given.missed:
            self._log.warn(
                "behind", f"band {self._band.name} is behind: {given.missed} hops left out (overload is drop)"
            )
        hop = given.hop
        if not self._same_clock:  # ingest is on another host: the hop's arrival here is the nearest to its receipt
            hop = replace(hop, received_ns=time.monotonic_ns())
        products = self._stage.push(hop, given.missed, resumed=given.resumed)
        for product in products:
            self._publish(product)
        self._times.hop(given.hop.length, time.perf_counter() - begun)

    def _note(self, note: Note) -> None:
        self._stage.note(note)

    def _publish(self, product: MapProduct) -> None:
        latency_ms = round((time.monotonic_ns() - product.received_ns) / 1e6, 3)
        self._publisher.send_map(product, latency_ms)
        self._times.latency(latency_ms)
        self._maps += 1


def main(orders: Orders) -> int:
    """Run the band that the orders name (`band:NAME`) until the lifeline ends."""
    lifeline = set_up_child(orders)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    heart = Heartbeat(context, orders.endpoints["control"], orders.name)
    heart.beat(ready=False)
    band = orders.settings.band(orders.name.removeprefix("band:"))
    process = BandProcess(orders, band, context, heart, lifeline.ending.is_set)
    try:
        while not lifeline.ending.is_set():
            process.turn()
            process.beat()
    finally:
        process.close()
        heart.close()
        context.term()
    return 0
