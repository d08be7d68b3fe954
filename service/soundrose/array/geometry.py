"""core: where a band's hydrophones stand, which directions its beams look, and how long sound takes between them."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from soundrose.errors import UsageError
from soundrose.settings_types import BandSettings, Settings

__all__ = ["TOLERANCE_M", "Geometry", "band_geometry", "cos_grid", "delays_s", "line_geometry"]

#: two places along x are the same place within this, metres: far below any survey, far above float64 rounding
TOLERANCE_M = 1e-6


@dataclass(frozen=True, slots=True, eq=False)
class Geometry:
    """The line that one band works on. M is the number of the band's channels; all positions in metres, array frame.

    channels : the M channel numbers, in band order.
    positions_m : (M, 3) float64, read-only, in band order, the array origin (mean of ALL hydrophones listed) taken off.
    centre_m : (3,) float64, read-only, mean of the band's own line, in the same frame.
    middle_x_m : half way between the band's foremost and aftmost hydrophone: delays about it are the shortest.
    spacing_m : distance along x between neighbours where it is the same all along the line, else None.
    order : (M,) intp, read-only, band indices from the foremost hydrophone (largest x) aft.
    mirror : (M,) intp, read-only: `mirror[m]` is the band index of the hydrophone mirrored to m about the middle
        (m itself for one in the middle); None where the line is not mirror-symmetric in x.
    """

    channels: tuple[int, ...]
    positions_m: NDArray[np.float64]
    centre_m: NDArray[np.float64]
    middle_x_m: float
    spacing_m: float | None
    order: NDArray[np.intp]
    mirror: NDArray[np.intp] | None

    @property
    def symmetric(self) -> bool:
        """True where the line is its own mirror image in x, about its middle, within `TOLERANCE_M`."""
        return self.mirror is not None

    @property
    def x_m(self) -> NDArray[np.float64]:
        """(M,) places along the array, band order."""
        return self.positions_m[:, 0]

    @property
    def length_m(self) -> float:
        """Aperture along x: foremost to aftmost hydrophone."""
        return float(np.ptp(self.x_m))

    @property
    def offset_m(self) -> float:
        """Largest distance of a hydrophone from the straight line along x through the band's centre."""
        return float(np.max(np.hypot(*(self.positions_m - self.centre_m)[:, 1:].T)))


def line_geometry(positions_m: NDArray[np.float64], channels: Sequence[int]) -> Geometry:
    """The geometry of the hydrophones `channels` out of `positions_m` (all hydrophones listed, 3), metres.

    Raises UsageError for positions of another shape or not finite, and for channels that are not there.
    """
    listed = np.asarray(positions_m, dtype=np.float64)
    if listed.ndim != 2 or listed.shape[1:] != (3,) or not np.isfinite(listed).all():
        raise UsageError(f"positions have shape {listed.shape}; they must be finite, one (x, y, z) per hydrophone")
    if not channels or not all(0 <= channel < len(listed) for channel in channels):
        raise UsageError(f"channels are {tuple(channels)}; they must be one or more of 0..{len(listed) - 1}")
    positions = (listed - listed.mean(axis=0))[list(channels)]
    x = positions[:, 0]
    order = np.argsort(-x, kind="stable")
    middle = float(x.max() + x.min()) / 2
    centre = positions.mean(axis=0)
    mirror = _mirror(x, order, middle)
    for values in (positions, centre, order) + (() if mirror is None else (mirror,)):
        values.setflags(write=False)
    return Geometry(tuple(channels), positions, centre, middle, _spacing(x[order]), order, mirror)


def band_geometry(settings: Settings, band: BandSettings, positions_m: NDArray[np.float64] | None = None) -> Geometry:
    """The geometry a band works on: from the settings, or from `positions_m` (all hydrophones, 3) told later."""
    listed = np.asarray(settings.array.positions_m if positions_m is None else positions_m, dtype=np.float64)
    if listed.shape != (settings.array.channels, 3):
        raise UsageError(f"positions have shape {listed.shape}; they must be ({settings.array.channels}, 3)")
    return line_geometry(listed, band.channels)


def cos_grid(beams: int) -> NDArray[np.float64]:
    """(beams,) cosines of the cone angles a line looks to: evenly spaced from +1 (forward) to -1, both included.

    Exactly antisymmetric, so that a beam and its mirror beam have the same cosine to the last bit but for the sign.
    """
    if beams < 2:
        raise UsageError(f"beams is {beams!r}; it must be at least 2")
    return np.arange(beams - 1, -beams, -2, dtype=np.float64) / (beams - 1)


def delays_s(x_m: NDArray[np.float64], cos: NDArray[np.float64], sound_speed_m_s: float) -> NDArray[np.float64]:
    """(beams, M) seconds by which each hydrophone hears a plane wave EARLIER than the origin of `x_m` does.

    A plane wave p(t) at the origin, from the direction of cosine u, is recorded as p(t + x u / c).
    x_m : (M,) metres.  cos : (beams,).  sound_speed_m_s : > 0.
    """
    return np.multiply.outer(np.asarray(cos, dtype=np.float64), np.asarray(x_m, dtype=np.float64)) / sound_speed_m_s


def _spacing(falling_x: NDArray[np.float64]) -> float | None:
    """The one distance between neighbours of (M,) places in falling order, or None."""
    if len(falling_x) < 2:
        return None
    step = float(falling_x[0] - falling_x[-1]) / (len(falling_x) - 1)
    even = falling_x[0] - step * np.arange(len(falling_x))
    return step if step > TOLERANCE_M and np.allclose(falling_x, even, rtol=0, atol=TOLERANCE_M) else None


def _mirror(x: NDArray[np.float64], order: NDArray[np.intp], middle: float) -> NDArray[np.intp] | None:
    """Band index of each hydrophone's mirror image, or None where one has none."""
    if np.any(np.abs(x[order] + x[order[::-1]] - 2 * middle) > TOLERANCE_M):
        return None
    mirror = np.empty(len(x), dtype=np.intp)
    mirror[order] = order[::-1]
    return mirror
