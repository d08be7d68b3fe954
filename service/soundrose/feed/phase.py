"""core: hydrophones connected the wrong way round, and hydrophones in each other's place, from phases to neighbours.

Polarity. Below c/4d a sound from anywhere reaches two hydrophones d apart with less than a quarter of a period between
them, so the real part of their cross-spectrum is positive in any sea of travelling sound: isotropic, with contacts,
near or far. One that is negative to its neighbours, while these agree with each other, is reversed. What does not
travel as sound (strum, flow) can make all pairs negative; then there is no majority, and nobody is accused.

Places. On an evenly spaced line pairs the same number of places apart have the same cross-spectrum; the median over
them is what it ought to be. The sum of squared differences to it over the three places on either side says how well
a signal fits a place. Two signals that both fit each other's place far better than their own are exchanged.

Both are common practice in commissioning arrays; no source is followed for the rules of decision. Cross-spectra are
of phases alone (see `spectra`), averaged exponentially over MEMORY_S.
"""

from collections.abc import Sequence
from typing import Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from soundrose.feed.neighbours import PairList

__all__ = ["MEMORY_S", "Places", "Polarity", "PolarityVerdict", "Swaps"]

MEMORY_S: Final = 2.5  #: exponential average: a fault shows after 2 to 3 s, and 25 independent parts stand behind it
LEAST_S: Final = 2  #: seconds seen before anything is said
TURNED: Final = 0.12  #: mean real part, of 1: five standard deviations of what incoherent noise gives in 2 s
ALIKE: Final = 0.3  #: share of the usual strength between neighbours that a reversed one must show
REACH: Final = 3  #: places on either side
BETTER: Final = 0.5  #: misfit in the other's place over that in the own, for the two together
BETTER_EACH: Final = 0.7  #: and for each of them
EXPLAINED: Final = 0.5  #: misfit in the other's place over that of a signal with nothing in common with its neighbours
#: share of the misfit of a stranger below which a signal fits its place. A wave from broadside reads the same at every
#: hydrophone: each then fits every place, and which of them best is a matter of rounding
FITS: Final = 0.1

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


class PolarityVerdict(NamedTuple):
    """All (channels,).  reversed, upright : bool, neither: not told.  score : mean real part to its neighbours as they
    ought to be, -1..1."""

    reversed: Bools
    upright: Bools
    score: Floats


