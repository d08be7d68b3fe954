"""core: everything that ingest does with a message but receive it: judge, count, calibrate, cut into hops.

What `push` returns, in its order, is all that is ever seen downstream, live, replayed or embedded. Bad input is
counted under its reason and changes nothing else.
"""

from collections.abc import Sequence
from typing import Literal, TypeAlias

from soundrose.errors import WireError
from soundrose.feed.assemble import HopAssembler
from soundrose.feed.calibrate import Calibration
from soundrose.feed.clock import SampleClock
from soundrose.feed.decoding import decode
from soundrose.feed.framing import FrameStarts, unused_samples
from soundrose.feed.health import Health
from soundrose.feed.hop import Hop, Note, RunEnd, hop_length
from soundrose.feed.notes import NotesInForce
from soundrose.feed.sequence import Counters, Runs, RunState
from soundrose.feed.snapshot import pack_clock, pack_count, pack_rest, snapshot_facts, unpack_snapshot
from soundrose.feed.wire import Expected, Octets, RunEndMessage, Samples
from soundrose.product.messages import HealthProduct
from soundrose.settings_types import Settings

__all__ = ["Intake", "Output", "snapshot_facts"]

Output: TypeAlias = Hop | Note | RunEnd | HealthProduct


class Intake:
    """The feed of one array, message by message.

    Parameters
    ----------
    settings : the service's settings.
    snapshot : what `snapshot()` gave before the process was restarted; None or empty at the first start. Samples of
        an unfinished hop are lost with the process: the next hop begins at `next`.

    Raises
    ------
    UsageError
        if `snapshot` is not one.

    Attributes
    ----------
    counters : Counters, of CONTRACT's status.
    clock : SampleClock, what the block times say of it; nothing downstream depends on it.
    last_drop : (reason, detail) of the last message dropped, None before the first.
    """

    def __init__(self, settings: Settings, snapshot: bytes | None = None) -> None:
        array, rate = settings.array, settings.feed.rate_hz
        frames = [band.frame for band in settings.bands]
        self._expected = Expected.of(settings)
        self._calibration = Calibration(settings.calibration)
        self._health = Health(settings)
        self._starts = [FrameStarts(frame, rate) for frame in sorted(set(frames))]
        self.hop_length = hop_length(frames)
        self._hops = HopAssembler(array.channels, self.hop_length, rate, self._calibration, self._health)
        self.counters, self._state, self._notes = Counters(), RunState(), NotesInForce()
        self.clock = SampleClock(rate)
        if snapshot:
            taken = unpack_snapshot(snapshot, array.channels)
            self._state, self.counters = taken.state, taken.counters
            self._health.resume(taken.states)
            self._notes = NotesInForce(taken.notes)
            self.clock.resume(int(taken.clock["jumps"]))
            self._give_up_hop(frames)
        self._runs = Runs(rate, frames, self.counters, self._state)
        self._run = self._state.run
        self._hops.begin(self._run or "", self._state.epoch)
        self.last_drop: tuple[str, str] | None = None
        self._rest, self._clock = self._packed_rest(), pack_clock(self.clock.facts())

    def _give_up_hop(self, frames: Sequence[int]) -> None:
        """The hop that was under way is lost: what was handed on of the stretch is whole hops, and a new one begins."""
        if self._state.running:
            length = self._state.next - self._state.stretch
            handed = length // self.hop_length * self.hop_length
            self.counters.unused_samples += length - handed + unused_samples(handed, frames)
            self._state.stretch = self._state.next

    @property
    def run(self) -> str | None:
        """Name of the current run (of the last one while waiting), None before the first."""
        return self._run

    @property
    def next(self) -> int:
        """Index expected next."""
        return self._state.next

    @property
    def state(self) -> Literal["waiting", "running"]:
        """`waiting`: no samples yet, or after an `end`. Whether a feed has stalled is for a host clock to say."""
        return "running" if self._state.running else "waiting"

    def push(self, parts: Sequence[Octets], received_ns: int = 0) -> list[Output]:
        """Take one message.

        Parameters
        ----------
        parts : its frames, bytes or buffers; not kept.
        received_ns : host monotonic clock at receipt; passed on in hops, and to `clock`.

        Returns
        -------
        What follows from it, in order. Never raises for what came.
        """
        try:
            message = decode(parts, self._expected)
        except WireError as error:
            self.drop(error.reason, error.detail)
            return []
        if type(message) is Samples:
            return self._samples(message, received_ns)
        if type(message) is RunEndMessage:
            return self._end(message)
        assert not isinstance(message, Samples | RunEndMessage)
        return self._note(message)

    def drop(self, reason: str, detail: str) -> None:
        """Count a message that is dropped under one of the contract's reasons."""
        self.counters.dropped[reason] += 1
        self.last_drop = reason, detail

    def in_force(self) -> list[Note]:
        """Positions and sound speeds that act or will act, in that order: for a band that joins now."""
        return self._notes.listed()

    def _samples(self, message: Samples, received_ns: int) -> list[Output]:
        run, first, t_ns = message.run, message.first, message.t_ns
        verdict = self._runs.block(run, first, message.samples, t_ns)
        if verdict.reason is not None:
            self.drop(verdict.reason, verdict.detail)
            return []
        out: list[Output] = []
        if verdict.breaks:
            out += self._break(verdict.ended)
        if verdict.breaks or run != self._run:
            self._run = run
            self._hops.begin(run, self._state.epoch)
        if self.clock.push(self._state.epoch, self._state.first, self._state.t_ns, received_ns):
            self._clock = pack_clock(self.clock.facts())
        block = self._calibration.open(message, verdict.skip)
        pieces = self._hops.push(block, self._state.first, self._state.t_ns, received_ns)
        for piece in pieces:
            if isinstance(piece, Hop):
                self._follow(piece)
            else:
                self._rest = self._packed_rest()
        out += pieces
        return out

    def _end(self, message: RunEndMessage) -> list[Output]:
        verdict = self._runs.end(message.run)
        if verdict.reason is not None:
            self.drop(verdict.reason, verdict.detail)
            return []
        self._run = message.run
        return self._break(verdict.ended)

    def _break(self, ended: int | None) -> list[Output]:
        """The stretch is over: its last hop, and the end of its run where that is over too."""
        out: list[Output] = []
        hop = self._hops.flush()
        if hop is not None:
            self._follow(hop)
            out.append(hop)
        if ended is not None:
            out.append(RunEnd(self._run or "", ended))
        return out

    def _follow(self, hop: Hop) -> None:
        for starts in self._starts:
            starts.push(hop)

    def _note(self, note: Note) -> list[Output]:
        completed = (starts.completed_t_ns for starts in self._starts)
        if any(t_ns is not None and t_ns >= note.t_ns for t_ns in completed):
            self.counters.late += 1
        if self._notes.add(note, self._runs.newest_t_ns):
            self._rest = self._packed_rest()
        return [note]

    def snapshot(self) -> bytes:
        """What a restarted ingest goes on from; at most `snapshot.SNAPSHOT_LIMIT` bytes, and cheap."""
        return pack_count(self._state, self.counters) + self._rest + self._clock

    def _packed_rest(self) -> bytes:
        return pack_rest(self._health.codes, self._notes.listed())
