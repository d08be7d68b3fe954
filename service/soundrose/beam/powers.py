"""core: each frame's beam powers before averaging, reduced to what detection needs."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from soundrose.beam.frames import Frame
from soundrose.product.reduce import reduce_power

__all__ = ["PowerFrame", "PowerReducer"]


@dataclass(frozen=True, slots=True, eq=False)
class PowerFrame:
    """Beam powers of one frame alone.

    epoch, run, first, t_ns, t_end_ns : of the frame.    since_gap, adjacent : as in the frame.
    power : (beams, bins) float32, micropascal^2/Hz, one-sided, plane-wave equivalent; groups hold their mean.
    cone_deg : (beams,) rising.    f0_hz, df_hz : first bin, step.
    """

    epoch: int
    run: str
    first: int
    t_ns: int
    t_end_ns: int
    adjacent: bool
    since_gap: int | None
    power: NDArray[np.float32]
    cone_deg: tuple[float, ...]
    f0_hz: float
    df_hz: float


class PowerReducer:
    """Makes `PowerFrame`s of at most `max_beams` x `max_bins`.

    cone_deg : (beams,) rising, of the powers to come.    f0_hz, df_hz : their first bin and step.
    UsageError for limits below 1, when the first frame comes.
    """

    def __init__(
        self, cone_deg: Sequence[float], f0_hz: float, df_hz: float, max_beams: int = 145, max_bins: int = 1024
    ) -> None:
        self._cone_deg = tuple(cone_deg)
        self._f0_hz, self._df_hz = f0_hz, df_hz
        self._max_beams, self._max_bins = max_beams, max_bins

    def frame(self, frame: Frame, t_end_ns: int, power: NDArray[np.float32]) -> PowerFrame:
        """power : (beams, bins) float32 of this frame alone, beams by rising cone angle."""
        reduced = reduce_power(
            power, self._cone_deg, self._f0_hz, self._df_hz, bins=self._max_bins, beams=self._max_beams
        )
        return PowerFrame(
            frame.epoch, frame.run, frame.first, frame.t_ns, t_end_ns, frame.adjacent, frame.since_gap, reduced.values,
            tuple(reduced.cone_deg), reduced.f0_hz, reduced.df_hz,
        )  # fmt: skip
