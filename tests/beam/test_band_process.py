"""The sockets of a band: what it says to ingest, and that a connection that breaks never starves it."""

import threading
import time
import uuid

import numpy as np
import pytest
import zmq
from small_band import CHANNELS, FRAME, SETTINGS

from soundrose.beam.process import BandProcess
from soundrose.child import Heartbeat, Orders
from soundrose.feed.hop import Hop
from soundrose.feed.ring import HopRing
from soundrose.feed.stream import Report, Welcome, decode_report, encode_given, encode_welcome

HALF = FRAME // 2
NAME = SETTINGS.bands[0].name


def hop(number: int) -> Hop:
    return Hop(
        run="r", epoch=0, first=number * HALF, times=np.array([[number * HALF, 10**18]], np.int64),
        samples=np.random.default_rng(number).standard_normal((CHANNELS, HALF), dtype=np.float32),
        bad=np.zeros(CHANNELS, np.bool_), clipped=np.zeros(CHANNELS, np.int32),
    )  # fmt: skip


class Ingest:
    """The other side, by hand: a ring, and a ROUTER that can be taken away."""

    def __init__(self, context: zmq.Context, endpoint: str) -> None:
        self.context, self.endpoint = context, endpoint
        self.ring = HopRing(4, True, [NAME])
        self.open()

    def open(self) -> None:
        self.socket = self.context.socket(zmq.ROUTER)
        self.socket.setsockopt(zmq.LINGER, 0)
        for _ in range(500):  # the socket before may not be gone yet
            try:
                return self.socket.bind(self.endpoint)
            except zmq.ZMQError:
                time.sleep(0.01)
        raise AssertionError(f"cannot bind {self.endpoint}")

    def report(self, wanted=lambda report: True) -> Report:
        """The next report that is as wanted."""
        for _ in range(200):
            assert self.socket.poll(20_000), "the band says nothing"
            _, data = self.socket.recv_multipart()
            if wanted(report := decode_report(data)):
                return report
        raise AssertionError(f"no such report; the last was {report}")

    def welcome(self, report: Report) -> None:
        if self.ring.session(NAME) != report.session:
            self.ring.join(NAME, report.session, (), followed=report.ingest != "")
        self.socket.send_multipart([NAME.encode(), *encode_welcome(Welcome("ingest", ""))])

    def give(self) -> None:
        given = self.ring.take(NAME)
        assert given is not None
        self.socket.send_multipart([NAME.encode(), *encode_given(given)])


@pytest.fixture
def context():
    context = zmq.Context()
    yield context
    context.destroy(linger=0)


@pytest.fixture
def rig(context):
    mark = uuid.uuid4().hex
    ends = {key: f"ipc://@band-{mark}-{key}" for key in ("stream", "collect", "control")}
    ingest = Ingest(context, ends["stream"])
    heart = Heartbeat(context, ends["control"], f"band:{NAME}")
    band = BandProcess(Orders(f"band:{NAME}", SETTINGS, ends), SETTINGS.bands[0], context, heart)
    ending = threading.Event()

    def work() -> None:
        while not ending.is_set():
            band.turn()

    worker = threading.Thread(target=work)
    worker.start()
    yield ingest, band
    ending.set()
    worker.join()
    band.close()
    heart.close()
    ingest.socket.close()


def test_hop_that_was_lost_with_the_connection_comes_again(rig):
    ingest, band = rig
    first = ingest.report()
    ingest.welcome(first)
    for number in range(3):
        ingest.ring.add_hop(hop(number))
    ingest.give()
    ingest.report(lambda report: report.taken == 1)
    ingest.ring.acknowledge(NAME, 1)
    assert ingest.ring.take(NAME).hop.first == HALF  # on its way when the connection breaks: it never arrives
    ingest.socket.close()
    ingest.open()
    again = ingest.report(lambda report: report.session != first.session)
    assert (again.ingest, again.taken) == ("ingest", 0)
    ingest.welcome(again)
    ingest.give()
    ingest.give()
    ingest.report(lambda report: (report.session, report.taken) == (again.session, 2))
    ingest.ring.acknowledge(NAME, 2)
    assert ingest.ring.idle
    assert band.facts()["maps"] == 1  # hops 1 and 2: after the break framing began anew


def test_hop_for_an_earlier_session_is_left_alone(rig):
    ingest, _ = rig
    report = ingest.report()
    ingest.welcome(report)
    ingest.ring.add_hop(hop(0))
    ingest.ring.join(NAME, "another", ())
    ingest.ring.add_hop(hop(1))
    ingest.give()
    ingest.ring.join(NAME, report.session, ())
    ingest.ring.add_hop(hop(2))
    ingest.give()
    ingest.report(lambda report: report.taken == 1)
    assert ingest.report().taken == 1
