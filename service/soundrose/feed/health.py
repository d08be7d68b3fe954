"""core: the state of every hydrophone, judged once in each second of feed time.

A second begins with the first sample and is followed by the next; it is divided into ten parts (fewer at rates at
which a part would not hold enough samples to tell). Time is that of the
samples, never the host's, so that a recording played fast is judged as it was live. Over a gap or a new run the second
goes on; where more than it has passed, it is judged by what it has, and the next begins with the sample that came.

What is found in a second comes from all its samples (variation, NaN, full scale, level) and from one short spectrum in
each part (`spectra`), compared with neighbours (`levels`, `phase`); what is said of it stands in `judge`.
"""

from math import ceil
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from soundrose.feed.judge import CLIPPED_SHARE, STATES, Judge, Second
from soundrose.feed.levels import Levels
from soundrose.feed.neighbours import close_pairs, even_stretches
from soundrose.feed.phase import Places, Polarity
from soundrose.feed.spectra import SecondOfSpectra
from soundrose.product.messages import LEVEL_FLOOR_DB, HealthProduct
from soundrose.settings_types import Settings

__all__ = ["CLIPPED_SHARE", "FLAT_SAMPLES", "PARTS", "SECOND_NS", "Health"]

SECOND_NS: Final = 1_000_000_000
PARTS: Final = 10  #: of a second, at most; a hydrophone without variation in one of them is intermittent
FLAT_SAMPLES: Final = 8  #: fewer equal values in a row are no sign of a dead hydrophone
_NEARLY: Final = 0.01  #: samples; a block's t is rounded to whole nanoseconds, and must not move a boundary by one


