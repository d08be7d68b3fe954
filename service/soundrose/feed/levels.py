"""core: how loud each hydrophone is against its neighbours and its own past, octave by octave.

The excess of a hydrophone is its level less the median of its neighbours', so that a sound that all of them hear,
however loud, takes part in neither; over the second the median of its parts is taken, then that of the last seconds, so
that one loud moment counts for nothing. Medians as robust estimates of place are textbook matter (Huber 1981, Robust
Statistics, ch. 1 and 5); the thresholds are common practice, without a source.
"""

from typing import Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from soundrose.feed.neighbours import Surroundings
from soundrose.feed.spectra import SecondOfSpectra

__all__ = ["STEP_DB", "Excess", "Levels"]

SECONDS: Final = 3  #: over which an excess is the median
STEP_DB: Final = 10.0  #: of one part from the usual: a drop-out or a burst
RANGE_DB: Final = 70.0  #: octaves this far below the loudest say more of rounding than of hydrophones
_LEAST: Final = 1e-30

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


class Excess(NamedTuple):
    """judged : (channels,) bool.  bands_db : (channels, bands) float64 above the median of the neighbours.  told :
    (bands,) bool, octaves with enough level.  parts_off : (channels,) int, parts of the second STEP_DB or more from
    the usual.  off_db : (channels,) float64, the furthest of them."""

    judged: Bools
    bands_db: Floats
    told: Bools
    parts_off: NDArray[np.int64]
    off_db: Floats


class Levels:
    """Compares spectra second by second. positions_m : (channels, 3)."""

    def __init__(self, positions_m: Floats, bands: int) -> None:
        self._around = Surroundings(positions_m)
        self._past = np.zeros((SECONDS, len(positions_m), bands))
        self._seen = np.zeros(len(positions_m), np.int64)

    def push(self, spectra: SecondOfSpectra, fit: Bools) -> Excess | None:
        """One second. fit : (channels,) bool, has readings and is in use. None: nothing to judge by."""
        near = self._around.nearest(fit)
        if near is None or not spectra.bands or not spectra.filled:
            self._seen[:] = 0
            return None
        level = 10 * np.log10(np.maximum(spectra.powers[: spectra.filled], _LEAST))
        ambient = np.median(level[:, near], axis=2)
        excess = level - ambient
        usual = np.median(self._past, axis=0)
        told = self._told(level, fit)
        parts_off, off_db = self._steps(excess, usual, spectra.wide & told, fit)
        now = np.median(excess, axis=0)
        self._seen = np.where(fit, self._seen + 1, 0)
        self._past = np.where((self._seen == 1)[:, None], now, np.concatenate([self._past[1:], now[None]]))
        return Excess(fit & (self._seen >= SECONDS), np.median(self._past, axis=0), told, parts_off, off_db)

    @staticmethod
    def _told(level: Floats, fit: Bools) -> Bools:
        usual = np.median(np.median(level[:, fit], axis=1), axis=0)
        told: Bools = usual > usual.max() - RANGE_DB
        return told

    def _steps(self, excess: Floats, usual: Floats, wide: Bools, fit: Bools) -> tuple[NDArray[np.int64], Floats]:
        """Parts off the usual by the median over the wide octaves, and by how much the furthest."""
        channels = len(fit)
        if not wide.any():
            return np.zeros(channels, np.int64), np.zeros(channels)
        step = np.median((excess - usual)[:, :, wide], axis=2)
        step[:, ~(fit & (self._seen >= SECONDS))] = 0.0
        furthest = step[np.argmax(np.abs(step), axis=0), np.arange(channels)]
        return np.count_nonzero(np.abs(step) >= STEP_DB, axis=0), furthest
