"""core: beam time series for chosen directions: exact linear convolution by overlap-save."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from soundrose.array.filters import min_frame, next_frame
from soundrose.array.geometry import band_geometry
from soundrose.array.shading import shading_weights
from soundrose.beam.frames import Frame, Framer
from soundrose.beam.steering import Steering, delay_transforms
from soundrose.errors import UsageError
from soundrose.feed.hop import Hop
from soundrose.settings_types import BandSettings, Settings

__all__ = ["BeamSeries", "SeriesPiece"]


@dataclass(frozen=True, slots=True, eq=False)
class SeriesPiece:
    """A stretch of every beam's pressure at the array origin.

    epoch : of the hops.    first : index of the first sample.    t_ns : its time.
    samples : (beams, n) float32, micropascal.
    """

    epoch: int
    first: int
    t_ns: int
    samples: NDArray[np.float32]


class BeamSeries:
    """Time series of a band's beams towards given cone angles.

    Each frame gives its middle half, free of the wrap of the steering filters; joined they are the linear convolution
    of each channel with its filter, summed. The whole spectrum is kept, not only the band's. A stretch of samples from
    s to e gives samples from s + N/4 to at most e - N/4.

    Parameters
    ----------
    settings, band : array, shading, rate and skews are theirs.
    cones_deg : where to listen to, cone angles, 0..180.
    sound_speed_m_s : None: the settings'.    positions_m : (hydrophones listed, 3), None: the settings'.

    Attributes
    ----------
    frame_length : N, the band's, or the shortest longer one that the filters fit in (they are longer here: delays are
    those about the array origin).    taps : P, their odd length.

    Raises
    ------
    UsageError : no direction, or one outside 0..180 deg.
    """

    def __init__(
        self, settings: Settings, band: BandSettings, cones_deg: Sequence[float], *,
        sound_speed_m_s: float | None = None, positions_m: NDArray[np.float64] | None = None,
    ) -> None:  # fmt: skip
        if not cones_deg or not all(0 <= cone <= 180 for cone in cones_deg):
            raise UsageError(f"cones_deg are {list(cones_deg)}; they must be one or more angles from 0 to 180 deg")
        geometry = band_geometry(settings, band, positions_m)
        steering = Steering.about_origin(
            geometry, shading_weights(band.shading, geometry, band.shading_db),
            [settings.calibration.delay_s[channel] for channel in band.channels], np.cos(np.radians(cones_deg)),
            sound_speed_m_s or settings.water.sound_speed_m_s, settings.feed.rate_hz, band.frame, (0, band.frame // 2),
        )  # fmt: skip
        self.taps = steering.taps
        self.frame_length = next_frame(max(band.frame, min_frame(self.taps)))
        self._shading = steering.weights
        self._rate_hz = settings.feed.rate_hz
        self._framer = Framer(band.channels, self.frame_length, self._rate_hz)
        self._weights = self._transforms(steering)
        self._product = np.empty(self._weights.shape[1:], dtype=np.complex64)

    def push(self, hop: Hop, missed: int = 0) -> list[SeriesPiece]:
        """Take one hop; what it completes, oldest first. missed : hops not received just before it."""
        return [self._piece(frame) for frame in self._framer.push(hop, missed)]

    def _transforms(self, steering: Steering) -> NDArray[np.complex64]:
        """(beams, channels, N/2 + 1) weights."""
        beams, channels = len(steering.cos), len(steering.x_m)
        weights = np.empty((beams, channels, self.frame_length // 2 + 1), dtype=np.complex64)
        for beam, delays in zip(weights, steering.samples(slice(None), slice(None)), strict=True):
            beam[:] = delay_transforms(delays, self.frame_length, (0, weights.shape[2]), steering.weights)
        return weights

    def _piece(self, frame: Frame) -> SeriesPiece:
        spectra = fft.rfft(frame.samples, axis=1)
        spectra[~frame.used] = 0
        left = float(self._shading[frame.used].sum())
        spectra *= np.float32(1 / left if left > 0 else 0.0)
        half, quarter = self.frame_length // 2, self.frame_length // 4
        beams = np.empty((len(self._weights), half + 1), dtype=np.complex64)
        for beam_i, weights in enumerate(self._weights):
            np.multiply(weights, spectra, out=self._product)
            np.sum(self._product, axis=0, out=beams[beam_i])
        series = fft.irfft(beams, n=self.frame_length, axis=1)[:, quarter : quarter + half]
        t_ns = frame.t_ns + round(quarter * 1e9 / self._rate_hz)
        return SeriesPiece(frame.epoch, frame.first + quarter, t_ns, np.ascontiguousarray(series))
