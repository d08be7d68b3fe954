"""process: ingest: takes the feed, hands hops to bands by credit, publishes the hydrophones' health."""

import time
from typing import Any

import zmq
from zmq.utils.monitor import recv_monitor_message

from soundrose.child import Heartbeat, Orders, SlowLog, clock_name, new_start, set_up_child
from soundrose.errors import WireError
from soundrose.feed.hop import Hop, RunEnd, hop_length
from soundrose.feed.intake import Intake
from soundrose.feed.record import SharedRecord
from soundrose.feed.ring import HopRing, ring_capacity
from soundrose.feed.stream import Report, Welcome, decode_report, encode_given, encode_welcome
from soundrose.product.codec import Envelope
from soundrose.product.messages import HealthProduct
from soundrose.product.proxy import bind_or_explain
from soundrose.product.publisher import Publisher
from soundrose.settings_types import Settings

__all__ = ["IngestProcess", "feed_queue", "main"]

LARGEST_FRAME = 96 * 2**20  #: contract: a larger frame cuts its connection
_QUEUE_BYTES = 128 * 2**20
_BATCH = 32  #: feed messages between two looks at the bands ...
_BATCH_S = 0.1  #: ... or what comes in this time: a block of 64 MiB may take a second
_REPORT_BYTES = 64 * 1024  #: a band's report is far smaller
_POLL_MS = 100
_ASK_MS, _ANSWER_MS = 5000, 15000  #: a source is asked so often whether it is there, and has so long to answer


