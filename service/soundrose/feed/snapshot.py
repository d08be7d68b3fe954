"""codec: what a restarted ingest goes on from, as few bytes: run, index, counters, states, the notes in force.

Three msgpack values one after the other: the count, which changes with every message, the rest, which seldom does,
and what is known of the sample clock; the last two are therefore kept packed. Written and read by this program alone,
under a version of its own.
"""

from collections.abc import Mapping, Sequence
from dataclasses import asdict, fields
from typing import Any, Final, NamedTuple

import msgpack
import numpy as np
from numpy.typing import NDArray

from soundrose.errors import UsageError
from soundrose.feed.clock import SampleClock
from soundrose.feed.hop import Navigation, Note, Positions
from soundrose.feed.sequence import Candidate, Counters, RunState
from soundrose.feed.wire import REASONS

__all__ = ["SNAPSHOT_LIMIT", "Snapshot", "pack_clock", "pack_count", "pack_rest", "snapshot_facts", "unpack_snapshot"]

SNAPSHOT_LIMIT: Final = 60 * 1024  #: bytes; a snapshot is never larger
_REST_LIMIT: Final = 44 * 1024  #: bytes of the rest; beyond it the notes are left out, and come again from the source
_VERSION: Final = 2
_COUNTED: Final = tuple(f.name for f in fields(Counters))


def pack_count(state: RunState, counters: Counters) -> bytes:
    """The part that changes with every message."""
    return bytes(msgpack.packb((
        _VERSION, state.running, state.run, state.epoch, state.next, state.first, state.t_ns, state.stretch,
        state.ended, state.replaced, state.candidate,
        counters.blocks, counters.samples, counters.gaps, counters.lost_samples, counters.trimmed_samples,
        counters.unused_samples, counters.restarts, counters.clock_jumps, counters.late,
        list(counters.dropped.values()),
    )))  # fmt: skip


def pack_rest(states: NDArray[np.uint8], notes: Sequence[Note]) -> bytes:
    """The part that seldom changes. states : (channels,) uint8, of the hydrophones, one byte each."""
    codes = states.tobytes()
    rest = bytes(msgpack.packb((codes, [plain for plain in map(_plain, notes) if plain])))
    return rest if len(rest) <= _REST_LIMIT else bytes(msgpack.packb((codes, [])))


def pack_clock(facts: Mapping[str, Any]) -> bytes:
    """What `SampleClock.facts` gives."""
    return bytes(msgpack.packb(facts))


def _plain(note: Note) -> tuple[Any, ...]:
    if isinstance(note, Positions):
        return ("positions", note.t_ns, note.positions_m.astype("<f8").tobytes())
    if isinstance(note, Navigation):
        speed = note.values["sound_speed_m_s"]
        return ("sound speed", note.t_ns, note.of, speed)
    return ()


class Snapshot(NamedTuple):
    """states : (channels,) uint8, of the hydrophones.  clock : facts of the sample clock; {} before its first."""

    state: RunState
    counters: Counters
    states: NDArray[np.uint8]
    notes: list[Note]
    clock: dict[str, Any]


def unpack_snapshot(snapshot: bytes, channels: int) -> Snapshot:
    """Read it. UsageError if it is not a snapshot."""
    try:
        unpacker = msgpack.Unpacker(use_list=False)
        unpacker.feed(snapshot)
        count, (codes, notes), clock = unpacker.unpack(), unpacker.unpack(), unpacker.unpack()
        version, running, run, epoch, following, first, t_ns, stretch, ended, replaced, candidate, *counts = count
        if version != _VERSION:
            raise UsageError(f"the snapshot has version {version!r}; this program reads {_VERSION}")
        state = RunState(
            running, run, epoch, following, first, t_ns, stretch, ended, replaced,
            Candidate(*candidate) if candidate else None,
        )  # fmt: skip
        counters = Counters(**dict(zip(_COUNTED, counts, strict=True)))
        counters.dropped = dict(zip(REASONS, counts[-1], strict=True))
        states = np.frombuffer(codes, np.uint8, count=channels)
        return Snapshot(state, counters, states, [_note(note) for note in notes], dict(clock))
    except (ValueError, TypeError, LookupError, msgpack.UnpackException) as error:
        if isinstance(error, UsageError):
            raise
        raise UsageError(f"not a snapshot of {len(snapshot)} bytes ({error}); start without it") from None


def snapshot_facts(snapshot: bytes) -> dict[str, Any]:
    """Of a snapshot what the status message says: `run` and `next` (None while waiting), every counter, `clock`.

    An empty snapshot is that of a feed that has not begun. UsageError if it is not a snapshot.
    """
    state, counters, clock = RunState(), Counters(), SampleClock(1.0).facts()
    if snapshot:
        state, counters, _, _, clock = unpack_snapshot(snapshot, 0)
    run, following = (state.run, state.next) if state.running else (None, None)
    return {"run": run, "next": following, **asdict(counters), "clock": clock}


def _note(plain: tuple[Any, ...]) -> Note:
    if plain[0] == "positions":
        return Positions(plain[1], np.frombuffer(plain[2], "<f8").reshape(-1, 3))
    return Navigation(plain[1], plain[2], {"sound_speed_m_s": plain[3]})
