"""core: published messages as values: a map header with its levels, health, status."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["LEVEL_FLOOR_DB", "MAP_QUANTITY", "MAP_UNIT", "VERSION", "HealthProduct", "MapProduct", "Product"]

VERSION = 1  #: of the messages, not of the program
MAP_UNIT = "dB re 1 \u00b5Pa\u00b2/Hz"  #: U+00B5 and U+00B2, exactly
MAP_QUANTITY = "spectral density level"
LEVEL_FLOOR_DB = -300.0  #: zero power reads this; levels are finite


@dataclass(frozen=True, slots=True, eq=False)
class MapProduct:
    """One frequency-bearing map of a band.

    header : the published map's keys but `v`, `kind`, `array`, `seq`, `start`, `latency_ms`, which the sender adds.
    level_db : (beams, bins) float32, dB re 1 micropascal^2/Hz, plane-wave equivalent, C-contiguous.
    received_ns : host monotonic clock at receipt of the frame's last sample (0 offline).
    """

    header: Mapping[str, Any]
    level_db: NDArray[np.float32]
    received_ns: int = 0

    @property
    def topic(self) -> str:
        return f"map/{self.header['band']}"


@dataclass(frozen=True, slots=True, eq=False)
class HealthProduct:
    """State of every hydrophone over one second of feed time. header : `t`, `used`, `channels` as published."""

    header: Mapping[str, Any] = field(default_factory=dict)

    @property
    def topic(self) -> str:
        return "health"


Product = MapProduct | HealthProduct
