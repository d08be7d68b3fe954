"""What the maps of a scene must show, worked out without the scene's renderer and without the service's beams.

For each frame of a map: the very waveform of each source, laid at the exact delays to the array origin by plain
interpolation, transformed, and weighted with the closed form of each beam (shading, exact delay and distance of every
hydrophone, absorption, bounces). Noise enters as its expectation, w^H C w, from its covariance. Frames are averaged
with the map's weights.
"""

from dataclasses import dataclass

import numpy as np
from scipy.signal import resample_poly

from soundrose.array.geometry import band_geometry, cos_grid
from soundrose.array.shading import shading_weights
from soundrose.scene.engine import emitter_seed
from soundrose.scene.faults import Faults
from soundrose.scene.field import ambient_covariance, flow_covariance
from soundrose.scene.place import Line, arrivals, bounces_up_to, hydrophone_delays
from soundrose.scene.rendering import absorption_db_km
from soundrose.scene.waveforms import WaveformBuffer, waveform

FINER = 8  # times the waveform's rate: plain interpolation then leaves -60 dB at a quarter of the array's rate
MARGIN = 32  # samples of the waveform on each side that the finer one may spoil


@dataclass
class Sounds:
    """A rolling average of (beams, bins) power of each source, and its weight."""

    power: dict
    bottom: dict  # the part of it that has been to the bottom, by itself
    total: float = 0.0
    end: int | None = None


