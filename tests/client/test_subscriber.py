"""Subscribers over real sockets."""

import asyncio
import contextlib
from concurrent.futures import ThreadPoolExecutor

import pytest
import zmq

from soundrose_client import AsyncSubscriber, Hole, MapMessage, ReceiveTimeout, Subscriber, UsageError

LIMIT_S = 10.0


def test_maps_arrive_in_order_and_other_topics_stay_out(publisher, make_map, make_plain):
    with Subscriber(publisher.address, "map/main", timeout_s=LIMIT_S) as subscriber:
        assert publisher.wait() == b"\x01map/main"
        publisher.send(make_map(0), make_plain("health"), make_map(0, topic="map/low"), make_map(1))
        messages = [message for _, message in zip(range(2), subscriber, strict=False)]
    assert [(m.topic, m.seq, m.missed) for m in messages] == [("map/main", 0, 0), ("map/main", 1, 0)]
    assert all(isinstance(message, MapMessage) for message in messages)


def test_holes_reach_callback_counters_and_the_next_message(publisher, make_map):
    holes: list[Hole] = []
    with Subscriber(publisher.address, timeout_s=LIMIT_S, on_hole=holes.append) as subscriber:
        publisher.wait()
        publisher.send(make_map(0), make_map(5), make_map(0, start="new"))
        assert [subscriber.receive().missed for _ in range(3)] == [0, 4, None]
        assert [hole.missed for hole in holes] == [4, None]
        assert (subscriber.counters.missed, subscriber.counters.restarts) == (4, 1)


def test_malformed_message_is_skipped_and_counted(publisher, make_map, make_plain):
    with Subscriber(publisher.address, ["map/", "health"], timeout_s=LIMIT_S) as subscriber:
        publisher.wait(), publisher.wait()
        publisher.send([b"map/main", b"\xc1"], make_map(0, v=9), [b"health"], make_plain("health", 7))
        assert subscriber.receive().kind == "health"
        assert subscriber.counters.malformed == {"msgpack": 1, "version": 1, "frames": 1}


def test_newest_only_leaves_out_what_is_stale_but_no_event(publisher, make_map, make_plain):
    with Subscriber(publisher.address, "", timeout_s=LIMIT_S, newest_only=True) as subscriber:
        publisher.wait()
        publisher.send(*(make_map(seq) for seq in range(20)), *(make_plain("alert", seq) for seq in range(5)))
        messages = []
        while not messages or (messages[-1].kind, messages[-1].seq) != ("alert", 4):
            messages.append(subscriber.receive())
    maps = [message for message in messages if message.kind == "map"]
    assert maps[-1].seq == 19
    assert len(maps) + sum(message.skipped for message in maps) == 20
    assert subscriber.counters.skipped == 20 - len(maps)
    assert [message.seq for message in messages if message.kind == "alert"] == [0, 1, 2, 3, 4]
    assert all(message.missed == 0 for message in messages)


def test_nothing_in_time_raises_and_says_where(publisher):
    with Subscriber(publisher.address, timeout_s=5.0) as subscriber:
        with pytest.raises(ReceiveTimeout, match=r"tcp://127.*publish\.bind") as caught:
            subscriber.receive(timeout_s=0.01)
        assert isinstance(caught.value, TimeoutError)


def test_subscriber_comes_back_when_the_service_does(publisher, make_publisher, make_map):
    with Subscriber(publisher.address, timeout_s=LIMIT_S) as subscriber:
        publisher.wait()
        publisher.send(make_map(3, start="a"))
        assert subscriber.receive().seq == 3
        publisher.close()
        again = make_publisher(publisher.address)
        with ThreadPoolExecutor(1) as pool:  # it subscribes again while it waits
            receiving = pool.submit(subscriber.receive)
            assert again.wait() == b"\x01map/"
            again.send(make_map(0, start="b"))
            message = receiving.result()
        again.close()
    assert (message.seq, message.missed) == (0, None)