class Polarity:
    """Sign of every hydrophone against its neighbours.

    channels : all.  pairs : of `close_pairs`.  phase_hz : of `spectra`.
    """

    def __init__(self, channels: int, pairs: PairList, phase_hz: Floats) -> None:
        below = phase_hz < pairs.limit_hz[:, None]
        told = below.any(axis=1)
        self._channels = channels
        self._first, self._second = pairs.first[told], pairs.second[told]
        share = below[told] / below[told].sum(axis=1, keepdims=True)
        self._share = share.T.astype(np.float32)
        self._mean = np.zeros(len(self._first))
        self._seen = np.zeros(channels, np.int64)

    def push(self, phases: NDArray[np.complex64], fit: Bools) -> PolarityVerdict:
        """One second. phases : (parts, bins, channels).  fit : (channels,) bool, has readings and is in use."""
        self._seen = np.where(fit, self._seen + 1, 0)
        a, b = phases[:, :, self._first], phases[:, :, self._second]
        now = ((a.real * b.real + a.imag * b.imag) * self._share).sum(axis=1, dtype=np.float64).mean(axis=0)
        seen = np.minimum(self._seen[self._first], self._seen[self._second])
        gain = 1.0 / np.clip(seen, 1.0, MEMORY_S)
        self._mean += np.where(seen > 0, gain * (now - self._mean), 0.0)
        known = seen >= LEAST_S
        strength = np.where(known, self._mean, 0.0)
        partners = self._sums(known.astype(np.float64))
        sign, score = self._majority(strength, np.maximum(partners, 1.0))
        usual = float(np.median(np.abs(strength[known]))) if known.any() else 0.0
        judged = partners >= 2
        least = max(TURNED, ALIKE * usual)
        turned = judged & (sign < 0) & (score < -least)
        if 3 * np.count_nonzero(sign[judged] < 0) > np.count_nonzero(judged):
            turned[:] = False
        return PolarityVerdict(turned, judged & (score > 0.25 * least), score)

    def _sums(self, values: Floats) -> Floats:
        """(channels,) sum over the pairs a hydrophone is in."""
        sums = np.bincount(self._first, values, self._channels)
        return np.asarray(sums + np.bincount(self._second, values, self._channels))

    def _majority(self, strength: Floats, partners: Floats) -> tuple[Floats, Floats]:
        """Signs by which pairs agree best, found by turning the worst until none is left; mean agreement, unsigned."""
        sign = np.ones(self._channels)
        score = np.zeros(self._channels)
        for _ in range(self._channels // 2 + 1):
            field = np.bincount(self._first, strength * sign[self._second], self._channels)
            field += np.bincount(self._second, strength * sign[self._first], self._channels)
            score = field / partners
            worst = int(np.argmin(sign * score))
            if sign[worst] * score[worst] >= 0:
                break
            sign[worst] = -sign[worst]
        return sign, score


class Swaps(NamedTuple):
    """All (channels,).  partner : int, in whose place its signal fits, -1: none.  stays : bool, fits its own place.
    ratio : float, misfit there over misfit here."""

    partner: NDArray[np.int64]
    stays: Bools
    ratio: Floats


class Places:
    """Whether signals stand in each other's place. channels : all.  stretches : of `even_stretches`."""

    def __init__(self, channels: int, stretches: Sequence[NDArray[np.int64]], bins: int) -> None:
        self._channels = channels
        self._stretches = [_Stretch(stretch, bins) for stretch in stretches if bins]

    def push(self, phases: NDArray[np.complex64], fit: Bools) -> Swaps:
        """One second. phases : (parts, bins, channels).  fit : (channels,) bool, has readings and is in use."""
        out = Swaps(np.full(self._channels, -1), np.ones(self._channels, bool), np.ones(self._channels))
        for stretch in self._stretches:
            stretch.push(phases, fit, out)
        return out


class _Stretch:
    def __init__(self, channels: NDArray[np.int64], bins: int) -> None:
        self._channels = channels
        n = len(channels)
        self._mean = np.zeros((bins, n, n), np.complex64)
        self._seconds = 0
        self._seen = np.zeros(n, np.int64)

    def push(self, phases: NDArray[np.complex64], fit: Bools, out: Swaps) -> None:
        here = self._channels
        self._seconds += 1
        self._seen = np.where(fit[here], self._seen + 1, 0)
        ours = np.ascontiguousarray(phases[:, :, here].transpose(1, 2, 0))
        gain = 1.0 / min(self._seconds, MEMORY_S)
        self._mean *= np.float32(1.0 - gain)
        self._mean += (ours * np.float32(gain / phases.shape[0])) @ ours.conj().transpose(0, 2, 1)
        known = self._seen >= LEAST_S
        misfit, nothing = self._misfits(known)
        self._decide(misfit, nothing, known, out)

    def _misfits(self, known: Bools) -> tuple[Floats, Floats]:
        """(n, n) mean squared difference of signal a, put in place p, to what is usual so many places apart; against
        neighbours that are `known` (n,) alone. And the same, (n, n), of a signal that nothing ties to them."""
        bins, n, _ = self._mean.shape
        sums, sizes, counts = np.zeros((n, n)), np.zeros((n, n)), np.zeros((n, n))
        power = (self._mean.real**2 + self._mean.imag**2).sum(axis=0, dtype=np.float64)
        rows = self._mean.reshape(bins, n * n).T
        for step in range(1, REACH + 1):
            pairs = np.diagonal(self._mean, step, axis1=1, axis2=2)  # signal a with that `step` places on
            ahead = np.median(pairs.real, axis=1) + 1j * np.median(pairs.imag, axis=1)
            both = np.stack([ahead, ahead.conj()], axis=1).astype(np.complex64)
            match = (rows.real @ both.real + rows.imag @ both.imag).astype(np.float64).reshape(n, n, 2)
            size = float(np.sum(np.abs(ahead) ** 2))
            for way, other in ((step, 0), (-step, 1)):
                apart = power + size - 2 * match[:, :, other]  # (a, place of the neighbour)
                np.fill_diagonal(apart, np.nan)
                apart[:, ~known] = np.nan
                _add_shifted(sums, counts, apart, way)
                _add_shifted(sizes, np.zeros((n, n)), np.where(np.isfinite(apart), size, np.nan), way)
        parts = np.maximum(counts, 1) * bins
        return sums / parts, sizes / parts

    def _decide(self, misfit: Floats, nothing: Floats, known: Bools, out: Swaps) -> None:
        own = np.diagonal(misfit)
        each = misfit / np.maximum(own[:, None], 1e-12)
        each[misfit >= EXPLAINED * nothing] = np.inf
        each[own < FITS * np.diagonal(nothing)] = np.inf  # it fits where it is, however well it may fit elsewhere too
        together = (misfit + misfit.T) / np.maximum(own[:, None] + own, 1e-12)
        together[each >= BETTER_EACH] = np.inf
        together[each.T >= BETTER_EACH] = np.inf
        together[~known] = np.inf
        together[:, ~known] = np.inf
        np.fill_diagonal(together, np.inf)
        best = np.argmin(together, axis=1)
        mutual = best[best] == np.arange(len(best))
        least = together[np.arange(len(best)), best]
        swapped = mutual & (least < BETTER)
        out.partner[self._channels] = np.where(swapped, self._channels[best], -1)
        out.ratio[self._channels] = np.where(np.isfinite(least), least, 1.0)
        out.stays[self._channels] = known & ~(least < BETTER_EACH)


def _add_shifted(sums: Floats, counts: Floats, apart: Floats, way: int) -> None:
    """To place p goes what was found with the neighbour `way` places on, where there is one, of another signal."""
    n = len(sums)
    to = slice(0, n - way) if way > 0 else slice(-way, n)
    taken = apart[:, way:] if way > 0 else apart[:, : n + way]
    there = np.isfinite(taken)
    sums[:, to] += np.where(there, taken, 0.0)
    counts[:, to] += there