class ExpectedBand:
    """Expected maps of one band.

    add(end, channels_used) after each map, in order: the index after its frame's last sample.
    """

    def __init__(self, scene, settings, band):
        self.scene, self.settings, self.band = scene, settings, band
        self.rate, self.frame = settings.feed.rate_hz, band.frame
        geometry = band_geometry(settings, band)
        self.channels, self.x = list(band.channels), geometry.x_m
        self.weights = shading_weights(band.shading, geometry, band.shading_db)
        self.cos = cos_grid(band.beams)
        low, high = band.band_hz
        self.bins = np.arange(int(np.ceil(low * self.frame / self.rate)), int(high * self.frame / self.rate) + 1)
        self.f = self.bins * self.rate / self.frame
        self.line = Line(scene.own, np.array(scene.array.positions_m))
        self.steer = np.exp(
            -2j * np.pi * self.f[:, None, None] * self.cos[:, None] * self.x / settings.water.sound_speed_m_s
        ).astype(np.complex64)
        self.taper = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(self.frame) / self.frame)
        self.density = 2 / (self.rate * (self.taper**2).sum())
        self.buffers = {
            e.name: WaveformBuffer(waveform(e.sound, scene.rate_hz, emitter_seed(scene, i)))
            for i, e in enumerate(scene.emitters)
        }
        self.faults = Faults(scene.faults, scene.true_rate_hz, scene.seed)
        zeros = [{e.name: np.zeros((len(self.cos), len(self.f))) for e in scene.emitters} for _ in range(2)]
        self.average = Sounds(*zeros)
        self.noises = {}
        self.noise_sum = np.zeros((len(self.cos), len(self.f)))

    def add(self, end, channels_used):
        a = self.average
        hop = self.frame // 2
        gain = 1.0 if self.band.average_s == 0 else 1 - np.exp(-hop / self.rate / self.band.average_s)
        elapsed = None if a.end is None else (end - a.end) / self.rate
        decay = 0.0 if elapsed is None or self.band.average_s == 0 else np.exp(-elapsed / self.band.average_s)
        a.total, a.end = decay * a.total + gain, end
        there, ears = self._ears(end - self.frame, channels_used)
        rows = [row for e in self.scene.emitters for row in self._ways(e, end - self.frame, ears)]
        heard = np.stack([row[2] for row in rows], axis=2).astype(np.complex64) if rows else None
        beams = [] if heard is None else np.moveaxis(self.steer @ heard, 2, 0)  # (ways, bins, beams), in one pass
        for emitter in self.scene.emitters:
            for kept, only_bottom in ((a.power, False), (a.bottom, True)):
                mine = [y for y, (name, bottom, _) in zip(beams, rows, strict=True)
                        if name == emitter.name and (bottom or not only_bottom)]  # fmt: skip
                power = (np.abs(sum(mine)) ** 2).T * self.density if mine else 0.0
                kept[emitter.name] = decay * kept[emitter.name] + gain * power
        self.noise_sum = decay * self.noise_sum + gain * self._noise(there)

    def sources(self):
        """{name: (beams, bins) power density}"""
        return {name: power / self.average.total for name, power in self.average.power.items()}

    def bottom(self):
        """The same of what has been to the bottom."""
        return {name: power / self.average.total for name, power in self.average.bottom.items()}

    def noise(self):
        return self.noise_sum / self.average.total

    def _ears(self, first, channels_used):
        """Weights of the channels in this frame: what a fault leaves of each, and the service's rescaling."""
        faults = self.faults.apply(np.ones((self.scene.array.channels, self.frame), np.float32), first)[self.channels]
        left = (faults * self.taper**2).sum(axis=1) / (self.taper**2).sum()
        dead = np.flatnonzero(left == 0)
        weights = self.weights * np.sqrt(np.maximum(left, 0))
        if channels_used < len(self.channels) and len(dead):
            weights = weights / (1 - self.weights[dead].sum())
        return tuple(np.round(weights, 4)), weights

    def _ways(self, emitter, first, weights):
        """[(name, by the bottom, (bins, channels) weighted spectra)] of one frame, for each way that is heard."""
        scene, water = self.scene, self.scene.water
        t = (first + np.arange(self.frame)) / scene.true_rate_hz
        few = t[:: self.frame // 8]
        delay = arrivals(emitter, self.line, water, few).delay_s
        middle = t[self.frame // 2 : self.frame // 2 + 1]
        arrival = arrivals(emitter, self.line, water, middle)
        later = hydrophone_delays(arrival, self.line, water, middle)[:, 0, self.channels]
        rows = []
        for way, bounce in enumerate(bounces_up_to(emitter.bounces)):
            curve = np.polynomial.Polynomial.fit(few, delay[way], 4)
            spectrum = self._spectrum(emitter, t - curve(t))
            if spectrum is None:
                continue
            loss = absorption_db_km(water, self.f, (emitter.depth_m + scene.own.array_depth_m) / 2)
            whole = spectrum * 10 ** (-loss * arrival.distance_m[way, 0] / 1000 / 20)
            gains = bounce.factor(water.bottom_loss_db) / (later[way] * water.sound_speed_m_s)
            shift = (later[way] - arrival.delay_s[way, 0]) / (1 - arrival.stretch[way, 0])
            heard = weights * gains * np.exp(-2j * np.pi * self.f[:, None] * shift)
            rows.append((emitter.name, bounce.bottom > 0, whole[:, None] * heard))
        return rows

    def _spectrum(self, emitter, emitted_s):
        """(bins,) transform of the tapered waveform at these times of emission, for a time axis at the array's rate."""
        rate = 2 * self.scene.rate_hz
        first = int(np.floor(emitted_s[0] * rate)) - MARGIN
        end = int(np.ceil(emitted_s[-1] * rate)) + MARGIN
        early = first - int(2 * rate)  # what the longest of the other ways may still ask for
        samples, begin = self.buffers[emitter.name].hold(early, end)
        part = samples[first - begin : end - begin].astype(float)
        if not part.any():
            return None
        fine = resample_poly(part, FINER, 1)
        heard = np.interp((emitted_s * rate - first) * FINER, np.arange(len(fine)), fine)
        return np.fft.rfft(heard * self.taper)[self.bins]

    def _noise(self, key):
        if key not in self.noises:
            positions = np.array(self.scene.array.positions_m)[self.channels]
            covariance = ambient_covariance(
                self.scene.ambient, self.f, positions, self.scene.water.sound_speed_m_s
            ).astype(complex)
            if self.scene.flow is not None:
                speed = self.scene.own.way.speed_m_s
                covariance += flow_covariance(self.scene.flow, speed, self.f, positions[:, 0])
            w = np.array(key) * self.steer
            self.noises[key] = np.einsum("fbm,fmn,fbn->bf", w, covariance, w.conj(), optimize=True).real
        return self.noises[key]
