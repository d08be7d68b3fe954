"""process: the event log over HTTP, and new events as they come for whoever follows."""

import asyncio
import contextlib
import logging
from collections.abc import Callable, Collection
from pathlib import Path
from typing import Any

from soundrose.errors import UsageError
from soundrose.serve.problems import Problem
from soundrose.store.cursors import BEGIN, Cursor, CursorGone, parse_since
from soundrose.store.event_reader import MOST_ITEMS, EventReader, NoLog

__all__ = ["KINDS", "EventTap", "Follower"]

#: every kind of event; those later in the list come with later versions and may be asked for today
KINDS = ("health", "status", "note", "detection", "track", "alert")
POLL_S = 0.25  #: new events reach followers this long after their commit at the latest
_log = logging.getLogger("soundrose")

Follower = Callable[[list[dict[str, Any]]], None]


class EventTap:
    """One look at the log for all clients: pages on request, and every new event to each follower.

    Reads in threads, with connections that cannot write, so that the loop never waits for a disk and answers while
    the writer is away. folder : `store.path`.
    """

    def __init__(self, folder: Path) -> None:
        self._pages, self._news = EventReader(folder), EventReader(folder)
        self._followers: dict[int, Follower] = {}
        self._number = 0
        self._seen: Cursor | None = None
        self._task: asyncio.Task[None] | None = None

    async def start(self) -> None:
        """Note the newest event and begin to watch. A log that is not there yet is waited for."""
        self._seen = await asyncio.to_thread(self._place_now)
        self._task = asyncio.create_task(self._watch(), name="event tap")

    async def stop(self) -> None:
        if self._task is not None:
            self._task.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await self._task
            self._task = None
        self._pages.close()
        self._news.close()

    def newest_cursor(self) -> str:
        """The place up to which followers have been given everything; they get what comes after it, in order.

        To go on from an older cursor without a hole and without anything twice: subscribe and take this cursor in one
        step (no await between), read `since(old, until=this)` page by page, then hand on what the callback got.
        """
        return BEGIN if self._seen is None else str(self._seen)

    async def since(
        self, cursor: str | None, kinds: Collection[str] | None = None, limit: int = 100, until: str | None = None
    ) -> tuple[list[dict[str, Any]], str]:
        """(items, next) after `cursor`: a cursor, an RFC 3339 time, or None for the first event there is.

        Raises
        ------
        Problem : 422 for what is no cursor, time, kind or limit; 410 for a cursor that cannot be followed any more
            (`why` says retention, another log or ahead); 503 while there is no log to read.
        """
        try:
            place = parse_since(cursor)
            end = None if until in (None, BEGIN) else Cursor.parse(str(until))
            if unknown := sorted(set(kinds or ()) - set(KINDS)):
                raise UsageError(f"kinds has {', '.join(map(repr, unknown))}; known kinds are {', '.join(KINDS)}")
            items, after = await asyncio.to_thread(self._pages.since, place, kinds, limit, end)
        except CursorGone as error:
            raise Problem(410, str(error), why=error.why) from None
        except UsageError as error:
            raise Problem(422, str(error)) from None
        except NoLog as error:
            raise Problem(503, str(error), headers={"Retry-After": "1"}) from None
        return items, str(after)

    def subscribe(self, follower: Follower) -> Callable[[], None]:
        """Call `follower` in the loop with each batch (at most MOST_ITEMS) of new events; returns what ends it.

        It must not wait and must not raise: it puts the items where its client's own task finds them.
        """
        self._number += 1
        number = self._number
        self._followers[number] = follower

        def end() -> None:
            self._followers.pop(number, None)

        return end

    async def _watch(self) -> None:
        version: tuple[str, int] | None = None
        while True:
            try:
                now = await asyncio.to_thread(self._news.version)
                if now != version:
                    await self._hand_on()
                    version = now
            except NoLog:
                version = None
            await asyncio.sleep(POLL_S)

    async def _hand_on(self) -> None:
        while True:
            items, self._seen = await asyncio.to_thread(self._after, self._seen)
            for follower in list(self._followers.values()) if items else ():
                follower(items)
            if len(items) < MOST_ITEMS:
                return

    def _after(self, place: Cursor | None) -> tuple[list[dict[str, Any]], Cursor]:
        try:
            return self._news.since(place, None, MOST_ITEMS)
        except CursorGone as error:
            _log.warning("event log: %s", error)
            return self._news.since(None, None, MOST_ITEMS)

    def _place_now(self) -> Cursor | None:
        try:
            return self._news.newest()
        except NoLog:
            return None
