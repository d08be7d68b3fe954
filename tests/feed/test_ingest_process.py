"""The sockets of ingest: a source that is made to wait loses nothing, and large blocks do not silence it."""

import os
import time
import uuid
from dataclasses import replace

import numpy as np
import pytest
import zmq

from soundrose.child import Orders
from soundrose.feed import process as ingest
from soundrose.feed.messages import encode_samples
from soundrose.feed.process import IngestProcess
from soundrose.feed.record import SharedRecord, make_record_file
from soundrose.feed.ring import WINDOW_HOLD
from soundrose.feed.stream import Report, Welcome, decode_given, encode_report
from soundrose.settings_types import FeedSettings

RATE, BLOCK, T0 = 100_000.0, 20_000, 10**18


class Rig:
    """An ingest in this process, a source, and the record that counts."""

    def __init__(self, settings, overload: str) -> None:
        feed = FeedSettings("tcp://127.0.0.1:*", RATE, overload)
        mark = uuid.uuid4().hex
        self.ends = {key: f"ipc://@ingest-{mark}-{key}" for key in ("stream", "collect", "control")}
        self.context, self.fd = zmq.Context(), make_record_file()
        orders = Orders("ingest", replace(settings, feed=feed), {**self.ends, "feed": feed.bind}, self.fd)
        self.process = IngestProcess(orders, self.context)
        self.source = self.context.socket(zmq.PUSH)
        self.source.setsockopt(zmq.LINGER, 0)
        self.source.setsockopt(zmq.SNDTIMEO, 100)
        self.source.setsockopt(zmq.SNDHWM, 4)
        self.source.connect(self.process.endpoint)
        self.sent = 0

    def send(self) -> bool:
        """One more block; False if the source has to wait."""
        values = np.random.default_rng(self.sent).integers(-99, 99, (3, BLOCK))
        t_ns = T0 + self.sent * BLOCK * 10**4
        try:
            self.source.send_multipart(encode_samples("aft", "a", self.sent * BLOCK, t_ns, RATE, values, type="i2"))
        except zmq.Again:
            return False
        self.sent += 1
        return True

    @property
    def counters(self):
        return self.process._intake.counters

    def close(self) -> None:
        self.process.close()
        self.source.close()
        self.context.destroy(linger=0)
        os.close(self.fd)


@pytest.fixture
def rig_for(settings_for):
    rigs = []

    def make(overload: str) -> Rig:
        rigs.append(Rig(settings_for(rate_hz=RATE, frames=(8192,)), overload))
        return rigs[-1]

    yield make
    for rig in rigs:
        rig.close()


def test_source_that_waits_for_a_band_in_hold_is_not_cut_off(rig_for, monkeypatch):
    """Its answers to heartbeats wait behind its samples; being cut off would lose what is in flight."""
    monkeypatch.setattr(ingest, "_ASK_MS", 100)
    monkeypatch.setattr(ingest, "_ANSWER_MS", 300)
    monkeypatch.setattr(ingest, "feed_queue", lambda _: 8)
    rig = rig_for("hold")
    until = time.monotonic() + 3.0
    while time.monotonic() < until:  # nobody takes hops: the queues fill and stay full
        rig.send()
        rig.process.turn()
    assert rig.process.facts()["disconnects"] == 0
    band = rig.context.socket(zmq.DEALER)
    band.setsockopt(zmq.IDENTITY, b"b0")
    band.connect(rig.ends["stream"])
    taken, name = 0, ""
    band.send(encode_report(Report("b0", "s", name, 0)))
    until = time.monotonic() + 30.0
    while rig.counters.blocks < rig.sent:
        assert time.monotonic() < until, f"{rig.counters.blocks} of {rig.sent} blocks came"
        rig.process.turn()
        while band.poll(0):
            message = decode_given(band.recv_multipart())
            if isinstance(message, Welcome):
                name = message.ingest
            else:
                taken += 1
            band.send(encode_report(Report("b0", "s", name, taken)))
    assert (rig.counters.gaps, rig.counters.lost_samples) == (0, 0)
    assert taken > WINDOW_HOLD
    band.close(0)


def test_blocks_that_take_long_do_not_keep_ingest_from_its_beats(rig_for, monkeypatch):
    """A source that sends faster than real time always has more: a turn ends after a tenth of a second all the same."""
    rig = rig_for("drop")
    push = rig.process._intake.push

    def slow(parts, received_ns):
        time.sleep(0.06)
        return push(parts, received_ns)

    monkeypatch.setattr(rig.process._intake, "push", slow)
    while rig.sent < 12:
        assert rig.send()
    assert rig.process._feed.poll(10_000)
    rig.process.turn()
    rig.process.turn()
    assert 1 <= rig.counters.blocks <= 6
    while rig.counters.blocks < 12:
        rig.process.turn()
    assert SharedRecord(rig.fd).read()
