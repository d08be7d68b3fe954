"""Sockets of what is published: addresses of every kind, and a sender that waits in `hold`."""

import threading
from contextlib import contextmanager

import pytest
import zmq

from soundrose.product.addresses import connect_address
from soundrose.product.codec import Envelope, decode_published
from soundrose.product.connecting import connect_to
from soundrose.product.proxy import bind_or_explain
from soundrose.product.publisher import Publisher


@pytest.fixture
def context():
    context = zmq.Context()
    yield context
    context.destroy(linger=0)


@pytest.mark.parametrize(
    ("bound", "reached"),
    [
        ("tcp://0.0.0.0:5511", "tcp://127.0.0.1:5511"), ("tcp://*:5511", "tcp://127.0.0.1:5511"),
        ("tcp://[::]:5511", "tcp://[::1]:5511"), ("tcp://10.0.0.7:5511", "tcp://10.0.0.7:5511"),
        ("ipc://@soundrose-*:1", "ipc://@soundrose-*:1"),
    ],
)  # fmt: skip
def test_socket_bound_everywhere_is_reached_on_this_machine(bound, reached):
    assert connect_address(bound) == reached


@pytest.mark.parametrize("endpoint", ["tcp://127.0.0.1:0", "tcp://*:*", "tcp://[::1]:0", "tcp://[::1]:*"])
def test_message_goes_through_a_socket_bound_at(context, endpoint):
    with context.socket(zmq.PULL) as pull, context.socket(zmq.PUSH) as push:
        bound = bind_or_explain(pull, endpoint, "feed.bind")
        assert not bound.endswith((":0", ":*"))
        connect_to(push, bound)
        push.send(b"hello")
        assert pull.poll(10_000)
        assert pull.recv() == b"hello"


@contextmanager
def published(context, endpoint, patient):
    """A publisher with few places in its queue, and a proxy's socket that has heard from it and reads nothing more."""
    with context.socket(zmq.XSUB) as taker:
        taker.setsockopt(zmq.RCVHWM, 2)
        taker.bind(endpoint)
        taker.send(b"\x01")
        publisher = Publisher(context, endpoint, Envelope("aft", "0" * 16), patient=patient, largest=2**23)
        for _ in range(500):  # until the subscription has come
            publisher.send_plain("status", {})
            if taker.poll(20):
                break
        yield taker, publisher
        publisher.close()


def test_patient_publisher_loses_nothing_while_the_proxy_stands_still(context):
    waits, count = threading.Semaphore(0), 60

    def waiting() -> bool:
        waits.release()
        return True

    with published(context, "ipc://@publisher-patient", waiting) as (taker, publisher):

        def send() -> None:
            for number in range(count):
                publisher.send_plain("health", {"number": number, "filling": bytes(2**20)})

        sender = threading.Thread(target=send)
        sender.start()
        for _ in range(4):  # the queue is full, and it goes on waiting
            assert waits.acquire(timeout=20)
        seen = []
        while (not seen or seen[-1] < count - 1) and taker.poll(10_000):
            topic, header, _ = decode_published(taker.recv_multipart())
            seen += [header["number"]] if topic == "health" else []
        sender.join()
        assert seen == list(range(count))


def test_patient_publisher_gives_up_when_told_to(context):
    asked = []
    with published(context, "ipc://@publisher-ending", lambda: asked.append(1)) as (_, publisher):
        for _ in range(500):
            publisher.send_plain("health", {"filling": bytes(2**20)})
            if asked:
                break
        assert asked == [1]
