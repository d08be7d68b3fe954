"""process: the cyclic garbage collector: nothing to walk through but what is new, and its pauses measured."""

import gc
import time
from typing import Any

__all__ = ["GarbageWatch"]


class GarbageWatch:
    """Measures how long the collector holds this process up, and takes what is there for good out of its way.

    A full collection walks through every object there is: 100 to 300 ms in a process with a web framework loaded.
    `settle`, once the process is warm, freezes what has been made so far; later collections walk through the rest.
    The collector is never switched off: a leak through cycles would then end the process.
    """

    def __init__(self) -> None:
        self._begun = 0.0
        self._settled = False
        self.pauses = 0
        self.longest_s = self.total_s = 0.0
        gc.callbacks.append(self._called)

    def settle(self) -> None:
        """Collect and freeze, the first time it is called; what was measured while warming up is forgotten."""
        if self._settled:
            return
        self._settled = True
        gc.collect()
        gc.freeze()
        self.pauses, self.longest_s, self.total_s = 0, 0.0, 0.0

    def facts(self) -> dict[str, Any]:
        """Plain values for a heartbeat."""
        return {"pauses": self.pauses, "longest_ms": round(1e3 * self.longest_s, 3), "total_s": round(self.total_s, 6)}

    def close(self) -> None:
        gc.callbacks.remove(self._called)

    def _called(self, phase: str, _: dict[str, int]) -> None:
        if phase == "start":
            self._begun = time.perf_counter()
            return
        pause = time.perf_counter() - self._begun
        self.pauses += 1
        self.total_s += pause
        self.longest_s = max(self.longest_s, pause)
