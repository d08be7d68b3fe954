"""codec: frames of a published message -> values. Unknown keys are kept and otherwise ignored."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from functools import cached_property
from math import isfinite
from typing import Any

import msgpack
import numpy as np
from numpy.typing import NDArray

from soundrose_client.errors import MessageError, UsageError

__all__ = ["Loudest", "MapMessage", "Message", "decode", "rfc3339"]

VERSION = 1
HEADER_BYTES = 1 << 20  # a header holds a list of beams at most; 1 MiB is 100 000 of them
DEPTH_ERRORS = (ValueError, RecursionError, TypeError, OverflowError)  # what msgpack raises on mangled bytes


def rfc3339(t_ns: int) -> str:
    """`t_ns` (integer ns since 1970 UTC) as RFC 3339 in UTC with microseconds, cut, not rounded.

    UsageError outside the years 1 to 9999.
    """
    seconds, rest = divmod(t_ns, 1_000_000_000)
    try:
        moment = datetime.fromtimestamp(seconds, UTC)
    except (ValueError, OverflowError, OSError):
        raise UsageError(f"t_ns is {t_ns}: a time as text needs a year from 1 to 9999") from None
    return moment.replace(microsecond=rest // 1000, tzinfo=None).isoformat(timespec="microseconds") + "Z"


@dataclass(frozen=True, eq=False)
class Message:
    """One published message of any kind.

    topic : as subscribed to.  header : the whole map as it came.  data : the raw bytes after it, if any.
    missed : messages of this topic lost just before this one: 0 none, n exactly so many, None an unknown number
        (the sending process began anew).
    skipped : messages of this topic that came but were left out, as only the newest was asked for.
    """

    topic: str
    header: Mapping[str, Any]
    data: bytes = field(default=b"", repr=False)
    missed: int | None = 0
    skipped: int = 0

    @property
    def kind(self) -> str:
        return str(self.header["kind"])

    @property
    def array(self) -> str:
        return str(self.header["array"])

    @property
    def seq(self) -> int:
        """Counts the messages of this topic from 0 under one `start`."""
        return int(self.header["seq"])

    @property
    def start(self) -> str:
        """Names the start of the process that sent this message."""
        return str(self.header["start"])

    @property
    def t_ns(self) -> int | None:
        """Feed time in ns since 1970 UTC; None where the kind has none."""
        t = self.header.get("t")
        return t if isinstance(t, int) and not isinstance(t, bool) else None

    @property
    def time(self) -> str | None:
        """`t_ns` as RFC 3339 text in UTC; None where there is none."""
        return None if self.t_ns is None else rfc3339(self.t_ns)


@dataclass(frozen=True, slots=True)
class Loudest:
    """The beam that carries most power. It is a beam of the grid, not an estimate of a bearing.

    beam : its index.  cone_deg : its cone angle, 0 forward.  level_db : band level, dB re 1 µPa, plane-wave equivalent.
    """

    beam: int
    cone_deg: float
    level_db: float


@dataclass(frozen=True, eq=False)
class MapMessage(Message):
    """A frequency-bearing map.

    level_db : (beams, bins) float32, dB re 1 µPa²/Hz, plane-wave equivalent, read-only.
    cone_deg : (beams,) float64, rising: 0 forward endfire, 90 broadside, 180 aft; where the sound comes from.
    """

    level_db: NDArray[np.float32] = field(default_factory=lambda: np.zeros((0, 0), np.float32), repr=False)
    cone_deg: NDArray[np.float64] = field(default_factory=lambda: np.zeros(0), repr=False)

    @property
    def band(self) -> str:
        return str(self.header.get("band", self.topic.partition("/")[2]))

    @property
    def run(self) -> str:
        """Name of the run of samples this map was made of."""
        return str(self.header.get("run", ""))

    @property
    def t_ns(self) -> int:
        """Time of the frame's first sample, ns since 1970 UTC."""
        return int(self.header["t"])

    @property
    def t_end_ns(self) -> int:
        """Time just after the frame's last sample."""
        return int(self.header["t_end"])

    @property
    def time(self) -> str:
        return rfc3339(self.t_ns)

    @property
    def f0_hz(self) -> float:
        return float(self.header["f0_hz"])

    @property
    def df_hz(self) -> float:
        return float(self.header["df_hz"])

    @property
    def limits(self) -> Mapping[str, Any]:
        """Channels used, gap, clipped, alias onset ...; empty if the sender gave none."""
        limits = self.header.get("limits")
        return limits if isinstance(limits, dict) else {}

    @property
    def latency_ms(self) -> float | None:
        latency = self.header.get("latency_ms")
        return float(latency) if isinstance(latency, int | float) else None

    @cached_property
    def frequency_hz(self) -> NDArray[np.float64]:
        """(bins,) float64, Hz, read-only."""
        return _frozen(self.f0_hz + self.df_hz * np.arange(self.level_db.shape[1], dtype=np.float64))

    @cached_property
    def cos(self) -> NDArray[np.float64]:
        """(beams,) float64, cosine of `cone_deg`, read-only."""
        return _frozen(np.asarray(np.cos(np.deg2rad(self.cone_deg)), np.float64))

    def band_level_db(self, f_min_hz: float | None = None, f_max_hz: float | None = None) -> NDArray[np.float64]:
        """(beams,) band levels, dB re 1 µPa: power summed over the bins from `f_min_hz` to `f_max_hz`, both included.

        UsageError where no bin lies in between.
        """
        low = -np.inf if f_min_hz is None else f_min_hz
        high = np.inf if f_max_hz is None else f_max_hz
        chosen = (self.frequency_hz >= low) & (self.frequency_hz <= high)
        if not chosen.any():
            raise UsageError(f"no bin from {low} to {high} Hz; {self._range_text()}")
        power = (10.0 ** (self.level_db[:, chosen].astype(np.float64) / 10)).sum(axis=1) * self.df_hz
        return np.asarray(10 * np.log10(power), np.float64)

    def loudest(self, f_min_hz: float | None = None, f_max_hz: float | None = None) -> Loudest:
        """The beam with most power from `f_min_hz` to `f_max_hz` (whole band if not given).

        UsageError where no bin lies in between.
        """
        levels = self.band_level_db(f_min_hz, f_max_hz)
        beam = int(np.argmax(levels))
        return Loudest(beam, float(self.cone_deg[beam]), float(levels[beam]))

    def beam_at(self, cone_deg: float) -> int:
        """Index of the beam nearest to `cone_deg` in cosine. UsageError outside 0 to 180."""
        if not 0 <= cone_deg <= 180:
            raise UsageError(f"cone_deg is {cone_deg!r}: it must be from 0 (forward) to 180 (aft)")
        return int(np.argmin(np.abs(self.cos - np.cos(np.deg2rad(cone_deg)))))

    def spectrum(self, cone_deg: float) -> NDArray[np.float32]:
        """(bins,) float32, dB re 1 µPa²/Hz, of the beam nearest to `cone_deg` in cosine.

        UsageError outside 0 to 180.
        """
        beam: NDArray[np.float32] = self.level_db[self.beam_at(cone_deg)]
        return beam

    def at(self, cone_deg: float, frequency_hz: float) -> float:
        """Level of the nearest beam and bin, dB re 1 µPa²/Hz. UsageError outside the map by over half a bin."""
        place = (frequency_hz - self.f0_hz) / self.df_hz
        if not -0.5 <= place <= self.level_db.shape[1] - 0.5:
            raise UsageError(f"frequency_hz is {frequency_hz!r}; {self._range_text()}")
        bin_i = min(max(round(place), 0), self.level_db.shape[1] - 1)
        return float(self.level_db[self.beam_at(cone_deg), bin_i])

    def _range_text(self) -> str:
        return f"this map goes from {self.frequency_hz[0]:g} to {self.frequency_hz[-1]:g} Hz in steps of {self.df_hz:g}"


