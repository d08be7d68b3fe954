"""core: a scene as frozen values, checked once when its file was read: the sea, the array, what sounds and fails."""

from dataclasses import dataclass, field
from typing import Literal, TypeAlias

from soundrose.feed.wire import SampleType
from soundrose.scene.sea import Absorption
from soundrose.scene.track import Way
from soundrose.settings_types import ArraySettings, CalibrationSettings

__all__ = [
    "Ambient",
    "AmbientShape",
    "Clicks",
    "Emitter",
    "Events",
    "Fault",
    "FaultState",
    "Flow",
    "Gap",
    "Hum",
    "Motor",
    "NavigationSending",
    "Own",
    "Pulse",
    "Range",
    "Reverberation",
    "Scene",
    "Schedule",
    "Shape",
    "Shot",
    "Sound",
    "Strum",
    "Sweep",
    "Water",
]  # fmt: skip

Range = tuple[float, float]
AmbientShape = Literal["isotropic", "surface"]
FaultState = Literal["dead", "noisy", "clipped", "intermittent", "reversed", "exchanged"]


@dataclass(frozen=True, slots=True)
class Water:
    """depth_m, to the bottom; bottom_loss_db, at each bounce; absorption formula and what it needs."""

    depth_m: float = 200.0
    sound_speed_m_s: float = 1490.0
    temperature_c: float = 8.0
    salinity: float = 35.0
    ph: float = 8.0
    absorption: Absorption = "francois-garrison"
    bottom_loss_db: float = 8.0


@dataclass(frozen=True, slots=True)
class Ambient:
    """The sea's own noise and that of each hydrophone.

    shape : of the field.  flat_db : one level at all frequencies instead of the published spectrum, dB re 1 µPa²/Hz.
    electronic_db : spatially white noise, dB re 1 µPa²/Hz, or None.
    """

    shape: AmbientShape = "isotropic"
    shipping: float = 0.5
    wind_m_s: float = 6.0
    flat_db: float | None = None
    electronic_db: float | None = None
    enabled: bool = True


@dataclass(frozen=True, slots=True)
class Flow:
    """Pressure of the turbulent layer along the streamer: level_db at 10 Hz, falling by slope_db each decade, carried
    along at `convection` times the speed through the water."""

    level_db: float
    slope_db: float = 30.0
    convection: float = 0.8


@dataclass(frozen=True, slots=True)
class Sweep:
    """A sweep, or a tone where both ends are one frequency. level_db : mean square over its length, dB re 1 µPa m."""

    level_db: float
    length_s: float
    from_hz: float
    to_hz: float


@dataclass(frozen=True, slots=True)
class Pulse:
    """A tone under a bell of six standard deviations. level_db : peak, dB re 1 µPa m."""

    level_db: float
    length_s: float
    frequency_hz: float


@dataclass(frozen=True, slots=True)
class Clicks:
    """A train of clicks, each three cycles or so. level_db : peak, dB re 1 µPa m.  gap_s : from click to click."""

    level_db: float
    count: int
    gap_s: float
    frequency_hz: float

    @property
    def length_s(self) -> float:
        return self.count * self.gap_s


@dataclass(frozen=True, slots=True)
class Shot:
    """A seismic source: a first pulse and three bubbles, each weaker. level_db : peak, dB re 1 µPa m."""

    level_db: float
    frequency_hz: float
    bubble_s: float

    @property
    def length_s(self) -> float:
        return 3 / self.frequency_hz + 3 * self.bubble_s


Shape: TypeAlias = Sweep | Pulse | Clicks | Shot


@dataclass(frozen=True, slots=True)
class Schedule:
    """When a source sounds: first at first_s, then after each interval; in bouts with silences if those are given."""

    first_s: float
    interval_s: Range
    bout_s: Range | None = None
    silence_s: Range | None = None


@dataclass(frozen=True, slots=True)
class Motor:
    """A ship's noise: level_db at 1 kHz, dB re 1 µPa² m²/Hz, flat below corner_hz and falling by slope_db each decade
    above; beaten at the blade rate by `modulation` (0..1); tones (Hz, dB re 1 µPa m)."""

    level_db: float
    corner_hz: float = 80.0
    slope_db: float = 20.0
    blade_hz: float = 8.0
    modulation: float = 0.0
    tones: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True, slots=True)
