"""Framing as the contract words it, worked out a second time: which maps must come of which samples."""

from bisect import bisect_right
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

__all__ = ["FramedMap", "Stretch", "frame_maps", "join_blocks"]


@dataclass(frozen=True)
class Stretch:
    """Samples without a hole: [first, end) of a run; times holds (first, t) of each block in it."""

    run: str
    first: int
    end: int
    times: tuple[tuple[int, int], ...]

    def t_at(self, index: int, rate_hz: float) -> int:
        """That of the block holding the sample, plus offset / rate."""
        first, t = self.times[bisect_right(self.times, index, key=lambda block: block[0]) - 1]
        return t + round((index - first) * 1e9 / rate_hz)


@dataclass(frozen=True)
class FramedMap:
    """A map that must come: run, first sample of its frame, t in ns, number within its stretch, the stretch."""

    run: str
    first: int
    t: int
    number: int
    stretch: Stretch


def join_blocks(blocks: Iterable[tuple[str, int, int, int]]) -> list[Stretch]:
    """What was KEPT of accepted blocks (run, first, samples, t), in order, joined where no sample is missing."""
    stretches: list[Stretch] = []
    for run, first, samples, t in blocks:
        last = stretches[-1] if stretches else None
        if last and last.run == run and last.end == first:
            stretches[-1] = Stretch(run, last.first, first + samples, (*last.times, (first, t)))
        else:
            stretches.append(Stretch(run, first, first + samples, ((first, t),)))
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
            first = stretch.first + k * frame // 2
            maps.append(FramedMap(stretch.run, first, stretch.t_at(first, rate_hz), k, stretch))
    return maps, unused