def decode(parts: Sequence[bytes]) -> Message:
    """One multipart message, [topic, msgpack map] and perhaps raw data, as a value.

    MessageError if it cannot be read.
    """
    if not 2 <= len(parts) <= 3:
        raise MessageError("frames", f"got {len(parts)} frames; a message has 2 or 3")
    topic = _topic(parts[0])
    header = _header(parts[1])
    data = bytes(parts[2]) if len(parts) == 3 else b""
    if header["kind"] == "map":
        return _map(topic, header, data)
    return Message(topic, header, data)


def _topic(part: bytes) -> str:
    try:
        return bytes(part).decode("ascii")
    except UnicodeDecodeError:
        raise MessageError("frames", f"the topic {bytes(part[:40])!r} is not ASCII") from None


def _header(part: bytes) -> dict[str, Any]:
    if len(part) > HEADER_BYTES:
        raise MessageError("msgpack", f"a header of {len(part)} bytes; at most {HEADER_BYTES} are read")
    try:
        header = msgpack.unpackb(part, raw=False, strict_map_key=True)
    except DEPTH_ERRORS as error:
        raise MessageError("msgpack", f"the header cannot be unpacked: {error}") from None
    if not isinstance(header, dict):
        raise MessageError("msgpack", f"the header is {type(header).__name__}; it must be a map")
    version = _key(header, "v", int)
    if version != VERSION:
        raise MessageError("version", f"v is {version}; this client reads {VERSION}")
    for key, kind in (("kind", str), ("array", str), ("start", str), ("seq", int)):
        _key(header, key, kind)
    if header["seq"] < 0:
        raise MessageError("key", f"seq is {header['seq']}; it counts from 0")
    return header


