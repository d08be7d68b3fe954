"""codec: what answers are made from."""

from collections.abc import Callable
from dataclasses import dataclass

from soundrose.serve.latest import Latest, Message
from soundrose.serve.problems import Problem
from soundrose.settings_types import Settings

__all__ = ["Source", "newest"]


@dataclass(frozen=True, slots=True)
class Source:
    """What the application answers from. now : host monotonic clock, seconds."""

    settings: Settings
    latest: Latest
    now: Callable[[], float]


def newest(source: Source, topic: str) -> Message:
    """The newest message of a topic. Problem 503 while there is none."""
    message = source.latest.get(topic)
    if message is None:
        raise Problem(503, f"no {topic} message has come yet; ask again", headers={"Retry-After": "1"})
    return message
