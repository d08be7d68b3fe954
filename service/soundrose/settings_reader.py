"""core: typed values out of one table of the settings file, and a line for each mistake met on the way."""

import re
from collections.abc import Collection, Mapping, Sequence
from difflib import get_close_matches
from math import isfinite
from typing import Any

__all__ = ["Notes", "Table", "finite", "is_integer", "one_line", "shown"]

#: longest piece of a wrong value that is repeated in a message
SHOWN_CHARACTERS = 60


class Notes:
    """The lines about one settings file: `problems` end the reading, `warnings` go with the settings."""

    def __init__(self, file_name: str) -> None:
        self.file_name = file_name
        self.problems: list[str] = []
        self.warnings: list[str] = []

    def problem(self, where: str, what: str) -> None:
        self.problems.append(one_line(f"{self.file_name}: {where}: {what}"))

    def warning(self, where: str, what: str) -> None:
        self.warnings.append(one_line(f"{self.file_name}: {where}: {what}"))


class Table:
    """One table while it is read. Every getter returns a value that is right, or None after noting the mistake.

    A key that is not there yields its default and is no mistake, unless it is required. `close` notes keys that
    nobody asked for. `has` tells whether the file gives the key at all. Where `values` is no table, that is noted and
    `is_table` is False.
    """

    def __init__(self, values: Any, where: str, notes: Notes) -> None:
        self.where, self.notes = where, notes
        self.is_table = isinstance(values, Mapping)
        if not self.is_table:
            notes.problem(where, f"got {shown(values)}; must be a table")
            values = {}
        self.values: Mapping[str, Any] = values
        self.known: list[str] = []

    def has(self, key: str) -> bool:
        if key not in self.known:
            self.known.append(key)
        return key in self.values

    def got(self, key: str, must: str) -> None:
        """Note that the value of `key` is wrong; `must` begins with the verb: "must be ..."."""
        self.notes.problem(f"{self.where}.{key}", f"got {shown(self.values.get(key))}; {must}")

    def missing(self, key: str, must: str) -> None:
        self.notes.problem(f"{self.where}.{key}", f"missing; {must}")

    def raw(self, key: str, default: Any, must: str, required: bool = False) -> Any:
        """The value as it stands, the default, or None where it is required and missing (noted, as is a null).

        `must` is empty where the caller notes a value that is no such thing itself.
        """
        if self.has(key):
            if self.values[key] is None and must:  # TOML has no null, but a mapping made elsewhere may hold one
                self.got(key, must)
            return self.values[key]
        if required:
            self.missing(key, must)
            return None
        return default

    def number(
        self, key: str, default: float | None, must: str, *, above: float | None = None, low: float | None = None,
        high: float | None = None, below: float | None = None, required: bool = False,
    ) -> float | None:  # fmt: skip
        """A finite number (no bool) in above < value < below, low <= value <= high."""
        value = self.raw(key, default, must, required)
        if value is None:
            return None
        number = finite(value)
        if number is None or not _inside(number, above, low, high, below):
            self.got(key, must)
            return None
        return number

    def integer(
        self, key: str, default: int | None, must: str, *, low: int, high: int, required: bool = False
    ) -> int | None:
        """A whole number (no bool, no float) in low <= value <= high."""
        value = self.raw(key, default, must, required)
        if value is None:
            return None
        if not is_integer(value) or not low <= value <= high:
            self.got(key, must)
            return None
        return int(value)

    def text(
        self, key: str, default: str | None, must: str, *, pattern: str = r"[^\x00]+", required: bool = False
    ) -> str | None:
        """A string that matches `pattern` from end to end."""
        value = self.raw(key, default, must, required)
        if value is None:
            return None
        if not isinstance(value, str) or not re.fullmatch(pattern, value):
            self.got(key, must)
            return None
        return value

    def word(self, key: str, default: str, allowed: Sequence[str]) -> str | None:
        """One of the words `allowed`."""
        value = self.raw(key, default, "")
        if not isinstance(value, str) or value not in allowed:
            self.got(key, f"must be one of {', '.join(allowed)}" + _hint(value, allowed))
            return None
        return value

    def flag(self, key: str, default: bool) -> bool | None:
        value = self.raw(key, default, "")
        if not isinstance(value, bool):
            self.got(key, "must be true or false")
            return None
        return value

    def close(self) -> None:
        """Note every key that no getter asked for, with the likeliest key that was meant."""
        for key in self.values:
            if key not in self.known:
                hint = _hint(key, self.known) or f"; keys here: {', '.join(self.known)}"
                self.notes.problem(f"{self.where}.{key}" if self.where else key, "unknown key" + hint)


def finite(value: Any) -> float | None:
    """`value` as a float, or None where it is no finite number (bool, NaN, infinity, text, an integer too large)."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return None
    try:
        number = float(value)
    except OverflowError:
        return None
    return number if isfinite(number) else None


def is_integer(value: Any) -> bool:
    """True for an integer that is not a bool."""
    return isinstance(value, int) and not isinstance(value, bool)


def one_line(text: str) -> str:
    """`text` with line ends and other unprintable characters written as escapes: a quoted key may hold any."""
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)


def shown(value: Any) -> str:
    """A value as a settings file would write it, cut short."""
    if isinstance(value, bool):
        text = str(value).lower()
    elif isinstance(value, str):
        text = f'"{one_line(value)}"'
    elif isinstance(value, list):
        text = "[" + ", ".join(shown(item) for item in value[:SHOWN_CHARACTERS]) + "]"
    elif isinstance(value, Mapping):
        text = "a table"
    elif is_integer(value) and abs(value) >= 10**SHOWN_CHARACTERS:
        text = f"an integer of {value.bit_length()} bits"
    else:
        text = str(value)
    return text if len(text) <= SHOWN_CHARACTERS else text[: SHOWN_CHARACTERS - 3] + "..."


def _inside(number: float, above: float | None, low: float | None, high: float | None, below: float | None) -> bool:
    return (
        (above is None or number > above)
        and (low is None or number >= low)
        and (high is None or number <= high)
        and (below is None or number < below)
    )


def _hint(word: Any, allowed: Collection[str]) -> str:
    close = get_close_matches(word, list(allowed), n=1, cutoff=0.6) if isinstance(word, str) else []
    return f"; did you mean '{close[0]}'?" if close else ""
