"""core: the one bounded ring of hops, and what each band may be given next.

Each band has a cursor, the ordinal of the hop it gets next, and a window, how many hops it may hold unacknowledged.

`drop`: the ring keeps the newest `capacity` hops. A band whose next hop has left the ring is behind: it gets the
newest hop with a count of what it missed, then the hops that follow in a row. A band has one hop at a time: one that
waited with a busy band would age outside the ring's bound.
`hold`: a hop stays until every configured band has acknowledged it, and `blocked` tells ingest to stop reading.

Notes (navigation, positions, pulse) ride with the hop that follows them and are not lost with hops that are.
"""

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass, field

from soundrose.feed.hop import Hop, Note

__all__ = ["Given", "HopRing", "ring_capacity"]

WINDOW_HOLD = 4  #: hops on their way to a band in `hold`: keeps it busy over the round trip
MAX_NOTES = 1024  #: kept for a band that is away; one that joins gets those in force anyway
RING_S = 0.75


def ring_capacity(hop: int, rate_hz: float, frames: Sequence[int]) -> int:
    """Hops that the ring keeps in `drop`: the newest and what is at most 0.75 s older, or two frames of the slowest
    band where that is more."""
    return max(1 + int(RING_S * rate_hz / hop), -(-2 * max(frames) // hop))


@dataclass(frozen=True, slots=True)
class Given:
    """One hop for one band: the notes that come before it, and how many hops the band missed before it.

    resumed : the first since the band's process or ingest was started anew; to the band it comes after a gap.
    session : what the band called itself when it joined; a hop for another session is not for it.
    """

    hop: Hop
    notes: tuple[Note, ...]
    missed: int
    resumed: bool = False
    session: str = ""


@dataclass(slots=True)
class _Band:
    session: str = ""  # connection of a band process that joined last; "" = never
    cursor: int = 0  # ordinal of the hop to give next
    acknowledged: int = 0  # ordinal after the last hop it is done with
    note: int = 0  # ordinal of the note to give next
    first_missed: int = 0  # missed hops to be told with the next one given
    resumed: bool = False  # it, or ingest, was started anew since it was given a hop
    waiting: tuple[Note, ...] = ()  # notes in force, for a band that has just joined
    taken: int = 0  # hops it has said it is done with since it joined
    given: deque[int] = field(default_factory=deque)  # ordinals on their way to it


class HopRing:
    """See the head of this file. capacity : hops kept in `drop`. bands : names of the configured bands."""

    def __init__(self, capacity: int, hold: bool, bands: Sequence[str]) -> None:
        self._capacity, self._hold = capacity, hold
        self._hops: deque[Hop] = deque()
        self._first = 0  # ordinal of the oldest hop kept
        self._notes: deque[tuple[int, Note]] = deque()  # ordinal of the hop it stands before
        self._first_note = 0
        self._bands = {name: _Band() for name in bands}

    @property
    def bands(self) -> tuple[str, ...]:
        """Names of the configured bands, in the order of the settings."""
        return tuple(self._bands)

    @property
    def _end(self) -> int:
        return self._first + len(self._hops)

    def add_hop(self, hop: Hop) -> None:
        """Put the newest hop in; in `drop` the oldest leaves if there are more than fit."""
        self._hops.append(hop)
        self._trim()

    def add_note(self, note: Note) -> None:
        """Put a note before the hop that comes next."""
        self._notes.append((self._end, note))
        while len(self._notes) > MAX_NOTES:
            self._notes.popleft()
            self._first_note += 1

    def join(self, name: str, session: str, in_force: Sequence[Note], *, followed: bool = False) -> None:
        """A band process has come (again). In `hold` it goes on where the last one had acknowledged; in `drop` it
        begins with the next hop and is told what was missed meanwhile. KeyError: no such band.

        in_force : notes that a band must know to begin.  followed : it has taken hops from another ingest before.
        """
        band = self._bands[name]
        known = bool(band.session)
        band.resumed = band.resumed or known or followed
        start = band.acknowledged if self._hold and known else self._end
        band.first_missed += start - band.acknowledged if known else 0
        band.session, band.cursor, band.acknowledged = session, start, start
        earlier = sum(before < start for before, _ in self._notes)  # the others stand before hops it is yet to get
        band.note = self._first_note + earlier
        band.waiting = tuple(in_force)
        band.given.clear()
        band.taken = 0

    def session(self, name: str) -> str:
        """Session of the band that joined last, "" if none has. KeyError: no such band."""
        return self._bands[name].session

    def acknowledge(self, name: str, taken: int) -> None:
        """The band is done with `taken` hops since it joined (a repeat or an older count changes nothing)."""
        band = self._bands[name]
        while band.taken < taken and band.given:
            band.acknowledged = band.given.popleft() + 1
            band.taken += 1
        self._trim()

    def take(self, name: str) -> Given | None:
        """The next hop for a band that may have one now; None if there is none or its window is full."""
        band = self._bands[name]
        if not band.session or band.cursor >= self._end or len(band.given) >= self._window:
            return None
        missed, band.first_missed = band.first_missed, 0
        resumed, band.resumed = band.resumed, False
        if band.cursor < self._first:  # behind the ring: the newest hop, then those that follow in a row
            missed += self._end - 1 - band.cursor
            band.cursor = self._end - 1
        hop = self._hops[band.cursor - self._first]
        notes = band.waiting + self._notes_before(band, band.cursor)
        band.waiting = ()
        band.given.append(band.cursor)
        band.cursor += 1
        return Given(hop, notes, missed, resumed, band.session)

    @property
    def _window(self) -> int:
        return WINDOW_HOLD if self._hold else 1

    def _notes_before(self, band: _Band, hop_i: int) -> tuple[Note, ...]:
        found = []
        for i in range(max(band.note, self._first_note), self._first_note + len(self._notes)):
            before, note = self._notes[i - self._first_note]
            if before > hop_i:
                break
            found.append(note)
            band.note = i + 1
        return tuple(found)

    def _trim(self) -> None:
        keep_from = self._end - self._capacity
        if self._hold:
            keep_from = min((band.acknowledged for band in self._bands.values()), default=self._end)
        while self._first < keep_from:
            self._hops.popleft()
            self._first += 1

    @property
    def blocked(self) -> bool:
        """`hold` only: a configured band has not joined, or has not yet been given all there is."""
        return self._hold and any(not band.session or band.cursor < self._end for band in self._bands.values())

    @property
    def idle(self) -> bool:
        """Every band that has joined has acknowledged every hop."""
        return all(not band.session or band.acknowledged >= self._end for band in self._bands.values())

    @property
    def held(self) -> int:
        """Hops in the ring."""
        return len(self._hops)
