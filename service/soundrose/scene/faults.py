"""core: what hydrophones and converters do to sound pressure: faults, full scale, whole counts."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from soundrose.feed.wire import SampleType
from soundrose.scene.scene_types import Fault, Scene

__all__ = ["Converter", "Faults"]

BITS = {"i2": 16, "i3": 24, "i4": 32}
SPELL_S = 0.4  # an intermittent hydrophone is out, or in, for stretches of this length


class Faults:
    """Faults of hydrophones in time. Works on (channels, n) pressure from a sample index on; cut as you like.

    rate_hz : true rate.  seed : of the scene.
    """

    def __init__(self, faults: Sequence[Fault], rate_hz: float, seed: int) -> None:
        self._faults, self._rate, self._seed = faults, rate_hz, seed
        self._spell = max(1, round(SPELL_S * rate_hz))

    def apply(self, pressure: NDArray[np.float32], first: int) -> NDArray[np.float32]:
        """The pressure as the converters get it, a new array."""
        out = pressure.copy()
        n = pressure.shape[1]
        for number, fault in enumerate(self._faults):
            begin = max(0, int(np.ceil(fault.from_s * self._rate)) - first)
            end = n if np.isinf(fault.to_s) else min(n, int(np.ceil(fault.to_s * self._rate)) - first)
            if begin < end:
                self._apply(out, fault, (self._seed, 4, number), first + begin, slice(begin, end))
        return out

    def _apply(self, out: NDArray[np.float32], fault: Fault, seed: tuple[int, ...], first: int, part: slice) -> None:
        row = out[fault.channel, part]
        match fault.state:
            case "dead":
                row[:] = 0
            case "reversed":
                np.negative(row, out=row)
            case "exchanged":
                out[[fault.channel, fault.other or 0], part] = out[[fault.other or 0, fault.channel], part]
            case "clipped":
                row *= np.float32(10 ** (fault.amount / 20))
            case "noisy":
                row += np.float32(np.sqrt(self._rate / 2) * 10 ** (fault.amount / 20)) * self._noise(
                    seed, first, len(row)
                )
            case "intermittent":
                row[self._out(seed, fault.amount, first, len(row))] = 0

    def _noise(self, seed: tuple[int, ...], first: int, length: int) -> NDArray[np.float32]:
        """(length,) white, unit variance; drawn by whole spells so that any cut gives the same."""
        spells = range(first // self._spell, (first + length - 1) // self._spell + 1)
        drawn = [np.random.default_rng([*seed, k]).standard_normal(self._spell, dtype=np.float32) for k in spells]
        begin = first - spells.start * self._spell
        return np.concatenate(drawn)[begin : begin + length]

    def _out(self, seed: tuple[int, ...], share: float, first: int, length: int) -> NDArray[np.bool_]:
        spell = (first + np.arange(length)) // self._spell
        out = [np.random.default_rng([*seed, k]).uniform() < share for k in range(int(spell[0]), int(spell[-1]) + 1)]
        chosen: NDArray[np.bool_] = np.array(out, np.bool_)[spell - spell[0]]
        return chosen


class Converter:
    """Micropascal to what is sent: whole counts that clip at full scale, or floats of full scale 1."""

    def __init__(self, scene: Scene) -> None:
        calibration = scene.calibration
        db = np.array(calibration.sensitivity_db) + np.array(calibration.gain_db)
        self._per_upa: NDArray[np.float32] = (10 ** (db / 20) / np.array(calibration.full_scale_v))[:, None].astype(
            np.float32
        )
        self.type: SampleType = scene.type

    def convert(self, pressure: NDArray[np.float32]) -> NDArray[np.float32] | NDArray[np.int32]:
        """(channels, n) micropascal -> (channels, n) of the type that is sent."""
        share: NDArray[np.float32] = pressure * self._per_upa
        if self.type == "f4":
            np.clip(share, np.float32(-1), np.float32(1), out=share)
            return share
        half = 1 << (BITS[self.type] - 1)
        counts = np.rint(share.astype(np.float64) * half)
        np.clip(counts, -half, half - 1, out=counts)
        return counts.astype(np.int32)
