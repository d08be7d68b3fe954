"""core: how many bins a band has, which kernel its line allows, what it takes in memory and arithmetic."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import ceil, floor, log2

import numpy as np
from numpy.typing import NDArray

from soundrose.array.geometry import Geometry
from soundrose.errors import UsageError

__all__ = ["Budget", "band_budget", "bin_range", "weight_bytes", "why_not_pairs"]

#: multiply-adds per second of one ordinary core in single precision, and its rate in passes bound by memory. Fitted to
#: the shortest of 40 frames on a two-core x86 machine: 48 hydrophones 1.9 ms, 64 7.1 ms (general kernel 23 ms), 128
#: 19 ms; the estimate lies within a third of each. Beside other work, medians were up to 3 times longer
PRODUCT_PER_S = 1e10
PASSES_PER_S = 2e9
#: frames a band worker keeps at once besides its weights: input, spectra, chunk buffers
FRAMES_KEPT = 4


def bin_range(band_hz: tuple[float, float], frame: int, rate_hz: float) -> tuple[int, int]:
    """(first, stop) of the bins k with low <= k rate/frame <= high; first == stop where there is none.

    An edge that lies on a bin includes it, rounding of 1e-9 bin forgiven.
    """
    low, high = (edge * frame / rate_hz for edge in band_hz)
    first, stop = ceil(low - 1e-9), floor(high + 1e-9) + 1
    return first, max(first, stop)


def why_not_pairs(geometry: Geometry, weights: NDArray[np.float64], delay_s: Sequence[float]) -> str | None:
    """What keeps a band from the real-pair kernel, in words; None where it can be used.

    weights : (M,) band order.  delay_s : (M,) sampling skew, band order.
    """
    if geometry.mirror is None:
        return "the line is not mirror-symmetric about its middle"
    if np.any(np.abs(weights - weights[geometry.mirror]) > 1e-12 * weights.max()):
        return "the shading is not symmetric about the middle"
    if len(set(delay_s)) > 1:
        return "delay_s differs between channels"
    return None


def weight_bytes(channels: int, beams: int, bins: int, pairs: bool) -> int:
    """Bytes of a band's steering weights, single precision: complex, or two real tables for half of everything."""
    if min(channels, beams, bins) < 0:
        raise UsageError(f"channels, beams and bins are {channels}, {beams}, {bins}; none may be negative")
    return bins * ceil(beams / 2) * ceil(channels / 2) * 8 if pairs else bins * beams * channels * 8


@dataclass(frozen=True, slots=True)
class Budget:
    """What a band takes. An estimate from counts: `soundrose bench` measures.

    weight_bytes, buffer_bytes : in the band's process, besides about 80 MB of the interpreter and its libraries.
    operations : multiply-adds per frame (transform, product, power and taper).
    load : processing time over real time on one ordinary core with nothing else to do.
    """

    weight_bytes: int
    buffer_bytes: int
    operations: float
    load: float


def band_budget(channels: int, beams: int, bins: int, frame: int, rate_hz: float, pairs: bool) -> Budget:
    """Memory and arithmetic of a band with `channels` hydrophones, a new frame each half `frame`."""
    transform = 2.5 * channels * frame * log2(frame)
    product = bins * beams * channels * (1.0 if pairs else 4.0)
    passes = 8.0 * bins * beams
    seconds = (transform + product) / PRODUCT_PER_S + passes / PASSES_PER_S
    buffers = FRAMES_KEPT * (4 * channels * frame + 8 * channels * (bins + 2)) + 3 * 4 * beams * bins
    return Budget(
        weight_bytes(channels, beams, bins, pairs), buffers, transform + product + passes,
        seconds * rate_hz / (frame / 2),
    )  # fmt: skip
