"""process: sends a scene's messages to a service: socket, clock, truth beside."""

import json
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import IO

from soundrose.feed.messages import encode_end
from soundrose.feed.pacing import Pace
from soundrose.feed.send import FeedSocket, Sent
from soundrose.feed.wire import BYTES_PER_VALUE
from soundrose.scene.recorder import Recorder
from soundrose.scene.recorder import Sent as Told
from soundrose.scene.truth import Truth

__all__ = ["ScenePlay", "play_scene"]

TRUTH_S = 1.0


@dataclass(frozen=True, slots=True)
class ScenePlay:
    """How to play. speed : times real time, infinity for as fast as taken.  truth : where lines of truth go."""

    speed: float
    timeout_s: float = 10.0
    truth: IO[str] | None = None


def play_scene(
    recorder: Recorder, block: int, how: ScenePlay, address: str, sent: Sent, report: Callable[[Sent], None]
) -> None:
    """Sends the scene; `sent` is kept up to date and `report` gets it after each block. Interrupted, it says end.

    UsageError : no such address.  StreamError : nothing takes the samples.
    """
    scene = recorder.scene
    block_bytes = block * scene.array.channels * BYTES_PER_VALUE[scene.type]
    socket = FeedSocket(address, block_bytes, how.timeout_s)
    pace = Pace(scene.true_rate_hz, how.speed, recorder.start_ns)
    truth = _TruthFile(how.truth, recorder)
    try:
        began = time.monotonic()
        for told in recorder.messages():
            wait = began + pace.due_s(told.end) - time.monotonic()
            if wait > 0:
                time.sleep(wait)
            socket.send(told.parts)
            truth.write(told.end / scene.true_rate_hz)
            _count(sent, told, time.monotonic() - began)
            report(sent)
    except KeyboardInterrupt:
        if sent.samples:
            socket.send(encode_end(scene.array.id, recorder.run))
        raise
    finally:
        socket.close()


class _TruthFile:
    """Writes a line for each second of the scene, as soon as it has been sent."""

    def __init__(self, file: IO[str] | None, recorder: Recorder) -> None:
        self._file, self._number = file, 0
        self._truth = None if file is None else Truth(recorder.scene, recorder.start_ns)

    def write(self, until_s: float) -> None:
        while self._file is not None and self._truth is not None and (t := self._number * TRUTH_S) <= until_s:
            self._file.write(json.dumps(self._truth.at(t)) + "\n")
            self._file.flush()
            self._number += 1


def _count(sent: Sent, told: Told, elapsed_s: float) -> None:
    if told.samples:
        sent.blocks += 1
        sent.samples += told.samples
        sent.data_bytes += len(told.parts[1])
    sent.elapsed_s = elapsed_s
