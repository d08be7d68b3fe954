"""core: places in the event log as text: which log, and after which of its rows."""

import re
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Literal

from soundrose.errors import UsageError

__all__ = ["BEGIN", "Cursor", "CursorGone", "parse_since"]

BEGIN = "begin"  #: the place before the first event there is, in whichever log
_CURSOR = re.compile(r"([0-9a-f]{16})-([0-9]{1,18})")
_MOMENT = re.compile(
    r"(\d{4}-\d{2}-\d{2})[Tt ](\d{2}:\d{2}:\d{2})(?:\.(\d{1,9})\d*)?([Zz]|[+-]\d{2}:\d{2})", re.ASCII
)  # RFC 3339, section 5.6; a space for the T as its note allows
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_MOST_NS = 2**63 - 1

GoneWhy = Literal["retention", "another log", "ahead"]


@dataclass(frozen=True, slots=True, order=True)
class Cursor:
    """The place after row `row` of the log named `log` (16 hex digits); row 0 is before the first."""

    log: str
    row: int

    def __str__(self) -> str:
        return f"{self.log}-{self.row}"

    @classmethod
    def parse(cls, text: str) -> "Cursor":
        """The cursor that `str` wrote. Raises UsageError for anything else."""
        found = _CURSOR.fullmatch(text)
        if found is None:
            raise UsageError(f"cursor is {text[:80]!r}; send a `next` or `cursor` value as it was given")
        return cls(found[1], int(found[2]))


class CursorGone(UsageError):
    """A cursor that was good once and cannot be followed any more. why : retention, another log, ahead."""

    code = "cursor-gone"
    _TEXTS: Mapping[str, str] = {
        "retention": "events after this cursor have been deleted by retention; begin anew with the oldest event left",
        "another log": "this cursor belongs to another event log (the log was begun anew); begin anew",
        "ahead": "this cursor is ahead of the event log (the log was set back, as from a copy); begin anew",
    }

    def __init__(self, why: GoneWhy) -> None:
        self.why: GoneWhy = why
        super().__init__(self._TEXTS[why])

    def __reduce__(self) -> tuple[type["CursorGone"], tuple[GoneWhy]]:
        return type(self), (self.why,)


def parse_since(text: str | None) -> Cursor | int | None:
    """What `since` asks for: a cursor, a time (integer ns since 1970 UTC), or None for the first event there is.

    Raises
    ------
    UsageError : it is neither a cursor nor an RFC 3339 time with its offset.
    """
    if text is None or text == BEGIN:
        return None
    if _CURSOR.fullmatch(text):
        return Cursor.parse(text)
    # a '+' that was not escaped in a query arrives as a space
    found = _MOMENT.fullmatch(re.sub(r" (\d{2}:\d{2})$", r"+\1", text))
    if found is None:
        raise UsageError(
            f"since is {text[:80]!r}; send a `next` value of an earlier answer, or a time such as"
            " 2026-12-01T14:05:00Z (RFC 3339, with Z or an offset)"
        )
    return _nanoseconds(text, found)


def _nanoseconds(text: str, found: re.Match[str]) -> int:
    offset = "+00:00" if found[4] in "Zz" else found[4]
    try:
        moment = datetime.fromisoformat(f"{found[1]}T{found[2]}{offset}")
        whole = (moment - _EPOCH) // timedelta(seconds=1)
    except (ValueError, OverflowError):
        raise UsageError(f"since is {text[:80]!r}; there is no such day or time of day") from None
    t_ns = whole * 1_000_000_000 + int((found[3] or "").ljust(9, "0"))
    if not -_MOST_NS <= t_ns <= _MOST_NS:
        raise UsageError(f"since is {text[:80]!r}; times from 1678 to 2262 can be asked for")
    return t_ns
