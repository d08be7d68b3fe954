"""core: the notes in force, for a band that joins later: what acts now, and what is still to come."""

from collections.abc import Sequence

from soundrose.feed.hop import Navigation, Note, Positions

__all__ = ["NOTES_LIMIT", "NotesInForce"]

NOTES_LIMIT = 32  #: kept at most; a source that announces more than this ahead of time loses the last


class NotesInForce:
    """Keeps, of positions and of sound speeds, the one that acts at the newest sample and those that act later."""

    def __init__(self, notes: Sequence[Note] = ()) -> None:
        self._entries: list[tuple[int, Note]] = [(note.t_ns, note) for note in notes]

    def add(self, note: Note, now_ns: int) -> bool:
        """Take a note that came when the newest sample had the time `now_ns`; whether it is one to keep."""
        if not isinstance(note, Positions) and not _has_sound_speed(note):
            return False
        self._entries.append((max(note.t_ns, now_ns), note))
        self._entries.sort(key=lambda entry: entry[0])  # stable: of two that act together the later to come wins
        kept: list[tuple[int, Note]] = []
        acting: set[bool] = set()
        for entry in reversed(self._entries):
            kind = isinstance(entry[1], Positions)
            if entry[0] > now_ns or kind not in acting:
                kept.append(entry)
            if entry[0] <= now_ns:
                acting.add(kind)
        self._entries = kept[-NOTES_LIMIT:][::-1]
        return True

    def listed(self) -> list[Note]:
        """In the order in which they act."""
        return [note for _, note in self._entries]


def _has_sound_speed(note: Note) -> bool:
    return isinstance(note, Navigation) and "sound_speed_m_s" in note.values
