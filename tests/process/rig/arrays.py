"""The array under test: hydrophones in the array frame, calibration, and the settings file that tells the service."""

from dataclasses import dataclass, field
from typing import Any

import numpy as np

__all__ = ["ArrayModel", "line_positions", "tapered_weights"]


def line_positions(channels: int, spacing_m: float) -> np.ndarray:
    """(channels, 3) metres about the mean; channel 0 is forward-most (largest x), as the contract has it."""
    x = ((channels - 1) / 2 - np.arange(channels)) * spacing_m
    return np.stack([x, np.zeros(channels), np.zeros(channels)], axis=1)


def tapered_weights(channels: int) -> np.ndarray:
    """A raised-cosine shading given as own list (sum 1), so that the tests need no knowledge of the named ones."""
    weights = np.sin(np.pi * (np.arange(channels) + 0.5) / channels) ** 2
    return weights / weights.sum()


@dataclass
class ArrayModel:
    """A uniform line with its calibration, and what is needed to talk to a service that is set up for it."""

    channels: int = 32
    spacing_m: float = 0.5
    rate_hz: float = 8000.0
    sound_speed_m_s: float = 1500.0
    sensitivity_db: float = -180.0
    gain_db: float = 20.0
    full_scale_v: float = 2.5
    name: str = "aft"
    positions_m: np.ndarray = field(default_factory=lambda: np.zeros((0, 3)))

    def __post_init__(self) -> None:
        if not len(self.positions_m):
            self.positions_m = line_positions(self.channels, self.spacing_m)

    @property
    def full_scale_upa(self) -> float:
        """Pressure in micropascal that reads full scale: full_scale_v * 10^(-(sensitivity + gain)/20)."""
        return self.full_scale_v * 10 ** (-(self.sensitivity_db + self.gain_db) / 20)

    def band(self, **keys: Any) -> dict[str, Any]:
        """One `[[bands]]` entry with defaults that suit the tests."""
        return {"name": "main", "band_hz": [100.0, 2000.0], "frame": 2048, "beams": 97, "shading": "hann",
                "average_s": 1.0} | keys  # fmt: skip

    def settings(self, *bands: dict[str, Any], overload: str = "hold", store: str = "store") -> dict[str, Any]:
        """Settings of a service for this array; every port is chosen by the system."""
        return {
            "array": {"id": self.name, "hydrophones": self.channels, "spacing_m": self.spacing_m},
            "feed": {"bind": "tcp://127.0.0.1:*", "rate_hz": self.rate_hz, "overload": overload},
            "calibration": {"sensitivity_db": self.sensitivity_db, "gain_db": self.gain_db,
                            "full_scale_v": self.full_scale_v},
            "water": {"sound_speed_m_s": self.sound_speed_m_s},
            "bands": list(bands) or [self.band()],
            "publish": {"bind": "tcp://127.0.0.1:*"},
            "serve": {"host": "127.0.0.1", "port": 0},
            "store": {"path": store},
        }  # fmt: skip