def _key(header: Mapping[str, Any], key: str, kind: type[Any]) -> Any:
    """A key that must be there. bool is no integer here; an integer will do for a float."""
    value = header.get(key)
    wanted: tuple[type[Any], ...] = (int, float) if kind is float else (kind,)
    if not isinstance(value, wanted) or isinstance(value, bool):
        raise MessageError("key", f"{key} is {value!r}; it must be {kind.__name__}")
    return value


def _map(topic: str, header: dict[str, Any], data: bytes) -> MapMessage:
    for key in ("t", "t_end"):
        _key(header, key, int)
    for key in ("f0_hz", "df_hz"):
        if not isfinite(_key(header, key, float)):
            raise MessageError("key", f"{key} is {header[key]!r}; it must be finite")
    if header["df_hz"] <= 0:
        raise MessageError("key", f"df_hz is {header['df_hz']!r}; it must be above 0")
    beams, bins = _shape(header)
    if len(data) != 4 * beams * bins:
        raise MessageError("bytes", f"{len(data)} bytes of data; {beams} x {bins} levels of f4 take {4 * beams * bins}")
    level_db = np.frombuffer(data, "<f4").reshape(beams, bins)  # of bytes: read-only, not copied
    return MapMessage(topic, header, data, level_db=level_db, cone_deg=_cone(header, beams))


def _shape(header: Mapping[str, Any]) -> tuple[int, int]:
    shape = _key(header, "shape", list)
    whole = all(isinstance(n, int) and not isinstance(n, bool) and n >= 1 for n in shape)
    if len(shape) != 2 or not whole:
        raise MessageError("shape", f"shape is {shape!r}; it must be [beams, bins], each at least 1")
    return shape[0], shape[1]


def _cone(header: Mapping[str, Any], beams: int) -> NDArray[np.float64]:
    listed = _key(header, "cone_deg", list)
    numbers = all(isinstance(v, int | float) and not isinstance(v, bool) for v in listed)
    if len(listed) != beams or not numbers:
        raise MessageError(
            "shape", f"cone_deg has {len(listed)} entries; it must hold one number for each of {beams} beams"
        )
    cone = np.array([float(v) for v in listed])
    if not np.isfinite(cone).all():
        raise MessageError("key", "cone_deg holds a value that is not finite")
    return _frozen(cone)


def _frozen(values: NDArray[np.float64]) -> NDArray[np.float64]:
    values.setflags(write=False)
    return values
