"""process: answers that take milliseconds are made in threads, once for all who ask the same, and kept a while."""

import asyncio
from collections import OrderedDict
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

from soundrose.serve.problems import Problem

__all__ = ["Answer", "Workshop"]

THREADS = 2  #: numpy and zlib let others run meanwhile; more would only take turns
WAITING = 32  #: different answers in work or in line; the next gets 503
KEPT_BYTES = 32 * 2**20
KEPT = 256


@dataclass(frozen=True, slots=True)
class Answer:
    """A body with its media type and headers."""

    body: bytes
    media_type: str
    headers: dict[str, str]


class Workshop:
    """Makes answers in threads. Two who ask the same at the same time wait for the same work; answers are kept, the
    longest unused giving way, so that many screens with the same map cost one."""

    def __init__(self) -> None:
        self._pool = ThreadPoolExecutor(THREADS, "answers")
        self._kept: OrderedDict[str, Answer] = OrderedDict()
        self._bytes = 0
        self._running: dict[str, asyncio.Future[Answer]] = {}

    async def make(self, key: str, work: Callable[[], Answer]) -> Answer:
        """The answer named `key`, made by `work` in a thread unless it is there.

        Raises what `work` raises, and Problem 503 where too much is in line.
        """
        if key in self._kept:
            self._kept.move_to_end(key)
            return self._kept[key]
        if key not in self._running:
            if len(self._running) >= WAITING:
                raise Problem(503, f"{WAITING} answers are being made; ask again", headers={"Retry-After": "1"})
            running = asyncio.get_running_loop().run_in_executor(self._pool, work)
            self._running[key] = running
            running.add_done_callback(lambda done: self._done(key, done))
        return await asyncio.shield(self._running[key])  # one client that leaves must not end it for the others

    def close(self) -> None:
        """End the threads; what is in line is given up."""
        self._pool.shutdown(wait=False, cancel_futures=True)

    def _done(self, key: str, done: "asyncio.Future[Answer]") -> None:
        del self._running[key]
        if done.cancelled() or done.exception() is not None:
            return
        answer = done.result()
        self._kept[key] = answer
        self._bytes += len(answer.body)
        while self._kept and (self._bytes > KEPT_BYTES or len(self._kept) > KEPT):
            _, old = self._kept.popitem(last=False)
            self._bytes -= len(old.body)