def feed_queue(settings: Settings) -> int:
    """Messages that wait in the feed socket per source: 128 MiB of the largest legal block."""
    largest = 4 * settings.array.channels * int(settings.feed.rate_hz)
    return max(8, min(64, _QUEUE_BYTES // largest))


class IngestProcess:
    """The sockets around an `Intake` and a `HopRing`."""

    def __init__(self, orders: Orders, context: "zmq.Context[zmq.Socket[bytes]]") -> None:
        settings = orders.settings
        self._record = SharedRecord(orders.record_fd)
        self._intake = Intake(settings, self._record.read() or None)
        frames = [band.frame for band in settings.bands]
        hop = hop_length(frames)
        self._ring = HopRing(
            ring_capacity(hop, settings.feed.rate_hz, frames),
            settings.feed.overload == "hold",
            [band.name for band in settings.bands],
        )
        self._start = new_start()
        self._log = SlowLog()
        self._disconnects = 0
        self._feed = context.socket(zmq.PULL)
        self._feed.setsockopt(zmq.RCVHWM, feed_queue(settings))
        self._feed.setsockopt(zmq.MAXMSGSIZE, LARGEST_FRAME)
        self._feed.setsockopt(zmq.LINGER, 0)
        _keep_alive(self._feed, settings.feed.overload == "hold")
        self._monitor = self._feed.get_monitor_socket(zmq.EVENT_DISCONNECTED)
        self._bands = context.socket(zmq.ROUTER)
        self._bands.setsockopt(zmq.LINGER, 0)
        self._bands.setsockopt(zmq.SNDHWM, 64)
        self._bands.setsockopt(zmq.MAXMSGSIZE, _REPORT_BYTES)
        self._bands.setsockopt(zmq.ROUTER_HANDOVER, 1)
        bind_or_explain(self._bands, orders.endpoints["stream"], "stream.bind")
        self.endpoint = bind_or_explain(self._feed, orders.endpoints["feed"], "feed.bind")
        self._publisher = Publisher(context, orders.endpoints["collect"], Envelope(settings.array.id, self._start))
        self._poller = zmq.Poller()
        self._poller.register(self._bands, zmq.POLLIN)
        self._poller.register(self._monitor, zmq.POLLIN)
        self._reading = False

    def turn(self) -> None:
        """Once round: wait for something, take it, hand on what can be handed on."""
        self._read_feed(not self._ring.blocked)
        ready = dict(self._poller.poll(_POLL_MS))
        if self._bands in ready:
            self._take_reports()
        if self._feed in ready:
            self._take_feed()
        if self._monitor in ready:
            while self._monitor.poll(0):
                recv_monitor_message(self._monitor)
                self._disconnects += 1
        self._hand_on()

    def facts(self) -> dict[str, Any]:
        return {"feed": self.endpoint, "disconnects": self._disconnects, "held": self._ring.held}

    def close(self) -> None:
        self._feed.disable_monitor()
        self._monitor.close()
        self._feed.close()
        self._bands.close()
        self._publisher.close()
        self._record.close()

    def _read_feed(self, wanted: bool) -> None:
        if wanted and not self._reading:
            self._poller.register(self._feed, zmq.POLLIN)
        elif self._reading and not wanted:
            self._poller.unregister(self._feed)
        self._reading = wanted

    def _take_feed(self) -> None:
        until = time.monotonic() + _BATCH_S
        for _ in range(_BATCH):
            try:
                frames = self._feed.recv_multipart(zmq.NOBLOCK, copy=False)
            except zmq.Again:
                return
            self._take_message([frame.buffer for frame in frames])
            self._hand_on()
            if self._ring.blocked or time.monotonic() > until:
                return

    def _take_message(self, parts: list[memoryview]) -> None:
        before = self._intake.last_drop
        for outcome in self._intake.push(parts, time.monotonic_ns()):
            match outcome:
                case Hop():
                    self._ring.add_hop(outcome)
                case HealthProduct():
                    self._publisher.send_plain("health", outcome.header)
                case RunEnd():
                    pass  # the next hop's epoch says it
                case _:
                    self._ring.add_note(outcome)
        self._record.write(self._intake.snapshot())
        if (drop := self._intake.last_drop) is not None and drop is not before:
            reason, detail = drop
            self._log.warn(reason, f"feed message dropped as {reason}: {detail}")

    def _take_reports(self) -> None:
        while True:
            try:
                identity, *parts = self._bands.recv_multipart(zmq.NOBLOCK)
            except zmq.Again:
                return
            try:
                report = decode_report(parts[0])
                known = self._ring.session(report.band)
            except (WireError, KeyError, IndexError) as error:
                self._log.warn("report", f"a band's report was not taken: {error}")
                continue
            if report.ingest == self._start and known == report.session:
                self._ring.acknowledge(report.band, report.taken)
            elif identity == report.band.encode():
                self._welcome(identity, report)

    def _welcome(self, identity: bytes, report: Report) -> None:
        """A band has come, or has come again, or knows another ingest: begin anew with it, once per session."""
        if self._ring.session(report.band) != report.session:
            followed = report.ingest != ""
            self._ring.join(report.band, report.session, self._intake.in_force(), followed=followed)
        self._bands.send_multipart([identity, *encode_welcome(Welcome(self._start, clock_name()))])

    def _hand_on(self) -> None:
        for band in self._ring.bands:
            while (given := self._ring.take(band)) is not None:
                self._bands.send_multipart([band.encode(), *encode_given(given)], copy=False)


def _keep_alive(feed: "zmq.Socket[bytes]", hold: bool) -> None:
    """Notice a source that vanished without a word.

    In `hold` a source may have to wait for as long as it takes. Its answers to heartbeats wait behind its samples
    then, and a heartbeat would cut the connection and lose what was in flight: the kernel asks there, not ZeroMQ.
    """
    if not hold:
        feed.setsockopt(zmq.HEARTBEAT_IVL, _ASK_MS)
        feed.setsockopt(zmq.HEARTBEAT_TIMEOUT, _ANSWER_MS)
        return
    feed.setsockopt(zmq.TCP_KEEPALIVE, 1)
    feed.setsockopt(zmq.TCP_KEEPALIVE_IDLE, 5)
    feed.setsockopt(zmq.TCP_KEEPALIVE_INTVL, 5)
    feed.setsockopt(zmq.TCP_KEEPALIVE_CNT, 3)


def main(orders: Orders) -> int:
    """Run ingest until the lifeline ends."""
    lifeline = set_up_child(orders)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    heart = Heartbeat(context, orders.endpoints["control"], orders.name)
    process: IngestProcess | None = None
    try:
        process = IngestProcess(orders, context)
        while not lifeline.ending.is_set():
            process.turn()
            if heart.due:
                heart.beat(ready=True, facts=process.facts())
    finally:
        if process is not None:
            process.close()
        heart.close()
        context.destroy(linger=0)
    return 0
