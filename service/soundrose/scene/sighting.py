"""core: the loudest peak away from own ship, beside where the scene's sources truly are."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["APART_DEG", "Sighting", "sighting"]

APART_DEG = 20.0  # from forward: nearer, own ship is heard


@dataclass(frozen=True, slots=True)
class Sighting:
    """cone_deg, level_db : of the loudest peak.  sources : names and true cone angles, forward first."""

    cone_deg: float
    level_db: float
    sources: tuple[tuple[str, float], ...]

    @property
    def text(self) -> str:
        there = ", ".join(f"{name} {cone:.1f}°" for name, cone in self.sources)
        return f"loudest away from own ship: {self.cone_deg:.1f}°; truly there: {there}"


def sighting(
    level_db: NDArray[np.float32],
    cone_deg: NDArray[np.float64],
    frequency_hz: NDArray[np.float64],
    truth: Mapping[str, Any],
) -> Sighting:
    """In the upper quarter of the band, where beams are narrow; a peak, not the skirt of own ship.

    level_db : (beams, bins), dB re 1 µPa²/Hz.  cone_deg : (beams,).  frequency_hz : (bins,).  truth : a line of the
    scene's truth.
    """
    upper = np.asarray(frequency_hz) >= 0.75 * np.max(frequency_hz)
    mean = (10.0 ** (level_db[:, upper].astype(np.float64) / 10)).mean(axis=1)
    beside = np.maximum(np.append(mean[1:], 0.0), np.insert(mean[:-1], 0, 0.0))
    beam = int(np.argmax(np.where((np.asarray(cone_deg) >= APART_DEG) & (mean > beside), mean, 0.0)))
    sources = sorted(((c["name"], float(c["cone_deg"])) for c in truth["contacts"]), key=lambda item: item[1])
    return Sighting(float(cone_deg[beam]), float(10 * np.log10(mean[beam])), tuple(sources))
