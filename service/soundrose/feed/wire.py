"""codec: the words, limits and values of feed messages, which reading and writing them share."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final, Literal, NamedTuple, TypeAlias

from soundrose.feed.hop import Note
from soundrose.settings_types import Settings

__all__ = [
    "BYTES_PER_VALUE", "DATA_LIMIT", "FIRST_LIMIT", "HEADER_LIMIT", "LAYOUTS", "NUMBERS", "OF", "PLACE_LIMIT_M",
    "PULSE_LIMIT_S", "REASONS", "TIME_LIMIT", "UNITS", "VERSION",
    "Expected", "Layout", "Message", "Octets", "RunEndMessage", "SampleType", "Samples", "Unit",
]  # fmt: skip

VERSION: Final = 1
HEADER_LIMIT: Final = 64 * 1024  #: bytes of the map
DATA_LIMIT: Final = 64 * 1024 * 1024  #: bytes of samples

Layout = Literal["channel", "sample"]
SampleType = Literal["i2", "i3", "i4", "f4"]
Unit = Literal["count", "V", "uPa"]
Octets: TypeAlias = bytes | memoryview

#: every reason for which a message is dropped, in the order in which they are judged
REASONS: Final = (
    "frames", "size", "msgpack", "version", "kind", "array", "key", "rate", "type", "shape", "bytes",
    "old_run", "jump", "repeat", "time", "overload",
)  # fmt: skip

BYTES_PER_VALUE: Final[Mapping[str, int]] = {"i2": 2, "i3": 3, "i4": 4, "f4": 4}
LAYOUTS: Final = ("channel", "sample")
UNITS: Final = ("count", "V", "uPa")
OF: Final = ("array", "ship")
FIRST_LIMIT: Final = 2**53  # a sample index stays exact as a double, in any client's language
TIME_LIMIT: Final = 2**63
PLACE_LIMIT_M: Final = 1e6  # a hydrophone further out than this is a mistake, and its delay would overflow
PULSE_LIMIT_S: Final = 86400.0

#: number keys of `navigation` with their least and greatest value
NUMBERS: Final[Mapping[str, tuple[float, float]]] = {
    "latitude_deg": (-90.0, 90.0),
    "longitude_deg": (-180.0, 360.0),
    "heading_deg": (0.0, 360.0),
    "heading_sigma_deg": (0.0, float("inf")),
    "pitch_deg": (-90.0, 90.0),
    "depth_m": (float("-inf"), float("inf")),
    "speed_m_s": (0.0, float("inf")),
    "course_deg": (0.0, 360.0),
    "sound_speed_m_s": (50.0, 20000.0),  # slow waves in a sea bed to fast ones in rock; outside it is a mistake
    "speed_through_water_m_s": (float("-inf"), float("inf")),
    "water_depth_m": (0.0, float("inf")),
    "cable_out_m": (0.0, float("inf")),
}


@dataclass(frozen=True, slots=True)
class Expected:
    """What messages must agree with: the array's id, its number of hydrophones, the nominal sampling rate."""

    array: str
    channels: int
    rate_hz: float

    @classmethod
    def of(cls, settings: Settings) -> "Expected":
        return cls(settings.array.id, settings.array.channels, settings.feed.rate_hz)


class Samples(NamedTuple):
    """One block as sent. data : channels * samples values of `type`, in `layout`, little-endian, not copied."""

    run: str
    first: int
    t_ns: int
    channels: int
    samples: int
    layout: Layout
    type: SampleType
    unit: Unit
    data: Octets


class RunEndMessage(NamedTuple):
    """The source says that a run is over."""

    run: str


Message: TypeAlias = Samples | RunEndMessage | Note
