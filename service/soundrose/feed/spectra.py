"""core: one short spectrum of every hydrophone in each part of a second: levels in octaves, and phases.

Of each part the first samples, a power of two, go through one Hann-tapered transform. Levels are sums of squares over
octaves of bins. Phases are kept as complex numbers of length one, so that neither a loud moment nor a loud frequency
has more say than a quiet one (the phase transform of Knapp and Carter 1976, IEEE Trans. ASSP 24(4) 320-327).
"""

from typing import Final

import numpy as np
import scipy.fft
from numpy.typing import NDArray

__all__ = ["SecondOfSpectra"]

LONGEST: Final = 2048  #: samples of a transform: enough to tell 15 Hz apart at 30 kHz, and cheap beyond
SHORTEST: Final = 32  #: fewer samples in a part tell no octaves
FIRST_BIN: Final = 2  #: below lies what the taper leaks from a constant offset
TOP: Final = 0.45  #: of the rate: above it lie the filters of the converters
MOST_PHASES: Final = 64  #: bins whose phases are kept
LEAST_PHASES: Final = 24  #: as many at least, where the spacing alone would leave fewer


Floats = NDArray[np.float64]


class SecondOfSpectra:
    """Collects the samples of one part after the other.

    Parameters
    ----------
    channels, parts : hydrophones; parts of a second.
    rate_hz : sampling rate.
    phases_hz : phases are kept up to this frequency.

    Attributes
    ----------
    edges_hz : (bands + 1,) float64, of the octaves; empty where the rate is too low for any.
    wide : (bands,) bool, octaves with bins enough for a level from one part alone.
    phase_hz : (bins,) float64, where phases are kept.
    powers : (parts, channels, bands) float64, of the parts filled so far.
    phases : (parts, bins, channels) complex64, length 1, or 0 where there is no sound or no reading.
    filled : number of parts that were long enough.
    """

    def __init__(self, channels: int, parts: int, rate_hz: float, phases_hz: float) -> None:
        fits = int(rate_hz / parts)
        length = min(1 << max(fits.bit_length() - 1, 0), LONGEST)
        self.length = length if length >= SHORTEST else 0
        self._taper = (0.5 - 0.5 * np.cos(2 * np.pi * np.arange(length) / length)).astype(np.float32)
        top = int(TOP * length) if self.length else FIRST_BIN
        starts = [1 << k for k in range(1, 12) if FIRST_BIN <= 1 << k < top]
        if len(starts) > 1 and top - starts[-1] < starts[-1] // 4:
            starts.pop()  # a sliver joins the octave below
        step_hz = rate_hz / length
        self._starts = np.array([*starts, top], np.int64)
        self.edges_hz: Floats = np.asarray(self._starts * step_hz if starts else [], np.float64)
        widths = np.diff(self._starts)
        self.wide = widths >= min(8, max(widths, default=0))
        self._bins = _phase_bins(top, int(phases_hz / step_hz)) if starts else np.empty(0, np.int64)
        self.phase_hz: Floats = np.asarray(self._bins * step_hz, np.float64)
        self._samples = np.zeros((channels, length), np.float32)
        self._has = 0
        self._misread = np.zeros(channels, bool)
        self.powers = np.zeros((parts, channels, max(len(starts), 0)))
        self.phases = np.zeros((parts, len(self._bins), channels), np.complex64)
        self.filled = 0

    @property
    def bands(self) -> int:
        """Octaves."""
        return max(len(self.edges_hz) - 1, 0)

    def add(self, samples: NDArray[np.float32], bad: NDArray[np.bool_] | None) -> None:
        """Take a piece of the current part; bad : (channels,) bool, whose samples here are no readings."""
        room = self.length - self._has
        if room <= 0:
            return
        count = min(room, samples.shape[1])
        self._samples[:, self._has : self._has + count] = samples[:, :count]
        if bad is not None:
            self._misread |= bad
        self._has += count

    def close_part(self) -> None:
        """The part is over; what is too short for a transform is left out."""
        if self.bands and self._has == self.length and self.filled < len(self.powers):
            self._transform()
        self._has = 0
        self._misread[:] = False

    def clear(self) -> None:
        """Begin a second."""
        self.filled = 0

    def _transform(self) -> None:
        mean = self._samples.mean(axis=1, keepdims=True)
        spectra = scipy.fft.rfft((self._samples - mean) * self._taper, axis=1)
        spectra[self._misread] = 0
        squares = spectra.real**2 + spectra.imag**2
        squares = squares[:, : self._starts[-1]]
        self.powers[self.filled] = np.add.reduceat(squares, self._starts[:-1], axis=1, dtype=np.float64)
        kept = spectra[:, self._bins]
        size = np.sqrt(squares[:, self._bins])
        self.phases[self.filled] = np.divide(kept, size, out=np.zeros_like(kept), where=size > 0).T
        self.filled += 1


def _phase_bins(top: int, wanted: int) -> NDArray[np.int64]:
    """At most MOST_PHASES bins evenly from the first to the last wanted."""
    last = min(max(wanted, FIRST_BIN + LEAST_PHASES), top)
    bins = np.arange(FIRST_BIN, last)
    if len(bins) <= MOST_PHASES:
        return bins
    return np.unique(np.linspace(FIRST_BIN, last - 1, MOST_PHASES).round().astype(np.int64))