class Health:
    """Judges hydrophones; is given the samples in order, in pieces that never reach over a part of a second.

    Call `move` when the time of the next sample is not that after the last, `room` to learn how long the next piece
    may be, `add` with the piece, `close` once the room is used up.

    settings : hydrophones, their places, those left out, rate, sound speed.
    out : (channels,) bool, hydrophones out of use since the last judgement.
    """

    def __init__(self, settings: Settings) -> None:
        array, rate_hz = settings.array, settings.feed.rate_hz
        channels = array.channels
        self._rate_hz = rate_hz
        self._parts = max(min(int(rate_hz / FLAT_SAMPLES), PARTS), 1)
        self._enough = max(rate_hz / self._parts, 1.0)  # samples that a second needs to be judged
        self._excluded = np.zeros(channels, bool)
        self._excluded[list(array.exclude)] = True
        self._start: int | None = None  # of the second, ns
        self._part_i = 0
        self.edge = 0  #: end of the current part, ns
        self.last_t_ns = 0
        self._power = np.zeros(channels)
        self._finite, self._clipped = np.zeros(channels, np.int64), np.zeros(channels, np.int64)
        self._flat_parts = np.zeros(channels, np.int64)
        self._second, self._part = _Range(channels), _Range(channels)
        self._samples = 0
        self._set_up_comparison(settings)
        self._judge_of = Judge(self._excluded, self._spectra.edges_hz)
        self.out = self._judge_of.out

    def _set_up_comparison(self, settings: Settings) -> None:
        positions = np.asarray(settings.array.positions_m, np.float64)
        speed, channels = settings.water.sound_speed_m_s, len(positions)
        pairs = close_pairs(positions, settings.calibration.delay_s, speed)
        # twice the limit of the closest pairs: the frequency at which neighbours are half a wave apart
        highest_hz = 2 * float(pairs.limit_hz.max(initial=0.0))
        self._spectra = SecondOfSpectra(channels, self._parts, self._rate_hz, min(highest_hz, self._rate_hz))
        self._levels = Levels(positions, self._spectra.bands)
        self._polarity = Polarity(channels, pairs, self._spectra.phase_hz)
        self._places = Places(channels, even_stretches(positions), len(self._spectra.phase_hz))

    @property
    def codes(self) -> NDArray[np.uint8]:
        """(channels,) uint8, states at the last judgement, as indices of `judge.STATES`."""
        return self._judge_of.codes

    def resume(self, codes: NDArray[np.uint8]) -> None:
        """Go on with the states judged before a restart."""
        self._judge_of.resume(codes)
        self.out = self._judge_of.out

    def is_apart(self, t_ns: int) -> bool:
        """Whether a sample at `t_ns` lies outside the current part, so that `move` must be called."""
        return self._start is None or t_ns >= self.edge or t_ns < self._start - SECOND_NS

    def move(self, t_ns: int) -> HealthProduct | None:
        """Make the part that holds `t_ns` the current one; the judgement of the second, if that is over with it."""
        product = None
        if self._start is not None and self._start - SECOND_NS <= t_ns < self._start + SECOND_NS:
            self._close_part()
        else:
            product = self._judge()
            follows = self._start is not None and 0 <= t_ns - self._start < 2 * SECOND_NS
            self._start = self._start + SECOND_NS if follows and self._start is not None else t_ns
        assert self._start is not None
        self._begin_part(max((t_ns - self._start) * self._parts // SECOND_NS, 0))
        return product

    def room(self, t_ns: int) -> int:
        """Samples from the one at `t_ns` on (it included) that still belong to the current part; at least 1."""
        return max(ceil((self.edge - t_ns) * self._rate_hz / SECOND_NS - _NEARLY), 1)

    def add(
        self, samples: NDArray[np.float32], clipped: NDArray[np.int32], bad: NDArray[np.bool_] | None, last_t_ns: int
    ) -> None:
        """Take a piece.

        samples : (channels, n) float32, n >= 1.  clipped : (channels,) how many of them are clipped.  bad :
        (channels,) bool, hydrophones whose samples here are no readings.  last_t_ns : time of the last one.
        """
        power = np.einsum("ij,ij->i", samples, samples, dtype=np.float64)
        self.last_t_ns = last_t_ns
        self._samples += samples.shape[1]
        self._power += power
        self._clipped += clipped
        self._finite += samples.shape[1] if bad is None else np.where(bad, 0, samples.shape[1])
        self._part.add(samples, bad)
        self._spectra.add(samples, bad)

    def close(self) -> HealthProduct | None:
        """End the current part; the judgement of the second, if this was its last part."""
        assert self._start is not None
        if self._part_i + 1 < self._parts:
            self._close_part()
            self._begin_part(self._part_i + 1)
            return None
        product = self._judge()
        self._start += SECOND_NS
        self._begin_part(0)
        return product

    def _begin_part(self, part_i: int) -> None:
        assert self._start is not None
        self._part_i = part_i
        self.edge = self._start + (part_i + 1) * SECOND_NS // self._parts

    def _close_part(self) -> None:
        self._flat_parts += self._part.is_flat()
        self._second.join(self._part)
        self._part.clear()
        self._spectra.close_part()

    def _judge(self) -> HealthProduct | None:
        self._close_part()
        product = None
        if self._samples >= self._enough:
            product = self._product()
        self._power[:], self._finite[:], self._clipped[:], self._flat_parts[:] = 0.0, 0, 0, 0
        self._second.clear()
        self._spectra.clear()
        self._samples = 0
        return product

    def _product(self) -> HealthProduct:
        second = self._found()
        self._judge_of.push(second)
        self.out = self._judge_of.out
        channels = [self._channel(i, second) for i in range(len(self.out))]
        header = {"t": self.last_t_ns, "used": int(np.count_nonzero(~self.out)), "channels": channels}
        return HealthProduct(header)

    def _found(self) -> Second:
        flat = self._second.is_flat()
        fit = ~self._excluded & ~flat & (self._finite == self._samples)
        spectra = self._spectra
        phases = spectra.phases[: spectra.filled]
        compared = phases.size > 0
        return Second(
            samples=self._samples,
            parts=self._parts,
            finite=self._finite,
            clipped=self._clipped,
            flat=flat,
            flat_parts=self._flat_parts,
            low=self._second.low,
            excess=self._levels.push(spectra, fit),
            polarity=self._polarity.push(phases, fit) if compared else None,
            swaps=self._places.push(phases, fit) if compared else None,
        )

    def _channel(self, i: int, second: Second) -> dict[str, Any]:
        finite = int(second.finite[i])
        mean = float(self._power[i]) / finite if finite else 0.0
        level_db = max(10.0 * float(np.log10(mean)), LEVEL_FLOOR_DB) if mean > 0 else LEVEL_FLOOR_DB
        state = STATES[self._judge_of.codes[i]]
        return {"i": i, "state": state, "level_db": round(level_db, 3), "why": self._judge_of.why(i, second)}


class _Range:
    """Lowest and highest value per channel, and how many were seen."""

    def __init__(self, channels: int) -> None:
        self.low, self.high = np.empty(channels, np.float32), np.empty(channels, np.float32)
        self.seen = np.empty(channels, np.int64)
        self.clear()

    def clear(self) -> None:
        self.low[:], self.high[:], self.seen[:] = np.inf, -np.inf, 0

    def add(self, samples: NDArray[np.float32], bad: NDArray[np.bool_] | None) -> None:
        low, high, seen = samples.min(axis=1), samples.max(axis=1), samples.shape[1]
        if bad is not None:
            low, high = np.where(bad, np.float32(np.inf), low), np.where(bad, np.float32(-np.inf), high)
            self.seen += np.where(bad, 0, seen)
        else:
            self.seen += seen
        np.minimum(self.low, low, out=self.low)
        np.maximum(self.high, high, out=self.high)

    def join(self, other: "_Range") -> None:
        np.minimum(self.low, other.low, out=self.low)
        np.maximum(self.high, other.high, out=self.high)
        self.seen += other.seen

    def is_flat(self) -> NDArray[np.bool_]:
        """(channels,) bool: enough values, and all of them equal."""
        flat: NDArray[np.bool_] = (self.seen >= FLAT_SAMPLES) & (self.low == self.high)
        return flat
