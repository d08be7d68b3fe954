"""core: a map made smaller: a range of frequencies, groups of neighbouring bins and beams."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import ceil, floor, isfinite
from typing import Literal, cast, get_args

import numpy as np
from numpy.typing import NDArray

from soundrose.errors import UsageError
from soundrose.product.messages import LEVEL_FLOOR_DB

__all__ = ["Pick", "ReducedMap", "group_size", "reduce_levels", "reduce_power"]

Pick = Literal["mean", "max"]

_NEPER_PER_DB = np.float32(np.log(10) / 10)


@dataclass(frozen=True, slots=True, eq=False)
class ReducedMap:
    """values : (beams, bins) float32, power or dB as they came in.  cone_deg : rising.  f0_hz, df_hz : bin 0, step."""

    values: NDArray[np.float32]
    cone_deg: list[float]
    f0_hz: float
    df_hz: float


def group_size(count: int, limit: int | None) -> int:
    """g = ceil(count / limit): how many neighbours form a group, so that at most `limit` are left. None: 1."""
    if limit is None:
        return 1
    if limit < 1:
        raise UsageError(f"limit is {limit!r}; it must be at least 1")
    return max(1, ceil(count / limit))


def reduce_power(
    power: NDArray[np.float32], cone_deg: Sequence[float], f0_hz: float, df_hz: float, *,
    bins: int | None = None, beams: int | None = None, f_min: float | None = None, f_max: float | None = None,
    pick: Pick = "mean",
) -> ReducedMap:  # fmt: skip
    """A map of power with at most `bins` bins and `beams` beams.

    Parameters
    ----------
    power : (beams, bins) float32, >= 0.    cone_deg : (beams,) rising.    f0_hz, df_hz : first bin, step, Hz.
    bins, beams : upper limits, >= 1; one at or over the number there changes nothing.
    f_min, f_max : bins of lower and higher frequency are left out first, Hz; both inclusive.
    pick : a group shows its mean power, or its largest.

    Returns
    -------
    Groups of g = ceil(n / limit) neighbours from the first on (the last may be smaller). `f0_hz` is the mean frequency
    of the first group, `df_hz` g times the old; `cone_deg` the arccosine of the group's mean cosine.

    Raises
    ------
    UsageError : a limit below 1, an unknown `pick`, a range of frequencies with no bin in it, axes that do not match.
    """
    if pick not in get_args(Pick):
        raise UsageError(f"pick is {pick!r}; it must be one of {', '.join(get_args(Pick))}")
    if power.ndim != 2 or power.shape[0] != len(cone_deg):
        raise UsageError(f"map has shape {power.shape}; it must be (beams, bins) with {len(cone_deg)} beams")
    chosen = _between(power.shape[1], f0_hz, df_hz, f_min, f_max)
    values, f0_hz = power[:, chosen], f0_hz + df_hz * chosen.start
    by_bin, by_beam = group_size(values.shape[1], bins), group_size(values.shape[0], beams)
    f0_hz += df_hz * (min(by_bin, values.shape[1]) - 1) / 2
    cone = list(cone_deg)
    if by_beam > 1:
        cosines = _grouped(np.cos(np.radians(cone)), by_beam, 0, "mean")
        cone = [float(v) for v in np.degrees(np.arccos(np.clip(cosines, -1, 1)))]
    values = _grouped(_grouped(values, by_bin, 1, pick), by_beam, 0, pick)
    return ReducedMap(values, cone, f0_hz, df_hz * by_bin)


def reduce_levels(
    level_db: NDArray[np.float32], cone_deg: Sequence[float], f0_hz: float, df_hz: float, *,
    bins: int | None = None, beams: int | None = None, f_min: float | None = None, f_max: float | None = None,
    pick: Pick = "mean",
) -> ReducedMap:  # fmt: skip
    """`reduce_power` of a map in dB: the mean is that of the power, never of the decibels.

    Where nothing is joined, the levels come back as they are, to the last bit.
    """
    limits = {"bins": bins, "beams": beams, "f_min": f_min, "f_max": f_max}
    joined = group_size(level_db.shape[1], bins) > 1 or group_size(level_db.shape[0], beams) > 1
    if pick != "mean" or not joined:
        return reduce_power(level_db, cone_deg, f0_hz, df_hz, pick=pick, **limits)  # type: ignore[arg-type]
    chosen = _between(level_db.shape[1], f0_hz, df_hz, f_min, f_max)
    power = np.exp(level_db[:, chosen] * _NEPER_PER_DB)
    reduced = reduce_power(power, cone_deg, f0_hz + df_hz * chosen.start, df_hz, bins=bins, beams=beams)
    levels = np.log(np.maximum(reduced.values, np.float32(1e-37))) / _NEPER_PER_DB
    return ReducedMap(
        np.maximum(levels, np.float32(LEVEL_FLOOR_DB)), reduced.cone_deg, reduced.f0_hz, reduced.df_hz
    )  # fmt: skip


def _between(bins: int, f0_hz: float, df_hz: float, f_min: float | None, f_max: float | None) -> slice:
    """The bins whose frequency lies in [f_min, f_max]; a bin on the edge is in, rounding forgiven."""
    for name, value in (("f_min", f_min), ("f_max", f_max)):
        if value is not None and not isfinite(value):
            raise UsageError(f"{name} is {value!r}; it must be a finite frequency in Hz")
    first = 0 if f_min is None else max(0, ceil((f_min - f0_hz) / df_hz - 1e-6))
    stop = bins if f_max is None else min(bins, floor((f_max - f0_hz) / df_hz + 1e-6) + 1)
    if first >= stop:
        raise UsageError(
            f"no bin lies between f_min {f_min!r} and f_max {f_max!r}; the map has {f0_hz:.6g} to"
            f" {f0_hz + df_hz * (bins - 1):.6g} Hz in steps of {df_hz:.6g} Hz"
        )
    return slice(first, stop)


def _grouped(values: NDArray[np.floating], size: int, axis: int, pick: Pick) -> NDArray[np.float32]:
    """Groups of `size` along `axis`, joined; the dtype stays (float32 for maps)."""
    if size == 1:
        return cast(NDArray[np.float32], values)
    count = values.shape[axis]
    starts = np.arange(0, count, size)
    if pick == "max":
        return cast(NDArray[np.float32], np.maximum.reduceat(values, starts, axis=axis))
    sizes = np.minimum(size, count - starts).astype(values.dtype)
    sums = np.add.reduceat(values, starts, axis=axis)
    return cast(NDArray[np.float32], sums / (sizes if axis == values.ndim - 1 else sizes[:, None]))
