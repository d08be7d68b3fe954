"""process: act as an array: send samples and notes to a service's feed."""

from time import time_ns
from types import TracebackType
from typing import Any, Self
from uuid import uuid4

import numpy as np
import zmq
from numpy.typing import ArrayLike

from soundrose_client.blocks import Unit, encode_note, encode_samples, sample_type
from soundrose_client.errors import SendTimeout, UsageError
from soundrose_client.sockets import Configure, connect, high_water, prepare_patient

__all__ = ["Source"]

ADDRESS = "tcp://127.0.0.1:5510"
QUEUE_BYTES = 16 << 20
BLOCK_BYTES = 1 << 20
BLOCK_LIMIT = 64 << 20  # the feed takes no larger one


class Source:
    """An array, as the service sees it: one thread, one run of samples at a time.

    Parameters
    ----------
    array : `array.id` of the service's settings.  rate_hz : its `feed.rate_hz`, exactly.
    address : the service's `feed.bind`.
    run : name of the run, which is one uninterrupted count of samples; by default a name of its own.
    type : i2, i3 (24 bit), i4 or f4.  unit : count (full scale 1), or V or uPa with f4.
    timeout_s : longest wait for the service to take a block; None waits for ever.
    queue_bytes, block_bytes : samples are cut into blocks of at most `block_bytes` and 1 s, and about
        queue_bytes // block_bytes of them wait here when the service is slow; then `send` waits.
    linger_s : how long `close` waits for what is still in the queue.
    configure : gets the socket before it connects (keys, tokens).

    Raises
    ------
    UsageError : a value that cannot be.

    >>> with Source("aft", 16000.0) as source:     # doctest: +SKIP
    ...     source.send(samples)                   # (channels, n) int16
    """

    def __init__(
        self,
        array: str,
        rate_hz: float,
        address: str = ADDRESS,
        *,
        run: str | None = None,
        type: str = "i2",
        unit: Unit = "count",
        timeout_s: float | None = 10.0,
        queue_bytes: int = QUEUE_BYTES,
        block_bytes: int = BLOCK_BYTES,
        linger_s: float = 5.0,
        configure: Configure | None = None,
        context: zmq.Context[Any] | None = None,
    ) -> None:
        if not rate_hz > 0:
            raise UsageError(f"rate_hz is {rate_hz!r}; it must be above 0")
        self.array, self.rate_hz, self.address = array, float(rate_hz), address
        self.type, self.unit = sample_type(type, unit), unit
        self.run = run or f"{array}-{uuid4().hex[:12]}"
        self.timeout_s = timeout_s
        self._block_bytes = min(block_bytes, BLOCK_LIMIT)
        depth = high_water(queue_bytes, block_bytes)
        self._next, self._runs, self._open = 0, 0, False
        self._anchor: tuple[int, int] | None = None  # (index, its t): times of the samples after go on from here
        self._own_context = context is None
        self._context = zmq.Context() if context is None else context
        try:
            self._socket = self._connect(depth, round(linger_s * 1000), configure)
        except BaseException:
            if self._own_context:
                self._context.term()
            raise

    def _connect(self, depth: int, linger_ms: int, configure: Configure | None) -> zmq.Socket[bytes]:
        socket: zmq.Socket[bytes] = self._context.socket(zmq.PUSH)
        prepare_patient(socket, linger_ms, message_limit=1 << 20)
        socket.setsockopt(zmq.SNDHWM, depth)
        socket.setsockopt(zmq.IMMEDIATE, 1)  # nothing piles up for a service that is not there
        if self.timeout_s is not None:
            socket.setsockopt(zmq.SNDTIMEO, max(0, round(self.timeout_s * 1000)))
        connect(socket, self.address, configure)
        return socket

    @property
    def next_index(self) -> int:
        """Index in the run of the sample that `send` takes for its first."""
        return self._next

    def send(self, samples: ArrayLike, t_ns: int | None = None, *, first: int | None = None) -> None:
        """Sends samples that follow those before.

        Parameters
        ----------
        samples : (channels, n), any n; cut into blocks as needed.
        t_ns : time of the first of them, ns since 1970 UTC. By default it goes on from the last time given at the
            rate; at the start of a run it is the host's clock less the length of `samples`.
        first : its index in the run, where samples were lost before it; by default the one that follows.

        Raises
        ------
        SendTimeout : the service did not take a block in `timeout_s`. What was sent stays counted: a second
            `send` goes on from there with what is left out as a gap.
        UsageError : wrong shape or type, or integers that do not fit.
        """
        wire = encode_samples(samples, self.type)
        channels, length = wire.shape[0], wire.shape[1]
        index = self._next if first is None else self._checked_first(first)
        if t_ns is not None or self._anchor is None:
            t = time_ns() - round(length * 1e9 / self.rate_hz) if t_ns is None else t_ns
            self._anchor = (index, t)
        self._next = index + length  # as if sent: after a timeout the samples are gone, and the service sees a gap
        step = self._step(wire.nbytes // length)
        for begin in range(0, length, step):
            block = np.ascontiguousarray(wire[:, begin : begin + step])
            self._push(self._header(index + begin, channels, block.shape[1]), block.tobytes())
            self._open = True

    def _checked_first(self, first: int) -> int:
        if not 0 <= first < 1 << 53:
            raise UsageError(f"first is {first!r}; it must be from 0 to 2**53 - 1")
        return first

    def _step(self, instant_bytes: int) -> int:
        """Samples in a block: at most `block_bytes` and 1 s, at least 1."""
        return max(1, min(self._block_bytes // instant_bytes, int(self.rate_hz)))

    def _header(self, index: int, channels: int, length: int) -> bytes:
        assert self._anchor is not None
        anchor, t = self._anchor
        keys = {
            "run": self.run,
            "first": index,
            "t": t + round((index - anchor) * 1e9 / self.rate_hz),
            "rate": self.rate_hz,
            "shape": [channels, length],
            "layout": "channel",
            "type": self.type,
            "unit": self.unit,
        }
        return encode_note("samples", self.array, keys)

    def navigation(self, t_ns: int | None = None, **values: float | str) -> None:
        """Where the array or the ship is: `latitude_deg`, `heading_deg`, `sound_speed_m_s` ... as the feed names them.

        t_ns : acts from the first frame that begins then or later; by default the host's clock.
        """
        self._note("navigation", t_ns, values)

    def positions(self, positions_m: ArrayLike, t_ns: int | None = None) -> None:
        """New positions of all hydrophones listed, (channels, 3), metres, array frame. UsageError for another shape."""
        listed = np.asarray(positions_m, np.float64)
        if listed.ndim != 2 or listed.shape[1] != 3 or not np.isfinite(listed).all():
            raise UsageError(f"positions have shape {listed.shape}; send (channels, 3) finite numbers: x, y, z")
        self._note("positions", t_ns, {"positions_m": listed.tolist()})

    def pulse(self, source: str, length_s: float, t_ns: int | None = None) -> None:
        """An own active source fires at `t_ns` (by default now) for `length_s`."""
        self._note("pulse", t_ns, {"source": source, "length_s": float(length_s)})

    def _note(self, kind: str, t_ns: int | None, values: dict[str, Any]) -> None:
        self._push(encode_note(kind, self.array, {"t": time_ns() if t_ns is None else t_ns, **values}))

    def end(self) -> None:
        """The run is over. Samples sent after begin a new run, named after this one."""
        if not self._open:
            return
        self._push(encode_note("end", self.array, {"run": self.run}))
        self._runs += 1
        self.run = f"{self.run.rpartition('+')[0] or self.run}+{self._runs}"
        self._next, self._anchor, self._open = 0, None, False

    def _push(self, *parts: bytes) -> None:
        if self._socket.closed:
            raise UsageError("this source is closed: make a new one")
        try:
            self._socket.send_multipart(parts)
        except zmq.Again:
            raise SendTimeout(
                f"nothing took the samples at {self.address} within {self.timeout_s:g} s: is the service running, is "
                "that its feed.bind, and is it keeping up (feed.overload 'hold' makes a source wait)?"
            ) from None

    def close(self) -> None:
        """Ends the connection once the queue is empty, after `linger_s` at the latest; may be called twice."""
        if not self._socket.closed:
            self._socket.close()
            if self._own_context:
                self._context.term()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """An orderly leave ends the run; after an error it is left open, as whoever goes on may go on with it."""
        try:
            if error is None:
                self.end()
        finally:
            self.close()
