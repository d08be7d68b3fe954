"""core: sources as each hydrophone hears them: delays that vary smoothly, spreading, absorption, bounces.

For each way of the sound the source's waveform is first laid on the time axis of the array origin, sample by sample
with the exact delay there: that is where Doppler comes from. What is left is the small difference to each hydrophone,
which hardly changes: it is applied at *knots*, some tens of milliseconds apart, to the spectrum of a frame around each,
as a phase, with the exact distance to every hydrophone, spherical spreading and the absorption along the way. Frames
of neighbouring knots are faded into each other. With a difference that changes by e samples from knot to knot the
fade leaves an error of at most (2 pi f e / rate)² / 8 of the amplitude.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import scipy.fft
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from soundrose.scene.place import Line, arrivals, bounces_up_to, hydrophone_delays
from soundrose.scene.scene_types import Emitter, Water
from soundrose.scene.sea import ainslie_mccolm, francois_garrison
from soundrose.scene.waveforms import WaveformBuffer, band_edge, waveform

__all__ = ["KNOTS", "Renderer", "Steps", "absorption_db_km", "knot_samples"]

Floats = NDArray[np.float64]
KNOTS: Final = 4  # in a chunk
TAPS: Final = 16
PHASES: Final = 16384  # of the interpolation table: rounding to one leaves -87 dB at 0.45 of the array's rate
BETA: Final = 12.0
GUARD: Final = 96  # samples that a delay's impulse response is allowed on each side
FINE: Final = 32  # bins to a coarse step of phase


def knot_samples(rate_hz: float) -> int:
    """Samples from knot to knot: a power of two, about 32 ms."""
    return int(2 ** round(np.log2(0.032 * rate_hz)))


def absorption_db_km(water: Water, frequency_hz: Floats, depth_m: float) -> Floats:
    """By the formula that the scene names, at one depth for the whole way."""
    if water.absorption == "none":
        return np.zeros_like(frequency_hz)
    formula = francois_garrison if water.absorption == "francois-garrison" else ainslie_mccolm
    return formula(frequency_hz, water.temperature_c, water.salinity, depth_m, water.ph)


def _table() -> NDArray[np.float32]:
    """(PHASES + 1, TAPS) kernels: sinc under a Kaiser window, for signals below a quarter of their rate."""
    x = np.arange(TAPS) - (TAPS // 2 - 1) - np.arange(PHASES + 1)[:, None] / PHASES
    window = np.i0(BETA * np.sqrt(np.clip(1 - (x / (TAPS / 2)) ** 2, 0, None))) / np.i0(BETA)
    kernels = np.sinc(x) * window
    whole: NDArray[np.float32] = (kernels / kernels.sum(axis=1, keepdims=True)).astype(np.float32)
    return whole


@dataclass(frozen=True, slots=True)
class Steps:
    """How time is cut. step : samples from knot to knot.  guard : samples beside a frame.  size : of a transform.
    rate_hz : true rate.  late_s : (channels,) by which each channel is sampled late."""

    step: int
    guard: int
    size: int
    rate_hz: float
    late_s: Floats

    @classmethod
    def of(cls, rate_hz: float, true_rate_hz: float, reach_s: float, late_s: Floats) -> "Steps":
        """reach_s : the longest difference in time between a hydrophone and the origin."""
        step = knot_samples(rate_hz)
        guard = int(np.ceil(1.02 * reach_s * rate_hz)) + GUARD
        return cls(step, guard, scipy.fft.next_fast_len(2 * (step + guard), real=True), true_rate_hz, late_s)

    @property
    def margin(self) -> int:
        """Knots that hold the guard."""
        return -(-self.guard // self.step)

    @property
    def frequency_hz(self) -> Floats:
        return np.arange(self.size // 2 + 1) * self.rate_hz / self.size


class _Source:
    """One emitter: its waveform on the time axis of the array origin, for each way of its sound."""

    def __init__(self, emitter: Emitter, line: Line, water: Water, steps: Steps, seed: tuple[int, ...], rate_hz: float):
        self.emitter, self._line, self._water, self._steps = emitter, line, water, steps
        self._buffer, self._wave_rate = WaveformBuffer(waveform(emitter.sound, rate_hz, seed)), 2 * rate_hz
        bounces = bounces_up_to(emitter.bounces)
        self._factor = np.array([bounce.factor(water.bottom_loss_db) for bounce in bounces])
        mean_depth = (emitter.depth_m + float(line.origin(np.zeros(1))[0, 2])) / 2
        self._neper_m = absorption_db_km(water, steps.frequency_hz, mean_depth) / 1000 * np.log(10) / 20
        # nothing at half the rate, where a delay by a fraction of a sample would ring from the ends of a frame inwards
        self._edge = band_edge(steps.frequency_hz, steps.rate_hz)
        self._held = np.zeros((len(bounces), 0), np.float32)
        u = np.arange(steps.step) / steps.step
        self._cubic = np.stack(  # Lagrange, knots -1, 0, 1, 2
            [
                -u * (u - 1) * (u - 2) / 6,
                (u + 1) * (u - 1) * (u - 2) / 2,
                -(u + 1) * u * (u - 2) / 2,
                (u + 1) * u * (u - 1) / 6,
            ]
        )  # fmt: skip

    def frames(self, knot: int) -> NDArray[np.complex64] | None:
        """(ways, KNOTS, bins) spectra around knots `knot` on; None while nothing is heard. Called in order."""
        steps = self._steps
        behind, ahead = 1 + steps.margin, KNOTS + steps.margin
        if not self._held.shape[1]:
            self._held = self._centre(knot - behind, behind + ahead)
        else:
            kept = self._held[:, KNOTS * steps.step :]
            self._held = np.concatenate([kept, self._centre(knot + ahead - KNOTS, KNOTS)], axis=1)
        if not self._held.any():
            return None
        skip = (behind - 1) * steps.step - steps.guard
        windows = sliding_window_view(self._held, steps.size, axis=1)[:, skip :: steps.step][:, :KNOTS]
        spectra: NDArray[np.complex64] = scipy.fft.rfft(windows, axis=2)
        return spectra

    def _centre(self, knot: int, intervals: int) -> NDArray[np.float32]:
        """(ways, intervals * step) what the array origin hears from `knot` on, before spreading and absorption."""
        steps = self._steps
        knots = np.arange(knot - 1, knot + intervals + 2)
        delay = arrivals(self.emitter, self._line, self._water, knots * steps.step / steps.rate_hz).delay_s
        fine = np.einsum("kwi,kn->win", [delay[:, i : i + intervals] for i in range(4)], self._cubic)
        t = np.arange(knot * steps.step, (knot + intervals) * steps.step) / steps.rate_hz
        place = (t - fine.reshape(len(delay), -1)) * self._wave_rate
        whole = np.floor(place).astype(np.int64)
        phase = np.rint((place - whole) * PHASES).astype(np.int64)
        whole -= TAPS // 2 - 1
        samples, first = self._buffer.hold(int(whole.min()), int(whole.max()) + TAPS)
        windows = sliding_window_view(samples, TAPS)
        made = [np.einsum("nt,nt->n", windows[at - first], _TABLE[part]) for at, part in zip(whole, phase, strict=True)]
        return np.stack(made)

    def weights(self, knot: int) -> tuple[Floats, Floats, NDArray[np.float32]]:
        """At KNOTS knots from `knot` on: delay against the origin, samples, and amplitude (ways, KNOTS, channels);
        absorption (ways, KNOTS, bins)."""
        t = np.arange(knot, knot + KNOTS) * self._steps.step / self._steps.rate_hz
        arrival = arrivals(self.emitter, self._line, self._water, t)
        later = hydrophone_delays(arrival, self._line, self._water, t)
        shift = (later - arrival.delay_s[..., None]) / (1 - arrival.stretch[..., None]) - self._steps.late_s
        distance = np.maximum(later * self._water.sound_speed_m_s, 1.0)
        loss = (self._edge * np.exp(-arrival.distance_m[..., None] * self._neper_m)).astype(np.float32)
        return shift * self._steps.rate_hz, self._factor[:, None, None] / distance, loss


class Renderer:
    """Every emitter at every hydrophone, chunk after chunk of KNOTS * step samples, from time 0 on."""

    def __init__(
        self,
        emitters: Sequence[tuple[Emitter, tuple[int, ...]]],
        line: Line,
        water: Water,
        steps: Steps,
        rate_hz: float,
    ) -> None:
        self._steps, self._channels = steps, line.channels
        self._sources = [_Source(emitter, line, water, steps, seed, rate_hz) for emitter, seed in emitters]
        bins = steps.size // 2 + 1
        self._coarse = -(-bins // FINE)
        self._rise = (np.arange(steps.step, dtype=np.float32) / np.float32(steps.step))[None, None]
        self._tail = np.zeros((line.channels, steps.step), np.float32)
        self._knot = 1 - KNOTS
        if self._sources:
            self.chunk()  # up to time 0: only its tail is wanted

    def chunk(self) -> NDArray[np.float32]:
        """(channels, KNOTS * step) micropascal."""
        step, guard = self._steps.step, self._steps.guard
        spectra = np.zeros((KNOTS, self._channels, self._coarse, FINE), np.complex64)
        heard = [self._add(source, spectra) for source in self._sources]
        self._knot += KNOTS
        bins = self._steps.size // 2 + 1
        if not any(heard):
            made = np.zeros((self._channels, KNOTS, 2 * step), np.float32)
        else:
            flat = spectra.reshape(KNOTS, self._channels, -1)[:, :, :bins]
            frames = scipy.fft.irfft(flat, self._steps.size, axis=2)[:, :, guard : guard + 2 * step]
            made = np.ascontiguousarray(frames.transpose(1, 0, 2))
        out = made[:, :, :step] * self._rise
        falling = np.concatenate([self._tail[:, None], made[:, :-1, step:]], axis=1)
        out += falling * (1 - self._rise)
        self._tail = made[:, -1, step:].copy()
        return out.reshape(self._channels, -1)

    def _add(self, source: _Source, spectra: NDArray[np.complex64]) -> bool:
        frames = source.frames(self._knot)
        if frames is None:
            return False
        shift, amplitude, loss = source.weights(self._knot)
        frames = frames * loss
        cycles = -shift / self._steps.size
        coarse = _turn(cycles * FINE, self._coarse) * amplitude[..., None].astype(np.float32)
        fine = _turn(cycles, FINE)
        missing = self._coarse * FINE - frames.shape[2]
        padded = np.pad(frames, ((0, 0), (0, 0), (0, missing))).reshape(*frames.shape[:2], 1, self._coarse, FINE)
        for way in range(len(frames)):
            for knot in range(KNOTS):
                part = coarse[way, knot][:, :, None] * padded[way, knot]
                part *= fine[way, knot][:, None]
                spectra[knot] += part
        return True


def _turn(cycles: Floats, steps: int) -> NDArray[np.complex64]:
    """(..., steps) exp(2 pi i k cycles), k from 0 on."""
    turns = cycles[..., None] * np.arange(steps)
    angle = (2 * np.pi * (turns - np.rint(turns))).astype(np.float32)
    made = np.empty(angle.shape, np.complex64)
    made.real, made.imag = np.cos(angle), np.sin(angle)
    return made


_TABLE: Final = _table()
