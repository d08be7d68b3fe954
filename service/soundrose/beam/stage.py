"""core: one band: hops and notes in, maps out."""

from collections.abc import Callable
from dataclasses import dataclass
from math import floor, isfinite, pi
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from soundrose.array.budget import bin_range
from soundrose.array.geometry import Geometry, band_geometry, cos_grid
from soundrose.array.shading import shading_weights
from soundrose.beam.average import RollingWeights, density_scale, to_levels
from soundrose.beam.envelopes import EnvelopeBank, EnvelopeFrame
from soundrose.beam.frames import Frame, Framer
from soundrose.beam.kernels import Kernel, make_kernel
from soundrose.beam.masking import PulseShadow
from soundrose.beam.powers import PowerFrame, PowerReducer
from soundrose.beam.steering import Steering
from soundrose.errors import UsageError
from soundrose.feed.hop import Hop, Navigation, Note, Positions, Pulse
from soundrose.product.messages import MAP_QUANTITY, MAP_UNIT, MapProduct
from soundrose.product.reduce import reduce_power
from soundrose.settings_types import BandSettings, KernelChoice, Settings

__all__ = ["PENDING_LIMIT", "PHASE_TOLERANCE", "BandStage", "Sink"]

#: radians: a new sound speed or position that shifts no hydrophone's phase by more, at the top of the band, towards any
#: direction, against the steering in force, does not make new weights. 0.01 moves a beam by 1/300 of its width, and
#: lies at -46 dB of the main lobe.
PHASE_TOLERANCE = 0.01

#: notes that wait for a frame; beyond it the earliest gives way (those after it would have overruled it)
PENDING_LIMIT = 64

#: a band that has heard nothing for so many nepers keeps zero power: single precision slows down below 1e-38
_FADED = 1e-30


@dataclass(frozen=True, slots=True)
class Sink:
    """What contacts are given of each frame before averaging; free where there is no sink.

    deliver : called with each frame's reduced powers, then with its envelopes, as far as they are asked for.
    """

    deliver: Callable[[PowerFrame | EnvelopeFrame], None]
    powers: PowerReducer | None = None
    envelopes: EnvelopeBank | None = None


