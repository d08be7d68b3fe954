"""core: what `soundrose bench` puts side by side: a band's stage, the bare arithmetic it cannot do without, and the
plain script a user would write."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from soundrose.array.budget import bin_range
from soundrose.array.geometry import band_geometry, cos_grid, delays_s
from soundrose.array.shading import shading_weights
from soundrose.beam.kernels import CHUNK, FEWEST_TERMS
from soundrose.beam.stage import BandStage
from soundrose.feed.hop import Hop
from soundrose.settings_types import (
    ArraySettings,
    BandSettings,
    CalibrationSettings,
    FeedSettings,
    Settings,
    WaterSettings,
)

__all__ = ["LOADS", "BareArithmetic", "Load", "PlainScript", "StageLoop", "load_settings_of"]


@dataclass(frozen=True, slots=True)
class Load:
    """A band to time. bins : how many the band has, from 50 Hz up."""

    channels: int
    rate_hz: float
    frame: int
    beams: int
    bins: int

    @property
    def hop_s(self) -> float:
        """Time between frames."""
        return self.frame / 2 / self.rate_hz


LOADS = (
    Load(48, 16000.0, 4096, 145, 1012),
    Load(64, 16000.0, 8192, 181, 3000),
    Load(128, 16000.0, 8192, 361, 3000),
)


def load_settings_of(load: Load) -> Settings:
    """Settings of a uniform line, 0.375 m apart, Hann shading, with one band of just that many bins."""
    df_hz = load.rate_hz / load.frame
    low = np.ceil(50.0 / df_hz) * df_hz
    band = BandSettings(
        name="main", band_hz=(low, low + (load.bins - 1) * df_hz), frame=load.frame, beams=load.beams,
        channels=tuple(range(load.channels)),
    )  # fmt: skip
    each = (0.0,) * load.channels
    return Settings(
        array=ArraySettings("bench", tuple((-0.375 * m, 0.0, 0.0) for m in range(load.channels)), spacing_m=0.375),
        feed=FeedSettings(rate_hz=load.rate_hz),
        calibration=CalibrationSettings(each, each, (1.0,) * load.channels, each),
        water=WaterSettings(1500.0),
        bands=(band,),
    )


class StageLoop:
    """The real stage: each call pushes the next half frame of `samples` (channels, n) and gets one map.

    clock : nanoseconds, for the stage's own timings.
    """

    def __init__(self, settings: Settings, samples: NDArray[np.float32], clock: Callable[[], int]) -> None:
        self.stage = BandStage(settings, settings.bands[0], clock=clock)
        self._step = settings.bands[0].frame // 2
        self._samples = samples
        self._first = 0
        self()  # the first half frame makes no map

    def __call__(self) -> int:
        """Maps made: 1."""
        at = self._first % (self._samples.shape[1] - self._step + 1) // self._step * self._step
        part = self._samples[:, at : at + self._step]
        none = np.zeros(len(part), dtype=np.int32)
        times = np.array([[0, 0]], dtype=np.int64)
        maps = self.stage.push(Hop("bench", 0, self._first, times, part, none.astype(np.bool_), none))
        self._first += self._step
        return len(maps)


class BareArithmetic:
    """Transform of the frame and bare real products for half the beams and half the hydrophones: nothing else.

    The operands lie ready; the best of three layouts is the measure: real and imaginary rows times weights (beams,
    pairs) turned, made up with zeros as the kernel does; times weights (pairs, beams); and weights (beams, pairs) times
    real and imaginary columns. samples : (channels, N or more) float32.
    """

    def __init__(self, load: Load, samples: NDArray[np.float32]) -> None:
        rng = np.random.default_rng(0)
        self._frame = np.ascontiguousarray(samples[:, : load.frame])
        pairs, half = (load.channels + 1) // 2, (load.beams + 1) // 2
        self._bins = load.bins
        terms = max(pairs, FEWEST_TERMS)
        self._turned = rng.standard_normal((2, load.bins, half, terms), dtype=np.float32)
        self._beams_inside = rng.standard_normal((2, load.bins, pairs, half), dtype=np.float32)
        self._pairs_inside = np.ascontiguousarray(self._beams_inside.swapaxes(2, 3))
        self._rows = rng.standard_normal((2, CHUNK, 2, terms), dtype=np.float32)
        self._short_rows = np.ascontiguousarray(self._rows[..., :pairs])
        self._columns = np.ascontiguousarray(self._short_rows.swapaxes(2, 3))
        self._rows_out = np.empty((CHUNK, 2, half), dtype=np.float32)
        self._columns_out = np.empty((CHUNK, half, 2), dtype=np.float32)

    @property
    def products(self) -> tuple[Callable[[], None], ...]:
        """The three layouts of the product."""
        return self._rows_times_turned, self._rows_times_beams_inside, self._weights_times_columns

    def transform(self) -> None:
        fft.rfft(self._frame, axis=1)

    def _pieces(self) -> Iterator[tuple[slice, int]]:
        for begin in range(0, self._bins, CHUNK):
            stop = min(begin + CHUNK, self._bins)
            yield slice(begin, stop), stop - begin

    def _rows_times_turned(self) -> None:
        for piece, count in self._pieces():
            for weights, operand in zip(self._turned, self._rows, strict=True):
                np.matmul(operand[:count], weights[piece].transpose(0, 2, 1), out=self._rows_out[:count])

    def _rows_times_beams_inside(self) -> None:
        for piece, count in self._pieces():
            for weights, operand in zip(self._beams_inside, self._short_rows, strict=True):
                np.matmul(operand[:count], weights[piece], out=self._rows_out[:count])

    def _weights_times_columns(self) -> None:
        for piece, count in self._pieces():
            for weights, operand in zip(self._pairs_inside, self._columns, strict=True):
                np.matmul(weights[piece], operand[:count], out=self._columns_out[:count])


class PlainScript:
    """What a user would write: taper, transform, complex product of all beams and hydrophones, |.|^2, average.

    Whole arrays at once, single precision, phase weights. The script in `docs/` and the first one anybody writes.
    """

    def __init__(self, settings: Settings, samples: NDArray[np.float32]) -> None:
        band = settings.bands[0]
        first, stop = bin_range(band.band_hz, band.frame, settings.feed.rate_hz)
        geometry = band_geometry(settings, band)
        tau = delays_s(geometry.x_m, cos_grid(band.beams), settings.water.sound_speed_m_s).astype(np.float32)
        f = (np.arange(first, stop) * settings.feed.rate_hz / band.frame).astype(np.float32)
        shading = shading_weights(band.shading, geometry).astype(np.float32)
        self._weights = np.empty((stop - first, band.beams, len(shading)), dtype=np.complex64)
        for weights, frequency in zip(self._weights, f, strict=True):
            weights[:] = shading * np.exp(np.complex64(-2j * np.pi) * frequency * tau)
        self._taper = (0.5 - 0.5 * np.cos(2 * np.pi * np.arange(band.frame) / band.frame)).astype(np.float32)
        self._frame = np.ascontiguousarray(samples[:, : band.frame])
        self._bins = slice(first, stop)
        self._average = np.zeros((stop - first, band.beams), dtype=np.float32)

    def __call__(self) -> None:
        spectra = fft.rfft(self._frame * self._taper, axis=1)[:, self._bins]
        beams = self._weights @ np.ascontiguousarray(spectra.T)[:, :, None]
        power = np.abs(beams[:, :, 0]) ** 2
        self._average += np.float32(0.06) * (power - self._average)
