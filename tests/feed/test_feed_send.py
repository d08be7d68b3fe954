"""The sender's socket: a service that makes it wait loses nothing of what is on its way."""

import time

import pytest
import zmq

from soundrose.errors import StreamError
from soundrose.feed import send
from soundrose.feed.send import FeedSocket


def test_sender_that_is_made_to_wait_is_not_cut_off(monkeypatch):
    """Red with heartbeats: the service answers none while it does not read, and what was in flight is lost."""
    for name, value in (("HEARTBEAT_MS", 100), ("SILENCE_MS", 300)):
        monkeypatch.setattr(send, name, value, raising=False)
    with zmq.Context() as context, context.socket(zmq.PULL) as pull:
        pull.setsockopt(zmq.RCVHWM, 2)
        pull.setsockopt(zmq.RCVTIMEO, 2000)
        pull.bind("tcp://127.0.0.1:*")
        sender = FeedSocket(pull.getsockopt_string(zmq.LAST_ENDPOINT), 2**20, 0.2)
        sent, until = 0, time.monotonic() + 3.0
        while time.monotonic() < until:
            try:
                sender.send([sent.to_bytes(8, "big"), bytes(2**20)])
                sent += 1
            except StreamError:
                pass
        came = []
        while len(came) < sent:
            came.append(int.from_bytes(pull.recv_multipart()[0], "big"))
        assert came == list(range(sent))
        with pytest.raises(zmq.Again):
            pull.recv(zmq.NOBLOCK)
        sender.close()