class BandStage:
    """Frames, beams, rolling average and maps of one band.

    Parameters
    ----------
    settings, band : as read; the band is one of the settings'.
    sink : for what goes to contacts; off by default.
    clock : nanoseconds, for `timings` alone; None (the default) leaves them empty.
    progress : called now and then while new weights are made, so that a watcher sees that work goes on.

    Attributes
    ----------
    maps : published so far.       refused : changes of steering that could not be (filters longer than the frame
    allows, a shading that the new line does not bear): the old steering goes on.
    timings : {"transform", "beams", "levels": ns so far}, if there is a clock.

    Raises
    ------
    UsageError : settings that cannot be steered (checked settings can).
    """

    def __init__(
        self, settings: Settings, band: BandSettings, *, sink: Sink | None = None,
        clock: Callable[[], int] | None = None, progress: Callable[[], object] = int,
    ) -> None:  # fmt: skip
        self._settings, self._band, self._sink, self._clock = settings, band, sink, clock
        self._progress = progress
        self._rate_hz = settings.feed.rate_hz
        self._framer = Framer(band.channels, band.frame, self._rate_hz)
        self._weights = RollingWeights(band.average_s, band.frame // 2, self._rate_hz)
        self._bins = bin_range(band.band_hz, band.frame, self._rate_hz)
        if self._bins[0] == self._bins[1]:
            raise UsageError(f"band {band.name!r} has no bin between {band.band_hz[0]} and {band.band_hz[1]} Hz")
        self._cos = cos_grid(band.beams)
        self._cone_deg = [float(v) for v in np.degrees(np.arccos(self._cos))]
        self._density = density_scale(np.arange(*self._bins), band.frame, self._rate_hz)
        self._pulses = PulseShadow()
        self._pending: list[Navigation | Positions] = []
        self._sound_speed = settings.water.sound_speed_m_s
        self._positions: NDArray[np.float64] | None = None
        self.maps = self.refused = 0
        self.timings: dict[str, int] = {}
        self._t_end = 0
        self._slot: int | None = None
        self._gap_shown: tuple[int, int] | None = None
        self._faded = 1.0
        geometry, steering = self._steering()
        self._geometry = geometry
        self._kernel = make_kernel(steering, band.kernel, progress)
        self._content = self._kernel.start()

    @property
    def kernel(self) -> str:
        """Name of the kernel in force: pairs or general."""
        return self._kernel.name

    @property
    def gaps(self) -> int:
        """Discontinuities within a run that this band has seen, missed hops among them."""
        return self._framer.gaps

    @property
    def unused_samples(self) -> int:
        """Sample instants that filled no frame of this band."""
        return self._framer.unused_samples

    @property
    def sound_speed_m_s(self) -> float:
        """The sound speed that the steering in force was made for."""
        return self._kernel.steering.sound_speed_m_s

    def note(self, note: Note) -> None:
        """Navigation and positions act from the first frame that begins at or after their time (late: from the next
        frame); later ones overrule earlier. A pulse counts on every frame to come that it lies on."""
        match note:
            case Pulse():
                self._pulses.add(note)
            case Navigation(values=values) if "sound_speed_m_s" not in values:
                pass
            case _:
                self._pending.append(note)
                self._pending.sort(key=lambda waiting: waiting.t_ns)
                del self._pending[:-PENDING_LIMIT]

    def push(self, hop: Hop, missed: int = 0, *, resumed: bool = False) -> list[MapProduct]:
        """Take one hop; the maps that it completes, oldest first.

        missed : hops not received just before it.  resumed : the first since this process or ingest was started anew.
        """
        frames = self._framer.push(hop, missed, resumed=resumed)
        return [product for frame in frames for product in self._take(frame)]

    def finish(self) -> None:
        """The run is over: no map is made of an incomplete frame, the next hop begins anew."""
        self._framer.finish()

    def _take(self, frame: Frame) -> list[MapProduct]:
        self._apply(frame.t_ns)
        length_ns = round(frame.length * 1e9 / self._rate_hz)
        t_end = frame.t_ns + length_ns
        self._t_end = t_end if frame.elapsed is None else max(t_end, self._t_end)
        step = self._weights.step(frame.elapsed, frame.adjacent)
        heard = frame.samples.shape[1] * int(frame.used.sum())
        masked = self._pulses.share(frame.t_ns, length_ns)
        self._weights.add_shares(frame.clipped / heard if heard else 0.0, masked)
        since = self._now()
        spectra = fft.rfft(frame.samples, axis=1)
        spectra[~frame.used] = 0
        since = self._lap("transform", since)
        left = float(self._kernel.steering.weights[frame.used].sum())
        self._accumulate(frame, spectra, step.gain / left**2 if left > 0 else 0.0, step.decay)
        since = self._lap("beams", since)
        if not self._due(frame):
            return []
        product = self._map(frame)
        self._lap("levels", since)
        self.maps += 1
        return [product]

    def _accumulate(self, frame: Frame, spectra: NDArray[np.complex64], gain: float, decay: float) -> None:
        self._faded = self._faded * decay if frame.silent else 1.0
        if self._faded < _FADED:
            self._content.fill(0.0)
        if self._sink is None:
            self._kernel.step(spectra, gain, decay, self._content)
            return
        power = np.empty_like(self._content) if self._sink.powers else None
        beams = np.empty(self._content.shape, dtype=np.complex64) if self._sink.envelopes else None
        self._kernel.step(spectra, gain, decay, self._content, power, beams)
        if self._sink.powers and power is not None:
            density = self._in_order(power, np.float32)
            density *= self._density * np.float32(self._kernel.scale / self._weights.gain)
            self._sink.deliver(self._sink.powers.frame(frame, self._t_end, density))
        if self._sink.envelopes and beams is not None:
            ordered = self._in_order(beams, np.complex64)
            ordered *= np.float32(1 / np.sqrt(self._weights.gain))
            self._sink.deliver(self._sink.envelopes.frame(frame, self._t_end, ordered))

    def _in_order(self, content: NDArray[Any], dtype: type[np.generic]) -> NDArray[Any]:
        """(beams, bins) by rising cone angle, of this dtype."""
        out = np.empty((self._band.beams, self._kernel.bins), dtype=dtype)
        self._kernel.in_order(content, out)
        return out

    def _due(self, frame: Frame) -> bool:
        """Every frame, or the first of each slot of 1 / map_rate_hz; slots count from sample 0 of the run."""
        if self._band.map_rate_hz is None:
            return True
        slot = floor(frame.first * self._band.map_rate_hz / self._rate_hz + 1e-6)
        due = frame.elapsed is None or slot != self._slot
        self._slot = slot
        return due

    def _map(self, frame: Frame) -> MapProduct:
        band, df_hz = self._band, self._rate_hz / self._band.frame
        power = self._in_order(self._content, np.float32)
        power *= self._density * np.float32(self._kernel.scale / self._weights.total)
        cone_deg, f0_hz = self._cone_deg, self._bins[0] * df_hz
        if band.map_beams is not None or band.map_bins is not None:
            reduced = reduce_power(power, cone_deg, f0_hz, df_hz, bins=band.map_bins, beams=band.map_beams)
            power = np.ascontiguousarray(reduced.values)
            cone_deg, f0_hz, df_hz = reduced.cone_deg, reduced.f0_hz, reduced.df_hz
        header = {
            "band": band.name, "run": frame.run, "t": frame.t_ns, "t_end": self._t_end, "span_s": float(band.average_s),
            "averages": self._weights.averages, "shape": list(power.shape), "cone_deg": cone_deg, "f0_hz": f0_hz,
            "df_hz": df_hz, "quantity": MAP_QUANTITY, "unit": MAP_UNIT, "limits": self._limits(frame),
        }  # fmt: skip
        return MapProduct(header, to_levels(power), frame.received_ns)

    def _limits(self, frame: Frame) -> dict[str, Any]:
        young = self._gap_shows(frame)
        spacing = self._geometry.spacing_m
        alias_hz = None if spacing is None else self.sound_speed_m_s / (2 * spacing)
        return {
            "channels_used": int(frame.used.sum()), "channels": len(frame.used), "gap": young,
            "clipped": self._weights.clipped, "masked": self._weights.masked,
            "alias_hz": alias_hz if alias_hz is not None and alias_hz <= self._band.band_hz[1] else None,
        }  # fmt: skip

    def _gap_shows(self, frame: Frame) -> bool:
        """The last gap is younger than 3 average_s, or no map after it has been published yet."""
        if frame.since_gap is None:
            return False
        gap = (frame.epoch, frame.first - frame.since_gap)
        fresh, self._gap_shown = gap != self._gap_shown, gap
        return fresh or frame.since_gap < 3 * self._band.average_s * self._rate_hz

    def _steering(self) -> tuple[Geometry, Steering]:
        """Geometry and steering for the sound speed and positions told last."""
        band, settings = self._band, self._settings
        geometry = band_geometry(settings, band, self._positions)
        weights = shading_weights(band.shading, geometry, band.shading_db)
        skew = [settings.calibration.delay_s[channel] for channel in band.channels]
        return geometry, Steering.about_middle(
            geometry, weights, skew, self._cos, self._sound_speed, self._rate_hz, band.frame, self._bins
        )

    def _apply(self, t_ns: int) -> None:
        """Let the notes act that are due at a frame beginning at t."""
        due = [note for note in self._pending if note.t_ns <= t_ns]
        if not due:
            return
        del self._pending[: len(due)]
        for note in due:
            if isinstance(note, Positions):
                self._positions = note.positions_m
            else:
                speed = float(note.values["sound_speed_m_s"])
                self._sound_speed = speed if isfinite(speed) and speed > 0 else self._sound_speed
        try:
            with np.errstate(over="ignore", invalid="ignore"):  # an absurd sound speed ends as a refusal below
                geometry, steering = self._steering()
                if not self._shifts(steering):
                    return
                kernel = self._make(steering)
        except UsageError:
            self.refused += 1
            return
        self._exchange(geometry, kernel)

    def _shifts(self, steering: Steering) -> bool:
        """True where some phase differs from that in force by more than `PHASE_TOLERANCE`."""
        old = self._kernel.steering
        shift_s = np.abs(steering.x_m / steering.sound_speed_m_s - old.x_m / old.sound_speed_m_s).max()
        return not 2 * pi * self._band.band_hz[1] * float(shift_s) <= PHASE_TOLERANCE

    def _make(self, steering: Steering) -> Kernel:
        """A line that is no longer symmetric takes the general kernel, whatever the settings ask for."""
        choice: KernelChoice = "general" if self._band.kernel == "general" else "auto"
        return make_kernel(steering, choice, self._progress)

    def _exchange(self, geometry: Geometry, kernel: Kernel) -> None:
        """New weights from here on; the average goes on."""
        content = kernel.from_order(self._in_order(self._content, np.float32))
        self._geometry, self._kernel, self._content = geometry, kernel, content

    def _now(self) -> int:
        return self._clock() if self._clock else 0

    def _lap(self, stage: str, since: int) -> int:
        """Add the time since then to a stage's timing; the time now."""
        if self._clock is None:
            return 0
        now = self._clock()
        self.timings[stage] = self.timings.get(stage, 0) + now - since
        return now