class Events:
    """One of `shapes` at each time of the schedule."""

    schedule: Schedule
    shapes: tuple[Shape, ...]


Sound: TypeAlias = Motor | Events


@dataclass(frozen=True, slots=True)
class Emitter:
    """Something that sounds. way, depth_m : where it is.  bounces : most reflections that are heard.  behind_m : place
    on the way behind its reference.  announce : name of a source whose pulses are told to the service, or None."""

    name: str
    kind: str
    way: Way
    depth_m: float
    sound: Sound
    bounces: int = 0
    behind_m: float = 0.0
    announce: str | None = None


@dataclass(frozen=True, slots=True)
class Reverberation:
    """What an own shot leaves in the sea: level_db at 100 Hz as it passes, dB re 1 µPa²/Hz, falling by slope_db each
    decade of frequency and by decay_db each second."""

    source: str
    level_db: float
    slope_db: float = 20.0
    decay_db: float = 10.0


@dataclass(frozen=True, slots=True)
class Hum:
    """Mains: the same on all channels. tones : (Hz, dB re 1 µPa as it reads)."""

    tones: tuple[tuple[float, float], ...]


@dataclass(frozen=True, slots=True)
class Strum:
    """Waves that run aft along the line from its forward end. tones : (Hz, dB re 1 µPa as it reads, at the forward
    end).  wave_speed_m_s.  decay_m : length over which amplitude falls to 1/e."""

    wave_speed_m_s: float
    decay_m: float
    tones: tuple[tuple[float, float], ...]


@dataclass(frozen=True, slots=True)
class Fault:
    """What ails a hydrophone between two times. other : the one it is exchanged with.  amount : spectral density of
    what a noisy one adds, dB re 1 µPa²/Hz; gain in dB of a clipped one; share of time of an intermittent one."""

    channel: int
    state: FaultState
    from_s: float = 0.0
    to_s: float = float("inf")
    other: int | None = None
    amount: float = 0.0


@dataclass(frozen=True, slots=True)
class Gap:
    """Samples that are not sent."""

    at_s: float
    length_s: float


@dataclass(frozen=True, slots=True)
class NavigationSending:
    """What is sent about place and shape, and how well it is known. 0 s: not sent."""

    every_s: float = 1.0
    heading_sigma_deg: float = 0.0
    position_sigma_m: float = 0.0
    depth_sigma_m: float = 0.0
    positions_every_s: float = 0.0


@dataclass(frozen=True, slots=True)
class Own:
    """Own ship and the array that it tows along its way.

    layback_m : along the way from the ship's reference to the array origin.  array_depth_m : of the origin.
    sag_m : how much the middle hangs below the ends.  pitch_deg : forward end up.
    """

    way: Way
    latitude_deg: float = 0.0
    longitude_deg: float = 0.0
    layback_m: float = 300.0
    array_depth_m: float = 10.0
    sag_m: float = 0.0
    pitch_deg: float = 0.0


@dataclass(frozen=True, slots=True)
class Scene:
    """Everything. type : of the samples sent.  drift_ppm : by how much the converter's clock runs fast."""

    name: str
    seed: int
    array: ArraySettings
    calibration: CalibrationSettings
    rate_hz: float
    type: SampleType
    water: Water
    own: Own
    ambient: Ambient = Ambient()
    emitters: tuple[Emitter, ...] = ()
    flow: Flow | None = None
    reverberation: Reverberation | None = None
    hum: Hum | None = None
    strum: Strum | None = None
    faults: tuple[Fault, ...] = ()
    gaps: tuple[Gap, ...] = ()
    drift_ppm: float = 0.0
    navigation: NavigationSending = field(default_factory=NavigationSending)

    @property
    def true_rate_hz(self) -> float:
        """Samples in a true second."""
        return self.rate_hz * (1 + 1e-6 * self.drift_ppm)