def test_queue_is_bounded_and_the_overflow_shows_as_missed(context, make_map):
    """A subscriber that does not read loses messages at its bounded queue; the numbers tell how many."""
    publisher = context.socket(zmq.XPUB)
    publisher.setsockopt(zmq.SNDHWM, 4)
    publisher.bind("inproc://maps")
    total = 200
    with Subscriber(
        "inproc://maps", timeout_s=LIMIT_S, queue_bytes=4000, message_bytes=1000, context=context
    ) as subscriber:
        publisher.recv()
        for seq in range(total):
            publisher.send_multipart(make_map(seq))
        came = []
        with contextlib.suppress(ReceiveTimeout):
            while True:
                came.append(subscriber.receive(timeout_s=0.0))
        last = None
        while last is None:  # the publisher takes a moment to see that there is room again
            publisher.send_multipart(make_map(total))
            total += 1
            with contextlib.suppress(ReceiveTimeout):
                last = subscriber.receive(timeout_s=0.01)
    publisher.close(0)
    assert len(came) <= 8  # 4 on either side
    assert sum(m.missed for m in [*came, last]) + len(came) == last.seq


def test_configure_gets_the_socket_before_it_connects(publisher):
    seen = []

    def configure(socket):
        seen.append((socket.getsockopt(zmq.LAST_ENDPOINT), socket.getsockopt(zmq.HEARTBEAT_IVL)))
        socket.setsockopt(zmq.PLAIN_USERNAME, b"watch")

    with Subscriber(publisher.address, configure=configure):
        assert seen == [(b"", 2000)]


def test_error_in_configure_leaves_nothing_open(publisher):
    def configure(socket):
        raise RuntimeError("no key file")

    with pytest.raises(RuntimeError, match="no key file"):
        Subscriber(publisher.address, configure=configure)  # would hang in ending the context if a socket were left


@pytest.mark.parametrize(
    ("keys", "word"),
    [
        ({"address": "nonsense"}, "tcp://127"),
        ({"topics": ()}, "map/main"),
        ({"topics": "müll"}, "ASCII"),
        ({"queue_bytes": 0}, "above 0"),
    ],
)
def test_impossible_subscription_says_what_is_allowed(keys, word):
    with pytest.raises(UsageError, match=word):
        Subscriber(**keys)


def test_closed_subscriber_says_so(publisher):
    subscriber = Subscriber(publisher.address)
    subscriber.close()
    subscriber.close()
    assert list(subscriber) == []
    with pytest.raises(UsageError, match="closed"):
        subscriber.receive()


def test_async_twin_does_the_same(publisher, make_map):
    async def follow():
        async with AsyncSubscriber(publisher.address, "map/main", timeout_s=LIMIT_S) as subscriber:
            await asyncio.to_thread(publisher.wait)
            publisher.send(make_map(0), [b"map/main", b"\xc1"], make_map(2))
            messages = []
            async for message in subscriber:
                messages.append(message)
                if len(messages) == 2:
                    break
            with pytest.raises(ReceiveTimeout):
                await subscriber.receive(timeout_s=0.01)
            return messages, subscriber.counters

    messages, counters = asyncio.run(follow())
    assert [(message.seq, message.missed) for message in messages] == [(0, 0), (2, 1)]
    assert counters.malformed == {"msgpack": 1}


def test_async_receive_can_be_cancelled_without_losing_a_message(publisher, make_map):
    async def follow():
        async with AsyncSubscriber(publisher.address, newest_only=True) as subscriber:
            await asyncio.to_thread(publisher.wait)
            waiting = asyncio.create_task(subscriber.receive())
            await asyncio.sleep(0)
            waiting.cancel()
            with pytest.raises(asyncio.CancelledError):
                await waiting
            publisher.send(make_map(6))
            return await subscriber.receive(timeout_s=LIMIT_S)

    assert asyncio.run(follow()).seq == 6
