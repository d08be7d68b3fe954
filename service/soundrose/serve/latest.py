"""core: the newest message of every topic, and whether the service is ready by the newest status."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

__all__ = ["Latest", "Message", "not_ready"]

STATUS_AGE_S = 3.0  #: an older status says nothing about now


@dataclass(frozen=True, slots=True, eq=False)
class Message:
    """One published message. data : raw bytes of a map, None for topics without; heard_s : host monotonic clock."""

    topic: str
    header: Mapping[str, Any]
    data: memoryview | None
    heard_s: float


class Latest:
    """Newest message per topic; topics are few and fixed by the settings, so this is bounded."""

    def __init__(self) -> None:
        self._messages: dict[str, Message] = {}
        self._listeners: list[Callable[[Message], None]] = []

    def listen(self, listener: Callable[[Message], None]) -> None:
        """Call `listener` with every message put from now on; it must not wait and must not raise."""
        self._listeners.append(listener)

    def put(self, message: Message) -> None:
        self._messages[message.topic] = message
        for listener in self._listeners:
            listener(message)

    def get(self, topic: str) -> Message | None:
        return self._messages.get(topic)


def not_ready(status: Message | None, now: float) -> list[str]:
    """Names of what is not up; empty when the service is ready, samples or not.

    status : the newest status message, if any.  now : host monotonic clock, seconds.
    """
    if status is None or now - status.heard_s > STATUS_AGE_S:
        return ["status"]
    return [process["name"] for process in status.header["processes"] if process["state"] != "up"]
