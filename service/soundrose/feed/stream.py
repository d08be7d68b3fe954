"""codec: hops from ingest to bands, and what bands answer (inside the service; not part of the contract).

ROUTER (ingest, bound) and DEALER (band). A band says, at once when it is done with a hop and else every quarter second,
`[msgpack [band, session, ingest, taken]]`: `session` names one connection of its process, `ingest` the ingest process
it believes it talks to ("" at first). Ingest answers one that names another with `[b"welcome", msgpack [ingest,
clock]]`, from which `taken` counts anew; `clock` names the monotonic clock that `received_ns` was read from. A hop is
`[b"hop", msgpack head, samples, times, bad, clipped]`, arrays little-endian, C order; the head names its session.

Hops on their way are lost with a connection, and ingest cannot see it: the band's count would stand still for ever. So
a band whose connection ends takes a new session, with which it joins anew, and leaves hops of the old one alone.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import msgpack
import numpy as np

from soundrose.errors import WireError
from soundrose.feed.hop import Hop, Navigation, Note, Positions, Pulse
from soundrose.feed.ring import Given

__all__ = ["Report", "Welcome", "decode_given", "decode_report", "encode_given", "encode_report", "encode_welcome"]


@dataclass(frozen=True, slots=True)
class Report:
    """What a band says of itself: its session, the ingest it follows, and hops done with since its welcome."""

    band: str
    session: str
    ingest: str
    taken: int


@dataclass(frozen=True, slots=True)
class Welcome:
    """Ingest names itself and its clock; the band's count of hops taken begins anew."""

    ingest: str
    clock: str


def encode_report(report: Report) -> bytes:
    return bytes(msgpack.packb([report.band, report.session, report.ingest, report.taken]))


def decode_report(data: bytes) -> Report:
    """Raises WireError("report") for anything else than what `encode_report` writes."""
    try:
        band, session, ingest, taken = msgpack.unpackb(data)
    except (ValueError, TypeError) as error:
        raise WireError("report", f"a band's report cannot be read: {error}") from error
    if not (isinstance(band, str) and isinstance(session, str) and isinstance(ingest, str) and isinstance(taken, int)):
        raise WireError("report", f"a band's report holds {[band, session, ingest, taken]!r}")
    return Report(band, session, ingest, taken)


def encode_welcome(welcome: Welcome) -> list[bytes]:
    return [b"welcome", bytes(msgpack.packb([welcome.ingest, welcome.clock]))]


def encode_given(given: Given) -> list[Any]:
    """Frames of one hop; array frames share memory with the hop."""
    hop = given.hop
    head = {
        "run": hop.run,
        "epoch": hop.epoch,
        "first": hop.first,
        "shape": list(hop.samples.shape),
        "received_ns": hop.received_ns,
        "missed": given.missed,
        "resumed": given.resumed,
        "session": given.session,
        "notes": [_note_plain(note) for note in given.notes],
    }
    arrays = (hop.samples, hop.times, hop.bad, hop.clipped)
    return [b"hop", msgpack.packb(head), *(np.ascontiguousarray(array).data for array in arrays)]


def decode_given(parts: Sequence[bytes | memoryview]) -> Given | Welcome:
    """What ingest sent. Raises WireError("stream") if it is not that."""
    try:
        if bytes(parts[0]) == b"welcome":
            ingest, clock = msgpack.unpackb(parts[1])
            return Welcome(str(ingest), str(clock))
        _, head_bytes, samples, times, bad, clipped = parts
        head = msgpack.unpackb(head_bytes)
        hop = Hop(
            run=head["run"],
            epoch=head["epoch"],
            first=head["first"],
            times=np.frombuffer(times, "<i8").reshape(-1, 2),
            samples=np.frombuffer(samples, "<f4").reshape(head["shape"]),
            bad=np.frombuffer(bad, np.bool_),
            clipped=np.frombuffer(clipped, "<i4"),
            received_ns=head["received_ns"],
        )
        notes = tuple(_note_from(plain) for plain in head["notes"])
        return Given(hop, notes, head["missed"], head["resumed"], head["session"])
    except (ValueError, TypeError, KeyError, IndexError) as error:
        raise WireError("stream", f"a hop cannot be read: {error!r}") from error


def _note_plain(note: Note) -> list[Any]:
    match note:
        case Navigation():
            return ["navigation", note.t_ns, note.of, dict(note.values)]
        case Positions():
            return ["positions", note.t_ns, note.positions_m.tolist()]
        case Pulse():
            return ["pulse", note.t_ns, note.source, note.length_s]


def _note_from(plain: list[Any]) -> Note:
    kind, t_ns, *rest = plain
    if kind == "navigation":
        return Navigation(t_ns, rest[0], rest[1])
    if kind == "positions":
        return Positions(t_ns, np.asarray(rest[0], np.float64))
    if kind == "pulse":
        return Pulse(t_ns, rest[0], rest[1])
    raise ValueError(f"unknown note {kind!r}")
