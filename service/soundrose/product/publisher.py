"""process: sends what a process has to publish to the proxy."""

from collections.abc import Mapping
from typing import Any

import zmq

from soundrose.product.codec import Envelope, encode_map, encode_plain
from soundrose.product.messages import MapProduct

__all__ = ["Publisher"]

_QUEUE_BYTES = 128 * 2**20


class Publisher:
    """A PUB socket connected to the proxy, with the envelope of this process.

    patient : `hold`: wait for the proxy rather than lose a message (while it is there at all).
    largest : bytes of the largest message, from which the bound of the queue in messages follows.
    """

    def __init__(
        self,
        context: "zmq.Context[zmq.Socket[bytes]]",
        endpoint: str,
        envelope: Envelope,
        *,
        patient: bool = False,
        largest: int = 4096,
    ) -> None:
        self._socket = context.socket(zmq.PUB)
        self._socket.setsockopt(zmq.LINGER, 500)
        self._socket.setsockopt(zmq.SNDHWM, max(16, min(1000, _QUEUE_BYTES // max(largest, 1))))
        self._socket.setsockopt(zmq.RECONNECT_IVL, 20)
        self._socket.setsockopt(zmq.RECONNECT_IVL_MAX, 200)
        if patient:
            self._socket.setsockopt(zmq.XPUB_NODROP, 1)
            self._socket.setsockopt(zmq.SNDTIMEO, 500)
        self._socket.connect(endpoint)
        self._envelope = envelope

    def send_map(self, product: MapProduct, latency_ms: float | None) -> None:
        self._send(encode_map(self._envelope, product, latency_ms))

    def send_plain(self, topic: str, header: Mapping[str, Any]) -> None:
        self._send(encode_plain(self._envelope, topic, header))

    def _send(self, parts: list[Any]) -> None:
        try:
            self._socket.send_multipart(parts, copy=False)
        except zmq.Again:  # the proxy does not take it within SNDTIMEO; `seq` shows the hole
            pass

    def close(self) -> None:
        self._socket.close()
