"""A source over a real PULL socket, its bytes read with stock msgpack."""

import time

import msgpack
import numpy as np
import pytest
import zmq
from hypothesis import given
from hypothesis import strategies as st

from soundrose_client import SendTimeout, Source, UsageError
from soundrose_client.blocks import encode_samples, sample_type


def address_of(pull):
    return pull.getsockopt_string(zmq.LAST_ENDPOINT)


def receive(pull):
    header, *data = pull.recv_multipart()
    return msgpack.unpackb(header), *data


def test_samples_go_out_as_the_feed_wants_them(pull):
    samples = np.arange(8, dtype=np.int16).reshape(2, 4)
    with Source("aft", 16000.0, address_of(pull), run="r1") as source:
        source.send(samples, t_ns=1_000_000_000)
        source.send(samples)
    header, data = receive(pull)
    assert header == {
        "v": 1, "kind": "samples", "array": "aft", "run": "r1", "first": 0, "t": 1_000_000_000, "rate": 16000.0,
        "shape": [2, 4], "layout": "channel", "type": "i2", "unit": "count",
    }  # fmt: skip
    assert type(header["rate"]) is float
    assert data == samples.astype("<i2").tobytes()
    header, data = receive(pull)
    assert (header["first"], header["t"]) == (4, 1_000_250_000)
    assert receive(pull) == ({"v": 1, "kind": "end", "array": "aft", "run": "r1"},)


def test_long_samples_are_cut_into_blocks_of_a_second_and_of_bytes(pull):
    samples = np.arange(2 * 2500, dtype=np.int16).reshape(2, 2500)
    with Source("aft", 1000.0, address_of(pull)) as source:
        source.send(samples, t_ns=0)
        assert source.next_index == 2500
    *blocks, _end = [pull.recv_multipart() for _ in range(4)]
    blocks = [(msgpack.unpackb(header), data) for header, data in blocks]
    assert [(header["first"], header["shape"][1], header["t"]) for header, _ in blocks] == [
        (0, 1000, 0), (1000, 1000, 1_000_000_000), (2000, 500, 2_000_000_000),
    ]  # fmt: skip
    joined = np.concatenate([np.frombuffer(data, "<i2").reshape(2, -1) for _, data in blocks], axis=1)
    assert np.array_equal(joined, samples)
    with Source("aft", 1000.0, address_of(pull), block_bytes=40) as source:
        source.send(samples[:, :25])
        assert [receive(pull)[0]["shape"] for _ in range(3)] == [[2, 10], [2, 10], [2, 5]]


def test_lost_samples_leave_a_gap_in_the_index_and_time_goes_on(pull):
    with Source("aft", 1000.0, address_of(pull)) as source:
        source.send(np.zeros((1, 10), np.int16), t_ns=5)
        source.send(np.zeros((1, 10), np.int16), first=100)
        receive(pull)
        header, _ = receive(pull)
    assert (header["first"], header["t"]) == (100, 100_000_005)


def test_time_given_anew_goes_on_from_there(pull):
    with Source("aft", 1000.0, address_of(pull)) as source:
        for t_ns in (1_000, 7_000_000_000, None):
            source.send(np.zeros((1, 10), np.int16), t_ns=t_ns)
        times = [receive(pull)[0]["t"] for _ in range(3)]
    assert times == [1_000, 7_000_000_000, 7_010_000_000]


def test_end_begins_a_new_run_with_the_next_samples(pull):
    with Source("aft", 1000.0, address_of(pull), run="day") as source:
        for _ in range(3):
            source.send(np.zeros((1, 1), np.int16))
            source.end()
    messages = [receive(pull)[0] for _ in range(6)]
    assert [(m["kind"], m["run"], m.get("first")) for m in messages] == [
        ("samples", "day", 0), ("end", "day", None), ("samples", "day+1", 0), ("end", "day+1", None),
        ("samples", "day+2", 0), ("end", "day+2", None),
    ]  # fmt: skip


def test_error_inside_leaves_the_run_open(pull):
    def leave_with_error():
        with Source("aft", 1000.0, address_of(pull)) as source:
            source.send(np.zeros((1, 1), np.int16))
            raise KeyError

    with pytest.raises(KeyError):
        leave_with_error()
    assert receive(pull)[0]["kind"] == "samples"
    assert not pull.poll(50)


def test_notes_carry_their_keys(pull):
    with Source("aft", 16000.0, address_of(pull)) as source:
        source.navigation(7, of="array", heading_deg=212.4)
        source.positions([[0.5, 0, 0], [-0.5, 0, 0]], t_ns=8)
        source.pulse("gun", 1, t_ns=9)
    common = {"v": 1, "array": "aft"}
    assert receive(pull) == (common | {"kind": "navigation", "t": 7, "of": "array", "heading_deg": 212.4},)
    assert receive(pull) == (
        common | {"kind": "positions", "t": 8, "positions_m": [[0.5, 0.0, 0.0], [-0.5, 0.0, 0.0]]},
    )
    assert receive(pull) == (common | {"kind": "pulse", "t": 9, "source": "gun", "length_s": 1.0},)


