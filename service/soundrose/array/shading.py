"""core: weights of the hydrophones along the line (shading): side lobes down, main lobe wider."""

import warnings
from collections.abc import Sequence
from math import acosh, ceil, pi

import numpy as np
from numpy.typing import NDArray

from soundrose.array.geometry import TOLERANCE_M, Geometry
from soundrose.errors import UsageError
from soundrose.settings_types import ShadingName

__all__ = ["fewest_for", "shading_weights", "taylor_nbar"]


def shading_weights(
    shading: ShadingName | Sequence[float], geometry: Geometry, shading_db: float = 30.0
) -> NDArray[np.float64]:
    """Weights of a band's hydrophones, band channel order, sum 1: a plane wave reads itself on its own beam.

    Parameters
    ----------
    shading : a name, or one weight per channel of the band, in band order (finite, >= 0, not all 0).
    geometry : the band's line. Named shadings follow each hydrophone's place along x, so the order of channels does
        not matter, and a line with equal spacing gets the usual samples of the window.
    shading_db : side-lobe level below the main lobe, dB, > 0, for `chebyshev` and `taylor`.

    Returns
    -------
    (M,) float64, symmetric to the last bit where the line and the shading are.

    Raises
    ------
    UsageError : a list of another length or with weights that cannot be; `chebyshev` on a line without equal spacing
        (it is defined for that alone); fewer hydrophones than `fewest_for`.

    Notes
    -----
    Hann and Hamming are the symmetric windows, first sample on the foremost and last on the aftmost hydrophone; those
    two weigh 0 in Hann, as in the published tables. Taylor's aperture reaches half a (mean) spacing past each end.

    References
    ----------
    .. [1] Dolph 1946, Proc. IRE 34, 335-348 (chebyshev).
    .. [2] Taylor 1955, IRE Trans. AP-3, 16-28 (taylor), with `taylor_nbar` equal side lobes next to the main lobe.
    .. [3] Harris 1978, Proc. IEEE 66, 51-83 (hann, hamming).
    """
    if not isinstance(shading, str):
        return _own(shading, len(geometry.channels))
    if len(geometry.channels) < fewest_for(shading):
        raise UsageError(
            f"shading {shading!r} has {len(geometry.channels)} hydrophones; it needs at least {fewest_for(shading)}"
        )
    if shading in ("chebyshev", "taylor") and not shading_db > 0:
        raise UsageError(f"shading_db is {shading_db!r}; it must be above 0")
    weights = _named(shading, geometry, shading_db)
    if geometry.mirror is not None:
        weights = (weights + weights[geometry.mirror]) / 2
    return _unity(weights)


def fewest_for(shading: ShadingName) -> int:
    """The fewest hydrophones a shading makes sense for: Hann gives its two ends the weight 0."""
    return 3 if shading == "hann" else 2


def taylor_nbar(shading_db: float, hydrophones: int) -> int:
    """Number of nearly equal side lobes (plus one) of the Taylor shading.

    4, or more where Taylor's condition for a dilation above 1 asks it (nbar >= A^2 + 1/2, A = acosh(10^(dB/20))/pi:
    from 40 dB on), but never more than half the hydrophones, since beyond that the terms are not told apart.
    """
    a = acosh(10 ** (shading_db / 20)) / pi
    return max(2, min(max(4, ceil(a * a + 0.5)), hydrophones // 2))


def _own(weights: Sequence[float], channels: int) -> NDArray[np.float64]:
    own = np.asarray(weights, dtype=np.float64)
    if own.shape != (channels,):
        raise UsageError(f"shading has shape {own.shape}; a list needs one weight for each of the {channels} channels")
    if not np.isfinite(own).all() or (own < 0).any() or not own.sum() > 0:
        raise UsageError("shading weights must be finite, at least 0, and not all 0")
    return _unity(own)


def _unity(weights: NDArray[np.float64]) -> NDArray[np.float64]:
    unity: NDArray[np.float64] = weights / weights.sum()
    return unity


def _named(shading: ShadingName, geometry: Geometry, shading_db: float) -> NDArray[np.float64]:
    """(M,) weights in band order, of any sum."""
    count = len(geometry.channels)
    if shading == "uniform":
        return np.ones(count)
    if shading == "chebyshev":
        return _chebyshev(geometry, shading_db)
    if geometry.length_m <= TOLERANCE_M:
        raise UsageError(f"shading {shading!r} needs a line with some length along x; all hydrophones are at one x")
    place = (geometry.x_m - geometry.middle_x_m) / geometry.length_m  # -1/2 aft .. +1/2 forward
    if shading == "hann":
        return np.clip(0.5 + 0.5 * np.cos(2 * pi * place), 0.0, None)
    if shading == "hamming":
        return 0.54 + 0.46 * np.cos(2 * pi * place)
    return _taylor(place * (count - 1) / count, shading_db, taylor_nbar(shading_db, count))


def _chebyshev(geometry: Geometry, shading_db: float) -> NDArray[np.float64]:
    if geometry.spacing_m is None:
        raise UsageError("shading 'chebyshev' needs equal spacing along x; this line has none: use taylor or hann")
    from scipy.signal import windows  # here, because loading it takes longer than all else that a band needs

    weights = np.empty(len(geometry.channels))
    with warnings.catch_warnings():
        # scipy warns below 45 dB that spectral analysis wants more; along an array 25 to 40 dB is what is wanted
        warnings.filterwarnings("ignore", message="This window is not suitable for spectral analysis")
        weights[geometry.order] = windows.chebwin(len(weights), at=shading_db, sym=True)
    return weights


def _taylor(place: NDArray[np.float64], shading_db: float, nbar: int) -> NDArray[np.float64]:
    """Taylor's aperture distribution at places in units of the aperture, -1/2 to 1/2 ([2] of `shading_weights`)."""
    a = acosh(10 ** (shading_db / 20)) / pi
    dilation = nbar**2 / (a**2 + (nbar - 0.5) ** 2)
    orders = np.arange(1, nbar)
    weights = np.ones(len(place))
    for m in orders:
        above = np.prod(1 - m**2 / dilation / (a**2 + (orders - 0.5) ** 2))
        below = 2 * np.prod(1 - m**2 / orders[orders != m] ** 2)
        weights += 2 * (-1) ** (m + 1) * above / below * np.cos(2 * pi * m * place)
    return weights
