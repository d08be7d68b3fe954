"""core: the settings as frozen values, checked once when the file was read; what processes and stages are given."""

from dataclasses import asdict, dataclass
from typing import Any, Literal

__all__ = [
    "ArraySettings",
    "BandSettings",
    "CalibrationSettings",
    "DetectionSettings",
    "FeedSettings",
    "KernelChoice",
    "LogFormat",
    "LogSettings",
    "Overload",
    "Place",
    "PublishSettings",
    "ServeSettings",
    "Settings",
    "ShadingName",
    "StoreSettings",
    "StreamSettings",
    "WaterSettings",
]  # fmt: skip

ShadingName = Literal["uniform", "hann", "hamming", "chebyshev", "taylor"]
Overload = Literal["drop", "hold"]
Place = Literal["here", "elsewhere"]
KernelChoice = Literal["auto", "pairs", "general"]
LogFormat = Literal["text", "json"]


@dataclass(frozen=True, slots=True)
class ArraySettings:
    """id; positions_m, one (x, y, z) per hydrophone, metres, array frame, as listed (the origin, their mean, not yet
    taken off); exclude, channels left out; spacing_m where the array was given as a uniform line, else None."""

    id: str
    positions_m: tuple[tuple[float, float, float], ...]
    exclude: tuple[int, ...] = ()
    spacing_m: float | None = None

    @property
    def channels(self) -> int:
        return len(self.positions_m)


@dataclass(frozen=True, slots=True)
class FeedSettings:
    """bind, ZeroMQ endpoint; rate_hz, nominal sampling rate; overload, what happens when a band falls behind."""

    bind: str = "tcp://127.0.0.1:5510"
    rate_hz: float = 16000.0
    overload: Overload = "drop"


@dataclass(frozen=True, slots=True)
class CalibrationSettings:
    """One value per channel each: dB re 1 V/uPa, dB, volts at full scale, seconds. `given`: False = uncalibrated."""

    sensitivity_db: tuple[float, ...]
    gain_db: tuple[float, ...]
    full_scale_v: tuple[float, ...]
    delay_s: tuple[float, ...]
    given: bool = True


@dataclass(frozen=True, slots=True)
class WaterSettings:
    """sound_speed_m_s, as given or computed from temperature, salinity and depth (TEOS-10); source says which."""

    sound_speed_m_s: float
    source: str = "given"


@dataclass(frozen=True, slots=True)
class BandSettings:
    """One band: a process, a topic `map/NAME`, and what it works on. channels : ascending or as listed."""

    name: str
    band_hz: tuple[float, float]
    frame: int
    beams: int
    channels: tuple[int, ...]
    shading: ShadingName | tuple[float, ...] = "hann"  # a tuple has one weight per channel of the band
    shading_db: float = 30.0
    average_s: float = 2.0
    place: Place = "here"
    kernel: KernelChoice = "auto"
    map_rate_hz: float | None = None
    map_beams: int | None = None
    map_bins: int | None = None


@dataclass(frozen=True, slots=True)
class DetectionSettings:
    """enabled; pfa, false-alarm probability per beam and map; integrate_s (None: the band's average_s); most input."""

    enabled: bool = True
    pfa: float = 1e-6
    integrate_s: float | None = None
    max_beams: int = 145
    max_bins: int = 1024


@dataclass(frozen=True, slots=True)
class StreamSettings:
    """Endpoints inside the service: hops to bands, maps from bands to the proxy, heartbeats to the supervisor,
    commands from serve to contacts."""

    bind: str = "ipc://@soundrose-{pid}-stream"
    collect: str = "ipc://@soundrose-{pid}-collect"
    control: str = "ipc://@soundrose-{pid}-control"
    commands: str = "ipc://@soundrose-{pid}-commands"


@dataclass(frozen=True, slots=True)
class PublishSettings:
    bind: str = "tcp://127.0.0.1:5511"


@dataclass(frozen=True, slots=True)
class ServeSettings:
    host: str = "127.0.0.1"
    port: int = 8080


@dataclass(frozen=True, slots=True)
class StoreSettings:
    """path, folder; retain_days, retain_mb (10^6 bytes): older events are deleted, whichever is reached first."""

    path: str = "soundrose-data"
    retain_days: float = 365.0
    retain_mb: int = 1000


@dataclass(frozen=True, slots=True)
class LogSettings:
    """format of the lines on standard error."""

    format: LogFormat = "text"


@dataclass(frozen=True, slots=True)
class Settings:
    """Everything a service is told. Made by `soundrose.settings.load_settings`; valid by construction."""

    array: ArraySettings
    feed: FeedSettings
    calibration: CalibrationSettings
    water: WaterSettings
    bands: tuple[BandSettings, ...]
    detection: DetectionSettings = DetectionSettings()
    stream: StreamSettings = StreamSettings()
    publish: PublishSettings = PublishSettings()
    serve: ServeSettings = ServeSettings()
    store: StoreSettings = StoreSettings()
    log: LogSettings = LogSettings()
    warnings: tuple[str, ...] = ()

    def band(self, name: str) -> BandSettings:
        """The band of that name. KeyError if there is none."""
        for band in self.bands:
            if band.name == name:
                return band
        raise KeyError(name)

    def as_plain(self) -> dict[str, Any]:
        """Plain dict of lists and scalars (JSON), for handing to a child process; `from_plain` takes it back."""
        return asdict(self)

    @classmethod
    def from_plain(cls, plain: dict[str, Any]) -> "Settings":
        """The settings that `as_plain` wrote; lists become tuples again."""

        def tuples(value: Any) -> Any:
            return tuple(tuples(v) for v in value) if isinstance(value, list | tuple) else value

        def make(kind: type[Any], part: dict[str, Any]) -> Any:
            return kind(**{key: tuples(value) for key, value in part.items()})

        return cls(
            array=make(ArraySettings, plain["array"]),
            feed=make(FeedSettings, plain["feed"]),
            calibration=make(CalibrationSettings, plain["calibration"]),
            water=make(WaterSettings, plain["water"]),
            bands=tuple(make(BandSettings, band) for band in plain["bands"]),
            detection=make(DetectionSettings, plain["detection"]),
            stream=make(StreamSettings, plain["stream"]),
            publish=make(PublishSettings, plain["publish"]),
            serve=make(ServeSettings, plain["serve"]),
            store=make(StoreSettings, plain["store"]),
            log=make(LogSettings, plain["log"]),
            warnings=tuples(plain["warnings"]),
        )
