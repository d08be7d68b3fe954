"""process: sends what a process has to publish to the proxy."""

import time
from collections.abc import Callable, Mapping
from typing import Any

import zmq

from soundrose.product.codec import Envelope, encode_map, encode_plain
from soundrose.product.connecting import connect_to
from soundrose.product.messages import MapProduct

__all__ = ["Publisher"]

_QUEUE_BYTES = 128 * 2**20
_TRY_MS = 200  #: a patient sender tells of itself so often while it waits ...
_PATIENCE_S = 60.0  #: ... and waits so long: a proxy that is stuck is started anew long before


class Publisher:
    """A PUB socket connected to the proxy, with the envelope of this process.

    patient : `hold`: wait for the proxy rather than lose a message. Called now and then meanwhile; False ends the wait.
        None: never wait.
    largest : bytes of the largest message, from which the bound of the queue in messages follows.
    """

    def __init__(
        self,
        context: "zmq.Context[zmq.Socket[bytes]]",
        endpoint: str,
        envelope: Envelope,
        *,
        patient: Callable[[], bool] | None = None,
        largest: int = 4096,
    ) -> None:
        self._socket = context.socket(zmq.PUB)
        self._socket.setsockopt(zmq.LINGER, 500)
        self._socket.setsockopt(zmq.SNDHWM, max(16, min(1000, _QUEUE_BYTES // max(largest, 1))))
        self._socket.setsockopt(zmq.RECONNECT_IVL, 20)
        self._socket.setsockopt(zmq.RECONNECT_IVL_MAX, 200)
        self._waiting = patient
        if patient is not None:
            self._socket.setsockopt(zmq.XPUB_NODROP, 1)
            self._socket.setsockopt(zmq.SNDTIMEO, _TRY_MS)
        connect_to(self._socket, endpoint)
        self._envelope = envelope

    def send_map(self, product: MapProduct, latency_ms: float | None) -> None:
        self._send(encode_map(self._envelope, product, latency_ms))

    def send_plain(self, topic: str, header: Mapping[str, Any]) -> None:
        self._send(encode_plain(self._envelope, topic, header))

    def _send(self, parts: list[Any]) -> None:
        until = time.monotonic() + _PATIENCE_S
        while True:
            try:
                self._socket.send_multipart(parts, copy=False)
                return
            except zmq.Again:
                if self._waiting is None or time.monotonic() > until or not self._waiting():
                    return  # `seq` shows the hole

    def close(self, linger_ms: int | None = None) -> None:
        """linger_ms : how long what was sent may still travel; half a second if not given."""
        self._socket.close(linger_ms)