def test_nobody_there_is_said_after_the_time_allowed():
    with zmq.Context() as context:
        probe = context.socket(zmq.PULL)
        probe.bind("tcp://127.0.0.1:*")
        nobody = address_of(probe)
        probe.close(0)
    source = Source("aft", 1000.0, nobody, timeout_s=0.05, linger_s=0)
    with pytest.raises(SendTimeout, match=r"0\.05 s.*feed\.bind"):
        source.send(np.zeros((1, 1), np.int16))
    assert source.next_index == 1  # those samples are lost, and the index says so
    source.close()


def test_queue_is_bounded_by_bytes():
    """Nobody reads: the source takes its own queue and the peer's, then waits, then says so."""
    with zmq.Context() as context:
        pull = context.socket(zmq.PULL)
        pull.setsockopt(zmq.RCVHWM, 1)
        pull.bind("inproc://feed")
        source = Source(
            "aft",
            1000.0,
            "inproc://feed",
            timeout_s=0.05,
            queue_bytes=4000,
            block_bytes=1000,
            linger_s=0,
            context=context,
        )

        def taken():
            for sent in range(100):
                try:
                    source.send(np.zeros((1, 500), np.int16))
                except SendTimeout:
                    return sent
            return 100

        assert 4 <= taken() <= 5
        source.close()
        pull.close(0)


@pytest.mark.parametrize(
    ("call", "word"),
    [
        (lambda: Source("aft", 0.0), "rate_hz"),
        (lambda: Source("aft", 1.0, type="i8"), "i2, i3, i4, f4"),
        (lambda: Source("aft", 1.0, type="f4", unit="dB"), "count, V, uPa"),
        (lambda: Source("aft", 1.0, unit="V"), "go with f4"),
        (lambda: Source("aft", 1.0, "nowhere"), "endpoint"),
        (lambda: Source("aft", 1.0, queue_bytes=-1), "above 0"),
    ],
)
def test_impossible_source_says_what_is_allowed(call, word):
    with pytest.raises(UsageError, match=word):
        call()


@pytest.mark.parametrize(
    ("call", "word"),
    [
        (lambda s: s.send(np.zeros(4, np.int16)), "channels, samples"),
        (lambda s: s.send(np.zeros((4, 0), np.int16)), "at least 1"),
        (lambda s: s.send(np.zeros((1, 4))), "i2 takes integers"),
        (lambda s: s.send(np.array([[0, 40000]])), "-32768 to 32767"),
        (lambda s: s.send(np.zeros((1, 1), np.int16), first=-1), "first"),
        (lambda s: s.positions([[0.0, 1.0]]), "channels, 3"),
        (lambda s: s.positions([[0.0, 1.0, float("nan")]]), "finite"),
        (lambda s: s.navigation(of=object()), "plain numbers"),
    ],
)
def test_impossible_message_is_refused_before_it_is_sent(pull, call, word):
    with Source("aft", 1000.0, address_of(pull)) as source, pytest.raises(UsageError, match=word):
        call(source)
    assert not pull.poll(50)


def test_closed_source_says_so(pull):
    source = Source("aft", 1000.0, address_of(pull))
    source.close()
    source.close()
    with pytest.raises(UsageError, match="closed"):
        source.pulse("gun", 1.0)


def test_floats_other_than_real_numbers_are_refused():
    with pytest.raises(UsageError, match="real numbers"):
        encode_samples(np.zeros((1, 1), complex), "f4")


@given(st.lists(st.integers(-(2**23), 2**23 - 1), min_size=1, max_size=40))
def test_24_bit_samples_are_packed_little_endian(values):
    packed = encode_samples(np.array([values], np.int64), sample_type("i3", "count"))
    assert packed.tobytes() == b"".join(value.to_bytes(3, "little", signed=True) for value in values)


@pytest.mark.parametrize(("kind", "bits"), [("i2", 16), ("i3", 24), ("i4", 32)])
def test_integers_that_do_not_fit_are_refused_not_wrapped(kind, bits):
    limit = 1 << (bits - 1)
    assert encode_samples(np.array([[-limit, limit - 1]]), kind).tobytes()
    for value in (-limit - 1, limit):
        with pytest.raises(UsageError, match=str(value)):
            encode_samples(np.array([[0, value]]), kind)


def test_source_that_is_made_to_wait_is_not_cut_off(pull, monkeypatch):
    """The service answers no heartbeat while it does not read; cutting the connection would lose what is in flight."""
    monkeypatch.setattr("soundrose_client.sockets.HEARTBEAT_MS", 100)
    monkeypatch.setattr("soundrose_client.sockets.SILENCE_MS", 300)
    pull.setsockopt(zmq.RCVHWM, 2)
    pull.bind("tcp://127.0.0.1:*")
    block = np.zeros((2, 250_000), dtype=np.int16)
    until = time.monotonic() + 3.0
    with Source("aft", 250_000.0, address_of(pull), queue_bytes=1 << 21, timeout_s=0.2) as source:
        sent = []
        while time.monotonic() < until:
            first = source.next_index
            try:
                source.send(block, t_ns=first * 4000)
                sent.append(first)
            except SendTimeout:
                pass
        assert [receive(pull)[0]["first"] for _ in sent] == sent
