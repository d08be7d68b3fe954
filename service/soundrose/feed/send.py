"""process: plays a recording into a service's feed: socket, clock and progress."""

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import count
from typing import Final

import zmq

from soundrose.errors import StreamError, UsageError
from soundrose.feed.messages import DATA_LIMIT, Unit, encode_end, encode_samples
from soundrose.feed.pacing import Pace
from soundrose.feed.recording import Recording
from soundrose.feed.wire import BYTES_PER_VALUE

__all__ = ["FeedSocket", "Play", "Sent", "play"]

QUEUE_BYTES: Final = 8 << 20  # half a second of 128 hydrophones at 32 kHz, 24 bit; more would only hide a slow service
#: the kernel asks whether the service is there. Not ZeroMQ: a service that makes a source wait answers no heartbeat
#: (it stands behind the samples), and the cut connection would lose what is in flight
KEEPALIVE: Final = (
    (zmq.TCP_KEEPALIVE, 1), (zmq.TCP_KEEPALIVE_IDLE, 5), (zmq.TCP_KEEPALIVE_INTVL, 5), (zmq.TCP_KEEPALIVE_CNT, 3),
)  # fmt: skip
LINGER_S: Final = 10.0


@dataclass(frozen=True, slots=True)
class Play:
    """How to play. repeat : times over, 0 for ever.  block : samples in a block.  end : say so when it is over."""

    array: str
    run: str
    pace: Pace
    block: int
    unit: Unit = "count"
    repeat: int = 1
    end: bool = True
    timeout_s: float = 10.0


@dataclass(slots=True)
class Sent:
    """What has been sent so far. elapsed_s : host time since the beginning."""

    blocks: int = 0
    samples: int = 0
    data_bytes: int = 0
    elapsed_s: float = 0.0


class FeedSocket:
    """A PUSH socket with a queue bounded in bytes, to a service that must be there.

    StreamError from `send` when nothing takes a message for `timeout_s`; UsageError for an address that cannot be.
    """

    def __init__(self, address: str, block_bytes: int, timeout_s: float) -> None:
        self.address, self.timeout_s = address, timeout_s
        self._context = zmq.Context()
        self._socket: zmq.Socket[bytes] = self._context.socket(zmq.PUSH)
        for option, value in (
            (zmq.SNDHWM, max(1, QUEUE_BYTES // block_bytes)),
            (zmq.IMMEDIATE, 1),  # nothing piles up for a service that is not there
            (zmq.LINGER, round(1000 * min(LINGER_S, timeout_s))),
            *KEEPALIVE,
            (zmq.SNDTIMEO, round(1000 * timeout_s)),
        ):
            self._socket.setsockopt(option, value)
        try:
            self._socket.connect(address)
        except zmq.ZMQError as error:
            self.close()
            raise UsageError(
                f"cannot send to {address!r} ({error}); give an endpoint such as tcp://127.0.0.1:5510"
            ) from None

    def send(self, parts: list[bytes]) -> None:
        try:
            self._socket.send_multipart(parts)
        except zmq.Again:
            raise StreamError(
                f"nothing took samples at {self.address} for {self.timeout_s:g} s: is the service running, is that its "
                "feed.bind, and does it keep up?"
            ) from None

    def close(self) -> None:
        """Waits for what is still in the queue, `timeout_s` or 10 s at most."""
        self._socket.close()
        self._context.term()


def play(recording: Recording, how: Play, address: str, sent: Sent, report: Callable[[Sent], None]) -> None:
    """Sends the whole recording; `sent` is kept up to date and `report` gets it after each block.

    Raises
    ------
    UsageError : a block length or unit that the feed does not take.
    StreamError : nothing takes the samples, or a file breaks off. Without an `end`, as the run is not over.
    """
    block_bytes = _checked_block(recording, how)
    socket = FeedSocket(address, block_bytes, how.timeout_s)
    try:
        _play_all(recording, how, socket, sent, report)
        if how.end:
            socket.send(encode_end(how.array, how.run))
    except KeyboardInterrupt:
        if how.end:
            socket.send(encode_end(how.array, how.run))
        raise
    finally:
        socket.close()


def _checked_block(recording: Recording, how: Play) -> int:
    """Bytes of a full block; UsageError if the feed would not take it."""
    block_bytes = how.block * recording.channels * BYTES_PER_VALUE[recording.type]
    if not 1 <= how.block <= recording.rate_hz or block_bytes > DATA_LIMIT:
        raise UsageError(
            f"block: got {how.block} samples, {block_bytes} bytes; must be 1 sample to 1 s "
            f"({int(recording.rate_hz)} samples), and at most {DATA_LIMIT} bytes"
        )
    if how.unit != "count" and recording.type != "f4":
        raise UsageError(
            f"unit: got {how.unit!r} for {recording.subtype}; V and uPa go with floats, integers are count"
        )
    return block_bytes


def _play_all(recording: Recording, how: Play, socket: FeedSocket, sent: Sent, report: Callable[[Sent], None]) -> None:
    began = time.monotonic()
    for _ in _rounds(how.repeat):
        for samples in recording.blocks(how.block):
            first = sent.samples
            header, data = encode_samples(
                how.array, how.run, first, how.pace.t_ns(first), recording.rate_hz, samples,
                type=recording.type, layout="sample", unit=how.unit,
            )  # fmt: skip
            wait = began + how.pace.due_s(first + samples.shape[1]) - time.monotonic()
            if wait > 0:
                time.sleep(wait)
            socket.send([header, data])
            sent.blocks += 1
            sent.samples += samples.shape[1]
            sent.data_bytes += len(data)
            sent.elapsed_s = time.monotonic() - began
            report(sent)


def _rounds(repeat: int) -> Iterator[int]:
    return iter(range(repeat)) if repeat else count()
