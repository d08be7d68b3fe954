"""Messages that a feed must refuse, by the reason it must give: broken, foreign, out of range, out of order."""

from collections.abc import Callable, Iterator
from random import Random
from typing import Any

import msgpack
from rig import ArrayModel, note

__all__ = ["KINDS", "hostile_messages"]

Parts = list[bytes]


class Place:
    """Where the feed stands when a hostile message is made: run, expected index, time, and a seeded source."""

    def __init__(self, array: ArrayModel, run: str, expected: int, t: int, random: Random) -> None:
        self.array, self.run, self.expected, self.t, self.random = array, run, expected, t, random

    def header(self, **keys: Any) -> dict[str, Any]:
        """A header that would be right: the next 100 samples."""
        right = {
            "v": 1, "kind": "samples", "array": self.array.name, "run": self.run, "first": self.expected, "t": self.t,
            "rate": self.array.rate_hz, "shape": [self.array.channels, 100], "layout": "channel", "type": "i2",
            "unit": "count",
        }  # fmt: skip
        return right | keys

    def samples(self, *gone: str, data: int | None = None, **keys: Any) -> Parts:
        """Both frames, with keys changed or gone, and `data` bytes (default: as many as are right)."""
        header = {key: value for key, value in self.header(**keys).items() if key not in gone}
        count = self.array.channels * 100 * 2 if data is None else data
        return [msgpack.packb(header), self.random.randbytes(count)]

    def navigation(self, **keys: Any) -> Parts:
        return note(self.array, "navigation", **({"t": self.t, "sound_speed_m_s": 1200.0} | keys))

    def far(self) -> int:
        """An index more than 60 s on, never the same twice and never where another such block would end."""
        return self.expected + round(61 * self.array.rate_hz) + 101 * self.random.randrange(10**9)


#: name -> (reason, how to make one); each touches one rule only
KINDS: dict[str, tuple[str, Callable[[Place], Parts]]] = {
    "three frames": ("frames", lambda p: [*p.samples(), b"more"]),
    "nine frames": ("frames", lambda p: [b"x"] * 9),
    "header over 64 KiB": ("size", lambda p: [msgpack.packb(p.header(more="x" * 66_000)), b"ab"]),
    "random bytes": ("msgpack", lambda p: [b"\xc1" + p.random.randbytes(40), b""]),
    "empty header": ("msgpack", lambda p: [b"", b""]),
    "cut header": ("msgpack", lambda p: [p.samples()[0][: p.random.randrange(1, 60)], b""]),
    "bytes after the header": ("msgpack", lambda p: [p.samples()[0] + b"\x00", b""]),
    "list for a map": ("msgpack", lambda p: [msgpack.packb([1, 2, 3]), b""]),
    "number for a map": ("msgpack", lambda p: [msgpack.packb(7)]),
    "text that is not UTF-8": ("msgpack", lambda p: [b"\x81\xa2\xff\xfe\x01", b""]),
    "map without end": ("msgpack", lambda p: [b"\xdf\xff\xff\xff\xff", b""]),
    "nested 2000 deep": ("msgpack", lambda p: [b"\x81\xa1v" + b"\x91" * 2000 + b"\x00", b""]),
    "version 2": ("version", lambda p: p.samples(v=2)),
    "version as text": ("version", lambda p: p.samples(v="1")),
    "unknown kind": ("kind", lambda p: p.samples(kind="sample")),
    "kind as number": ("kind", lambda p: p.samples(kind=3)),
    "other array": ("array", lambda p: p.samples(array="bow")),
    "navigation of another array": ("array", lambda p: p.navigation(array="bow")),
    "no first": ("key", lambda p: p.samples("first")),
    "no layout": ("key", lambda p: p.samples("layout")),
    "first below 0": ("key", lambda p: p.samples(first=-1)),
    "first 2^53": ("key", lambda p: p.samples(first=2**53)),
    "first as float": ("key", lambda p: p.samples(first=float(p.expected))),
    "first as bool": ("key", lambda p: p.samples(first=True)),
    "t as text": ("key", lambda p: p.samples(t="now")),
    "t as float": ("key", lambda p: p.samples(t=float(p.t))),
    "run as number": ("key", lambda p: p.samples(run=5)),
    "rate as text": ("key", lambda p: p.samples(rate="8000")),
    "unknown layout": ("key", lambda p: p.samples(layout="beam")),
    "unknown unit": ("key", lambda p: p.samples(unit="Pa")),
    "latitude 91": ("key", lambda p: p.navigation(latitude_deg=91.0)),
    "heading NaN": ("key", lambda p: p.navigation(heading_deg=float("nan"))),
    "sound speed below 0": ("key", lambda p: p.navigation(sound_speed_m_s=-5.0)),
    "navigation without t": ("key", lambda p: note(p.array, "navigation", sound_speed_m_s=1200.0)),
    "pulse without length": ("key", lambda p: note(p.array, "pulse", t=p.t, source="gun")),
    "position of two numbers": ("key", lambda p: note(p.array, "positions", t=p.t, positions_m=[[0.0, 0.0]] * 32)),
    "other rate": ("rate", lambda p: p.samples(rate=p.array.rate_hz * 1.0001)),
    "rate 0": ("rate", lambda p: p.samples(rate=0.0)),
    "8-bit samples": ("type", lambda p: p.samples(type="i1")),
    "big-endian samples": ("type", lambda p: p.samples(type=">i2")),
    "too few channels": ("shape", lambda p: p.samples(shape=[p.array.channels - 1, 100])),
    "no samples": ("shape", lambda p: p.samples(shape=[p.array.channels, 0], data=0)),
    "more than a second": ("shape", lambda p: p.samples(shape=[p.array.channels, 8001], data=32 * 8001 * 2)),
    "too few positions": ("shape", lambda p: note(p.array, "positions", t=p.t, positions_m=[[0.0, 0.0, 0.0]] * 31)),
    "data cut by one byte": ("bytes", lambda p: p.samples(data=32 * 100 * 2 - 1)),
    "data twice as long": ("bytes", lambda p: p.samples(data=32 * 100 * 4)),
    "end of an unknown run": ("old_run", lambda p: note(p.array, "end", run="never heard of")),
    "samples of the run before": ("old_run", lambda p: p.samples(run="before")),
    "far ahead": ("jump", lambda p: p.samples(first=p.far(), t=p.t + 10**9)),
    "first 10^15": ("jump", lambda p: p.samples(first=10**15, t=p.t)),
    "just over 60 s": ("jump", lambda p: p.samples(first=p.expected + 480_001)),
    "wholly before": ("repeat", lambda p: p.samples(first=p.random.randrange(0, p.expected - 99), t=p.t - 10**9)),
    "from the beginning": ("repeat", lambda p: p.samples(first=0, t=p.t - 10**10)),
    "time goes back": ("time", lambda p: p.samples(t=p.t - 10**9 - p.random.randrange(10**9))),
}  # fmt: skip


def hostile_messages(
    array: ArrayModel, run: str, expected: int, t: int, count: int, seed: int
) -> Iterator[tuple[str, str, Parts]]:
    """`count` (name, reason, parts) for a feed that expects sample `expected` of `run` at `t`, kinds in turn."""
    random = Random(seed)
    names = list(KINDS)
    for i in range(count):
        name = names[(i + seed) % len(names)]
        reason, make = KINDS[name]
        yield name, reason, make(Place(array, run, expected, t, random))
