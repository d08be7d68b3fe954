"""An array's side of the feed: messages built from the contract, and a PUSH socket that never queues without bound."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import msgpack
import numpy as np
import zmq

__all__ = ["Block", "Feeder", "block_message", "cut_blocks", "encode_samples", "note"]

FIRST_T = 1_796_133_600_000_000_000  # 2026-12-01, some whole second


def encode_samples(values: np.ndarray, kind: str, layout: str) -> bytes:
    """(channels, samples) float64 re full scale -> little-endian bytes; ValueError where it would clip."""
    if kind != "f4" and np.nanmax(np.abs(values)) >= 1 - 2**-14:
        raise ValueError(f"the sea reaches {np.nanmax(np.abs(values)):.3f} of full scale: it would clip")
    ordered = values if layout == "channel" else values.T
    if kind == "f4":
        return np.ascontiguousarray(ordered, "<f4").tobytes()
    bits = {"i2": 16, "i3": 24, "i4": 32}[kind]
    whole = np.ascontiguousarray(np.rint(ordered * 2.0 ** (bits - 1)), "<i2" if kind == "i2" else "<i4")
    if kind != "i3":
        return whole.tobytes()
    return whole.reshape(-1, 1).view(np.uint8)[:, :3].tobytes()  # the low three of four bytes


@dataclass(frozen=True)
class Block:
    """A block to send; data are the encoded bytes of shape (channels, samples)."""

    first: int
    samples: int
    t: int
    data: bytes


def cut_blocks(
    values: np.ndarray, length: int, rate_hz: float, first: int = 0, t: int = FIRST_T, kind: str = "i4",
    layout: str = "channel",
) -> Iterator[Block]:  # fmt: skip
    """Cut (channels, samples) re full scale into blocks of `length`; sample `first` is at time `t`."""
    for at in range(0, values.shape[1], length):
        part = values[:, at : at + length]
        when = t + round(at * 1e9 / rate_hz)
        yield Block(first + at, part.shape[1], when, encode_samples(part, kind, layout))


def block_message(array: Any, block: Block, run: str, /, **keys: Any) -> list[bytes]:
    """Both frames of a `samples` message of the array model `array`; keys override those of the header."""
    header = {
        "v": 1, "kind": "samples", "array": array.name, "run": run, "first": block.first, "t": block.t,
        "rate": array.rate_hz, "shape": [array.channels, block.samples], "layout": "channel", "type": "i4",
        "unit": "count",
    }  # fmt: skip
    return [msgpack.packb(header | keys), block.data]


def note(array: Any, kind: str, /, **keys: Any) -> list[bytes]:
    """The one frame of a navigation, positions, pulse or end message."""
    return [msgpack.packb({"v": 1, "kind": kind, "array": array.name} | keys)]


class Feeder:
    """PUSH socket to the feed; its queue is short, so what is sent is a few blocks ahead of the service at most."""

    def __init__(self, endpoint: str, queue: int = 4, deadline_s: float = 60.0) -> None:
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.PUSH)
        self._socket.setsockopt(zmq.SNDHWM, queue)
        self._socket.setsockopt(zmq.LINGER, 20_000)
        self._socket.setsockopt(zmq.SNDTIMEO, round(deadline_s * 1000))
        self._socket.connect(endpoint)

    def send(self, parts: Sequence[bytes]) -> None:
        """Send one message; TimeoutError where the service takes nothing for the deadline."""
        try:
            self._socket.send_multipart(parts, copy=True)
        except zmq.Again:
            raise TimeoutError("the service took no message within the deadline") from None

    def send_all(self, messages: Iterator[list[bytes]] | Sequence[list[bytes]]) -> int:
        """Send them as fast as they are taken; how many."""
        count = 0
        for parts in messages:
            self.send(parts)
            count += 1
        return count

    def abandon(self) -> None:
        """Forget what was not taken, where the service is gone."""
        self._socket.setsockopt(zmq.LINGER, 0)

    def close(self) -> None:
        self._socket.close()
        self._context.term()

    def __enter__(self) -> "Feeder":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()
