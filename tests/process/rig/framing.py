"""Framing as the contract words it, worked out a second time: which maps must come of which samples."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

__all__ = ["FramedMap", "Stretch", "frame_maps", "join_blocks"]


@dataclass(frozen=True)
class Stretch:
    """Samples without a hole: [first, end) of a run; t is that of sample `first`."""

    run: str
    first: int
    end: int
    t: int


@dataclass(frozen=True)
class FramedMap:
    """A map that must come: run, first sample of its frame, t and t_end in ns, number within its stretch."""

    run: str
    first: int
    t: int
    t_end: int
    number: int


def join_blocks(blocks: Iterable[tuple[str, int, int, int]]) -> list[Stretch]:
    """Blocks (run, first, samples, t) that were accepted, in order, joined where no sample is missing."""
    stretches: list[Stretch] = []
    for run, first, samples, t in blocks:
        last = stretches[-1] if stretches else None
        if last and last.run == run and last.end == first:
            stretches[-1] = Stretch(run, last.first, first + samples, last.t)
        else:
            stretches.append(Stretch(run, first, first + samples, t))
    return stretches


def frame_maps(stretches: Sequence[Stretch], frame: int, rate_hz: float) -> tuple[list[FramedMap], int]:
    """The maps of all stretches in order, and how many samples fill no frame."""
    maps: list[FramedMap] = []
    unused = 0
    for stretch in stretches:
        length = stretch.end - stretch.first
        count = 0 if length < frame else (length - frame) // (frame // 2) + 1
        unused += length - ((count - 1) * (frame // 2) + frame if count else 0)
        for k in range(count):
            offset = k * frame // 2
            start = stretch.t + round(offset * 1e9 / rate_hz)
            stop = stretch.t + round((offset + frame) * 1e9 / rate_hz)
            maps.append(FramedMap(stretch.run, stretch.first + offset, start, stop, k))
    return maps, unused
