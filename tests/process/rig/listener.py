"""A subscriber that keeps everything it hears, and waits for conditions under a deadline."""

import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import msgpack
import numpy as np
import zmq

__all__ = ["Listener", "Message"]


@dataclass(frozen=True)
class Message:
    """One published message: topic, header, raw data (empty if none), when it came (monotonic seconds)."""

    topic: str
    header: dict[str, Any]
    data: bytes
    came: float

    @property
    def level_db(self) -> np.ndarray:
        """(beams, bins) float32 of a map."""
        return np.frombuffer(self.data, "<f4").reshape(self.header["shape"])

    @property
    def cosines(self) -> np.ndarray:
        return np.cos(np.radians(self.header["cone_deg"]))

    @property
    def frequencies_hz(self) -> np.ndarray:
        return self.header["f0_hz"] + self.header["df_hz"] * np.arange(self.header["shape"][1])

    def band_db(self, low_hz: float, high_hz: float) -> np.ndarray:
        """(beams,) level of the mean power of the bins within [low, high]."""
        inside = (self.frequencies_hz >= low_hz) & (self.frequencies_hz <= high_hz)
        assert inside.any(), f"no bin between {low_hz} and {high_hz} Hz"
        return 10 * np.log10(np.mean(10 ** (self.level_db[:, inside].astype(float) / 10), axis=1))


class Listener:
    """SUB socket in a thread of its own. Messages are kept in order of arrival, by topic."""

    def __init__(self, endpoint: str, topics: tuple[str, ...] = ("",)) -> None:
        self._context = zmq.Context()
        self._endpoint, self._topics = endpoint, topics
        self._changed = threading.Condition()
        self._kept: dict[str, list[Message]] = {}
        self._broken: BaseException | None = None
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run, name="listener", daemon=True)
        self._thread.start()

    def _run(self) -> None:
        socket = self._context.socket(zmq.SUB)
        socket.setsockopt(zmq.RCVHWM, 200_000)
        socket.setsockopt(zmq.LINGER, 0)
        socket.connect(self._endpoint)
        for topic in self._topics:
            socket.setsockopt(zmq.SUBSCRIBE, topic.encode())
        try:
            while not self._stop.is_set():
                if socket.poll(50):
                    self._keep(socket.recv_multipart())
        except BaseException as error:  # shown to the test at its next wait
            with self._changed:
                self._broken = error
                self._changed.notify_all()
        finally:
            socket.close()

    def _keep(self, parts: list[bytes]) -> None:
        header = msgpack.unpackb(parts[1])
        data = parts[2] if len(parts) > 2 else b""
        message = Message(parts[0].decode("ascii"), header, data, time.monotonic())
        with self._changed:
            self._kept.setdefault(message.topic, []).append(message)
            self._changed.notify_all()

    def of(self, topic: str) -> list[Message]:
        """All messages of the topic so far, in order."""
        with self._changed:
            return list(self._kept.get(topic, []))

    def topics(self) -> list[str]:
        with self._changed:
            return sorted(self._kept)

    def wait(self, what: str, condition: Callable[["Listener"], Any], deadline_s: float = 30.0) -> Any:
        """The condition's value once it is true; AssertionError, naming `what`, at the deadline."""
        until = time.monotonic() + deadline_s
        while True:
            with self._changed:
                seen = sum(map(len, self._kept.values()))
                broken = self._broken
            if broken:
                raise broken
            if value := condition(self):
                return value
            with self._changed:
                if sum(map(len, self._kept.values())) == seen:
                    self._changed.wait(min(0.2, max(0.0, until - time.monotonic())))
            if time.monotonic() >= until:
                raise AssertionError(f"within {deadline_s:g} s no {what}; {self._told()}")

    def _told(self) -> str:
        counts = {topic: len(self.of(topic)) for topic in self.topics()}
        status = self.of("status")
        return f"came {counts}, last status {status[-1].header if status else None}"

    def wait_status(self, what: str, condition: Callable[[dict[str, Any]], Any], deadline_s: float = 30.0) -> dict:
        """The newest `status` once it satisfies the condition."""

        def newest(self: "Listener") -> dict[str, Any] | None:
            status = self.of("status")
            return status[-1].header if status and condition(status[-1].header) else None

        return self.wait(f"status with {what}", newest, deadline_s)

    def wait_count(self, topic: str, count: int, deadline_s: float = 30.0) -> list[Message]:
        """The messages of the topic once there are `count`."""
        self.wait(f"{count} messages on {topic}", lambda s: len(s.of(topic)) >= count, deadline_s)
        return self.of(topic)

    def close(self) -> None:
        self._stop.set()
        self._thread.join(5)
        self._context.term()

    def __enter__(self) -> "Listener":
        return self

    def __exit__(self, *_: object) -> None:
        self.close()
