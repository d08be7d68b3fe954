"""core: what a live client may ask for: text in, a checked request or every mistake in it out."""

import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from math import isfinite
from typing import Any, Literal, get_args

from soundrose.errors import UsageError
from soundrose.product.reduce import Pick

__all__ = [
    "EVENT_TOPICS", "RATE_MOST_HZ", "REQUEST_MOST_BYTES", "STATE_TOPICS", "TOPICS", "Encoding", "LiveRequest",
    "Reduction", "parse_request",
]  # fmt: skip

Encoding = Literal["f4", "u1"]

STATE_TOPICS = ("status", "health", "levels", "track")  #: of these published messages the newest counts
EVENT_TOPICS = ("detection", "track", "alert", "health", "status", "note")  #: kinds of logged events
TOPICS = ("map", "detection", "track", "health", "levels", "status", "alert", "note")
REQUEST_MOST_BYTES = 64 * 1024
RATE_MOST_HZ = 100.0
_LIMIT_MOST = 1_000_000
_SINCE_MOST = 100  # characters: a cursor has 35, a time 35


@dataclass(frozen=True, slots=True)
class Reduction:
    """How a map is made smaller and encoded; equal ones share their bytes. bins, beams : upper limits.  f_... : Hz."""

    bins: int | None = None
    beams: int | None = None
    f_min: float | None = None
    f_max: float | None = None
    pick: Pick = "mean"
    encoding: Encoding = "f4"


@dataclass(frozen=True, slots=True)
class LiveRequest:
    """A request that can be followed. bands : empty where no map is asked for.  rate_hz : None = every map."""

    topics: frozenset[str]
    bands: tuple[str, ...] = ()
    reduction: Reduction = Reduction()
    rate_hz: float | None = None
    since: str | None = None

    @property
    def kinds(self) -> tuple[str, ...]:
        """Kinds of logged events asked for."""
        return tuple(kind for kind in EVENT_TOPICS if kind in self.topics)


def parse_request(text: str, bands: Mapping[str, tuple[float, float]]) -> LiveRequest:
    """The request in `text`, JSON. bands : name -> lowest and highest frequency, Hz, in the order of the settings.

    Raises
    ------
    UsageError : every mistake found, joined by '; '. Keys that are not known are passed over.
    """
    fields = _Fields(_object(text))
    topics = fields.words("subscribe", TOPICS, required=True)
    map_fields = fields.within("map")
    names = map_fields.words("bands", bands) or tuple(bands)
    reduction = Reduction(
        bins=map_fields.count("bins"),
        beams=map_fields.count("beams"),
        f_min=map_fields.number("f_min"),
        f_max=map_fields.number("f_max"),
        pick=map_fields.word("pick", get_args(Pick)),
        encoding=map_fields.word("encoding", get_args(Encoding)),
    )
    rate_hz = map_fields.rate("rate_hz")
    since = fields.text("since")
    mistakes = fields.mistakes
    if not mistakes:
        mistakes += _range_mistakes(reduction, {name: bands[name] for name in names})
    if mistakes:
        raise UsageError("; ".join(mistakes))
    return LiveRequest(frozenset(topics), names if "map" in topics else (), reduction, rate_hz, since)


def _object(text: str) -> dict[str, Any]:
    def refuse(constant: str) -> Any:
        raise ValueError(f"{constant} is no JSON")

    try:
        value = json.loads(text, parse_constant=refuse)
    except (ValueError, RecursionError) as error:
        raise UsageError(f"the request is not JSON: {error}") from None
    if not isinstance(value, dict):
        raise UsageError(f"the request is {_shown(value)}; it must be an object with the key subscribe")
    return value


def _range_mistakes(reduction: Reduction, bands: Mapping[str, tuple[float, float]]) -> list[str]:
    low, high = reduction.f_min, reduction.f_max
    if low is not None and high is not None and low > high:
        return [f"map.f_min is {low:g}; it must not be above map.f_max, {high:g}"]
    return [
        f"map: band {name} has {lowest:g} to {highest:g} Hz; nothing of it is left by f_min, f_max"
        for name, (lowest, highest) in bands.items()
        if (low is not None and low > highest) or (high is not None and high < lowest)
    ]


class _Fields:
    """Keys of one object, read one by one; what cannot be used is noted and reads as absent."""

    def __init__(self, given: Mapping[str, Any], prefix: str = "", mistakes: list[str] | None = None) -> None:
        self._given, self._prefix = given, prefix
        self.mistakes: list[str] = [] if mistakes is None else mistakes

    def _wrong(self, key: str, allowed: str) -> None:
        shown = _shown(self._given[key]) if key in self._given else "missing"
        self.mistakes.append(f"{self._prefix}{key} is {shown}; it must be {allowed}")

    def within(self, key: str) -> "_Fields":
        value = self._given.get(key)
        if value is not None and not isinstance(value, dict):
            self._wrong(key, "an object")
            value = None
        return _Fields(value or {}, f"{key}.", self.mistakes)

    def words(self, key: str, allowed: Iterable[str], required: bool = False) -> tuple[str, ...]:
        value, allowed = self._given.get(key), tuple(allowed)
        if value is None and not required:
            return ()
        if not isinstance(value, list) or not all(isinstance(word, str) and word in allowed for word in value):
            self._wrong(key, f"a list of words out of {', '.join(allowed)}")
            return ()
        return tuple(word for word in allowed if word in value)

    def word(self, key: str, allowed: tuple[Any, ...]) -> Any:
        """One of `allowed`; the first if it is not given."""
        value = self._given.get(key)
        if value is None:
            return allowed[0]
        if not isinstance(value, str) or value not in allowed:
            self._wrong(key, f"one of {', '.join(allowed)}")
            return allowed[0]
        return value

    def count(self, key: str) -> int | None:
        value = self._given.get(key)
        if value is None:
            return None
        if isinstance(value, bool) or not isinstance(value, int) or not 1 <= value <= _LIMIT_MOST:
            self._wrong(key, f"a whole number from 1 to {_LIMIT_MOST}")
            return None
        return value

    def number(self, key: str) -> float | None:
        value = self._given.get(key)
        if value is None:
            return None
        if not _is_number(value) or value < 0:
            self._wrong(key, "a number of Hz, 0 or above")
            return None
        return float(value)

    def rate(self, key: str) -> float | None:
        value = self._given.get(key)
        if value is None:
            return None
        if not _is_number(value) or not 0 < value <= RATE_MOST_HZ:
            self._wrong(key, f"above 0 and at most {RATE_MOST_HZ:g}")
            return None
        return float(value)

    def text(self, key: str) -> str | None:
        value = self._given.get(key)
        if value is None:
            return None
        if not isinstance(value, str) or not 1 <= len(value) <= _SINCE_MOST:
            self._wrong(key, "a cursor as it was given, or a time such as 2026-12-01T14:05:00Z")
            return None
        return value


def _is_number(value: Any) -> bool:
    if isinstance(value, bool) or not isinstance(value, int | float):
        return False
    return abs(value) < 2**53 if isinstance(value, int) else isfinite(value)


def _shown(value: Any) -> str:
    try:
        text = json.dumps(value)
    except RecursionError:
        return "nested too deep"
    return text if len(text) <= 60 else f"{text[:57]}..."
