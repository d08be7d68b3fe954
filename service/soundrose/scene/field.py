"""core: noise that fills the sea and the array, made from its covariance between hydrophones at each frequency."""

import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy.special import j1

from soundrose.scene.scene_types import Ambient, AmbientShape, Flow, Reverberation
from soundrose.scene.sea import ambient_db
from soundrose.scene.spectral_noise import BEFORE, join_frames, sine_taper
from soundrose.scene.waveforms import band_edge

__all__ = ["FieldNoise", "ambient_covariance", "coherence", "flow_covariance", "reverberation_covariance"]

Floats = NDArray[np.float64]
JITTER = 1e-9  # of the mean square, added to each hydrophone: keeps the factor real at frequencies where all agree
CONVECTED_LOSS = 0.115  # of the coherence along a convected pattern, per radian of its phase (Corcos)
LEAST_FLOW_HZ = 2.0  # below it the flow's level stays what it is there


def coherence(shape: AmbientShape, k_rad_m: Floats, positions_m: Floats) -> Floats:
    """(bins, channels, channels) coherence between hydrophones.

    shape : "isotropic", sin(kd)/(kd), or "surface", 2 J1(kd)/(kd): sources near the surface, each a vertical dipole,
    for hydrophones at one depth (z is not looked at).  k_rad_m : (bins,) wavenumbers.  positions_m : (channels, 3).

    References
    ----------
    Cron and Sherman 1962, JASA 34(11) 1732-1736 (volume noise; surface noise with amplitude cos^m, here m = 1).
    """
    places = positions_m if shape == "isotropic" else positions_m[:, :2]
    apart = np.linalg.norm(places[:, None] - places[None], axis=-1)
    kd = k_rad_m[:, None, None] * apart
    if shape == "isotropic":
        return np.asarray(np.sinc(kd / np.pi))
    safe = np.where(kd > 1e-6, kd, 1.0)
    return np.asarray(np.where(kd > 1e-6, 2 * j1(safe) / safe, 1.0))


def ambient_covariance(
    ambient: Ambient, frequency_hz: Floats, positions_m: Floats, sound_speed_m_s: float
) -> NDArray[np.float64]:
    """(bins, channels, channels) µPa²/Hz: the sea, and each hydrophone's own white noise."""
    total = np.zeros((len(frequency_hz), len(positions_m), len(positions_m)))
    if ambient.enabled:
        flat = ambient.flat_db
        level = ambient_db(frequency_hz, ambient.shipping, ambient.wind_m_s) if flat is None else np.float64(flat)
        density = np.broadcast_to(10 ** (level / 10), frequency_hz.shape)
        shape = coherence(ambient.shape, 2 * np.pi * frequency_hz / sound_speed_m_s, positions_m)
        total += density[:, None, None] * shape
    if ambient.electronic_db is not None:
        total += 10 ** (ambient.electronic_db / 10) * np.eye(len(positions_m))
    return total


def flow_covariance(flow: Flow, speed_m_s: float, frequency_hz: Floats, x_m: Floats) -> NDArray[np.complex128]:
    """(bins, channels, channels) µPa²/Hz: a turbulent pattern that drifts aft along the line and fades as it goes.

    References
    ----------
    Corcos 1963, JASA 35(2) 192-199: exp(-a w d / U) exp(i w d / U), U the convection speed, d along the flow.
    """
    convection = flow.convection * speed_m_s
    omega = 2 * np.pi * frequency_hz[:, None, None]
    along = (x_m[:, None] - x_m[None]) / convection  # the forward hydrophone hears it first
    level = flow.level_db - flow.slope_db * np.log10(np.maximum(frequency_hz, LEAST_FLOW_HZ) / 10)
    shape = np.exp(-CONVECTED_LOSS * omega * np.abs(along) + 1j * omega * along)
    return np.asarray(10 ** (level[:, None, None] / 10) * shape)


def reverberation_covariance(
    reverberation: Reverberation, frequency_hz: Floats, positions_m: Floats, sound_speed_m_s: float
) -> NDArray[np.float64]:
    """(bins, channels, channels) µPa²/Hz as the shot passes: from everywhere alike."""
    level = reverberation.level_db - reverberation.slope_db * np.log10(np.maximum(frequency_hz, 10) / 100)
    shape = coherence("isotropic", 2 * np.pi * frequency_hz / sound_speed_m_s, positions_m)
    return np.asarray(10 ** (level[:, None, None] / 10) * shape)


class FieldNoise:
    """Gaussian noise of a given covariance, in hops that follow each other.

    covariance : (bins, channels, channels) one-sided, µPa²/Hz, Hermitian, at k rate / (2 (bins - 1)); E x_m conj(x_n).
    late_s : (channels,) by which each channel is sampled late.  seed : with a hop's number it decides everything.
    """

    def __init__(
        self, covariance: NDArray[np.complex128] | Floats, rate_hz: float, late_s: Floats, seed: tuple[int, ...]
    ):
        bins, self.channels = covariance.shape[:2]
        self.hop = bins - 1
        self._seed, self._taper = seed, sine_taper(2 * self.hop)
        frequency = np.arange(bins) * rate_hz / (2 * self.hop)
        self._factor = _factor(covariance)
        if late_s.any():
            self._factor = self._factor * np.exp(2j * np.pi * frequency[:, None] * late_s)[..., None]
        scale = np.sqrt(rate_hz * self.hop / 2) * band_edge(frequency, rate_hz)
        scale[0] = scale[-1] = 0
        single = np.complex64 if np.iscomplexobj(self._factor) else np.float32
        self._factor = (self._factor * scale[:, None, None]).astype(single)
        self._kept: tuple[int, NDArray[np.float32]] | None = None

    def make(self, number: int, hops: int) -> NDArray[np.float32]:
        """(channels, hops * hop) from hop `number` on; cheapest in rising order."""
        if self._kept is None or self._kept[0] != number:
            self._kept = (number, self._frames(number, 1)[:, 0, self.hop :])
        made, tail = join_frames(self._frames(number + 1, hops), self._kept[1])
        self._kept = (number + hops, tail)
        return made

    def _frames(self, number: int, hops: int) -> NDArray[np.float32]:
        """(channels, hops, 2 * hop)"""
        random = np.empty((hops, self.hop + 1, self.channels, 2), np.float32)
        for i in range(hops):
            generator = np.random.default_rng([*self._seed, number + i + BEFORE])
            generator.standard_normal(dtype=np.float32, out=random[i])
        columns = np.ascontiguousarray(random.transpose(1, 2, 0, 3))  # (bins, channels, hops, re/im)
        if np.iscomplexobj(self._factor):
            spectra = self._factor @ columns.view(np.complex64)[..., 0]
        else:
            flat = self._factor @ columns.reshape(*columns.shape[:2], -1)
            spectra = np.ascontiguousarray(flat).view(np.complex64)
        frames = scipy.fft.irfft(np.ascontiguousarray(spectra.transpose(1, 2, 0)), 2 * self.hop, axis=2)
        tapered: NDArray[np.float32] = frames * self._taper
        return tapered


def _factor(covariance: NDArray[np.complex128] | Floats) -> NDArray[np.complex128] | Floats:
    """(bins, channels, channels) L with L L^H = covariance."""
    power = np.einsum("fmm->f", covariance).real / covariance.shape[1]
    least = np.maximum(JITTER * power, 1e-30)
    return np.asarray(np.linalg.cholesky(covariance + least[:, None, None] * np.eye(covariance.shape[1])))
