"""core: a scene's tables, each mistake a line: `scene.toml: contacts[1].speed_m_s: got -3; must be ...`."""

from collections.abc import Mapping
from typing import Any, get_args

from soundrose.array.water import sound_speed_m_s
from soundrose.errors import ConfigError
from soundrose.feed.wire import SampleType
from soundrose.scene.emitter_tables import Surroundings, parse_contacts, parse_legs, parse_own_sources, parse_pairs
from soundrose.scene.scene_types import (
    Ambient,
    AmbientShape,
    Emitter,
    Fault,
    FaultState,
    Flow,
    Gap,
    Hum,
    NavigationSending,
    Own,
    Reverberation,
    Scene,
    Strum,
    Water,
)
from soundrose.scene.sea import Absorption
from soundrose.scene.track import legs_way
from soundrose.settings_array import parse_array, parse_calibration
from soundrose.settings_reader import Notes, Table, shown

__all__ = ["parse_scene"]

TABLES = (
    "name", "seed", "array", "feed", "calibration", "water", "own", "ambient", "flow", "hum", "strum", "contacts",
    "faults", "gaps", "clock", "navigation",
)  # fmt: skip
LEAST_RATE_HZ, MOST_RATE_HZ = 1000.0, 400_000.0
NOT_NEGATIVE = "must be a number, 0 or more"
ANGLE = "must be a number of degrees from 0 to 360"


def parse_scene(raw: Mapping[str, Any], file_name: str = "scene") -> Scene:
    """The scene in a parsed TOML document.

    file_name : what the lines about mistakes begin with.
    ConfigError: there are mistakes; `problems` has one line for each.
    """
    notes = Notes(file_name)
    top = Table(raw, "", notes)
    for name in TABLES:
        top.has(name)
    name = top.raw("name", file_name, "") if "name" in raw else file_name
    if not isinstance(name, str) or not name.strip():
        notes.problem("name", f"got {shown(name)}; must be some text")
    seed = raw.get("seed", 0)
    if isinstance(seed, bool) or not isinstance(seed, int) or not 0 <= seed < 2**63:
        notes.problem("seed", f"got {shown(seed)}; must be a whole number from 0 to {2**63 - 1}")
    top.close()
    array = parse_array(raw.get("array", {}), notes, _no_file)
    channels = array.channels if array else None
    calibration = parse_calibration(raw.get("calibration", {}), notes, channels)
    feed = _feed(raw.get("feed", {}), notes)
    own, own_raw = _own(raw.get("own", {}), notes)
    water = _water(raw.get("water", {}), notes, own)
    if own is not None and water is not None and own.array_depth_m >= water.depth_m:
        notes.problem("own.array_depth_m", f"got {own.array_depth_m:g}; must be above the bottom, water.depth_m")
    rest = _rest(raw, notes, channels)
    emitters: tuple[Emitter, ...] = ()
    reverberation = None
    if own is not None and water is not None and feed is not None:
        around = Surroundings(own, water, feed[0])
        emitters = parse_own_sources(own_raw.get("sources", []), notes, around)
        emitters += parse_contacts(raw.get("contacts", []), notes, around)
        _check_names(emitters, notes)
        reverberation = _reverberation(own_raw.get("reverberation"), notes, emitters)
    if notes.problems or array is None or calibration is None or own is None or water is None or feed is None:
        raise ConfigError(notes.problems)
    return Scene(
        name, seed, array, calibration, *feed, water, own, emitters=emitters, reverberation=reverberation, **rest
    )  # fmt: skip


def _no_file(file_name: str, table: Table) -> None:
    table.got("positions_file", "a scene gives positions_m in the file itself")


def _feed(values: Any, notes: Notes) -> tuple[float, SampleType] | None:
    table = Table(values, "feed", notes)
    must = f"must be a number of samples a second from {LEAST_RATE_HZ:g} to {MOST_RATE_HZ:g}"
    rate = table.number("rate_hz", 16000.0, must, low=LEAST_RATE_HZ, high=MOST_RATE_HZ)
    kind = table.word("type", "i3", get_args(SampleType))
    table.close()
    return None if rate is None or kind is None else (rate, kind)  # type: ignore[return-value]


def _water(values: Any, notes: Notes, own: Own | None) -> Water | None:
    table, plain = Table(values, "water", notes), Water()
    depth = table.number("depth_m", plain.depth_m, "must be a number of metres above 0", above=0)
    temperature = table.number(
        "temperature_c", plain.temperature_c, "must be a number of degrees Celsius from -2.5 to 40", low=-2.5, high=40
    )
    salinity = table.number("salinity", plain.salinity, "must be a practical salinity from 1 to 42", low=1, high=42)
    ph = table.number("ph", plain.ph, "must be a number from 7 to 9", low=7, high=9)
    loss = table.number("bottom_loss_db", plain.bottom_loss_db, NOT_NEGATIVE, low=0)
    word = table.word("absorption", plain.absorption, get_args(Absorption))
    speed = table.number("sound_speed_m_s", 0.0, "must be a number of m/s from 1000 to 2000", low=1000, high=2000) \
        if table.has("sound_speed_m_s") else 0.0  # fmt: skip
    table.close()
    if depth is None or temperature is None or salinity is None or ph is None or loss is None or speed is None:
        return None
    if speed == 0.0:
        speed = sound_speed_m_s(temperature, salinity, own.array_depth_m if own else 0.0)
    return Water(depth, speed, temperature, salinity, ph, word or "none", loss)  # type: ignore[arg-type]


def _own(values: Any, notes: Notes) -> tuple[Own | None, Mapping[str, Any]]:
    table = Table(values, "own", notes)
    heading = table.number("heading_deg", 0.0, ANGLE, low=0, high=360)
    speed = table.number("speed_m_s", 0.0, "must be a number of m/s from 0 to 20", low=0, high=20)
    latitude = table.number("latitude_deg", 0.0, "must be from -89 to 89", low=-89, high=89)
    longitude = table.number("longitude_deg", 0.0, "must be from -180 to 180", low=-180, high=180)
    layback = table.number("layback_m", 0.0, NOT_NEGATIVE, low=0)
    depth = table.number("array_depth_m", 10.0, "must be a number of metres above 0", above=0)
    sag = table.number("sag_m", 0.0, "must be a number of metres")
    pitch = table.number("pitch_deg", 0.0, "must be from -45 to 45", low=-45, high=45)
    legs = parse_legs(table)
    table.has("sources"), table.has("reverberation")
    table.close()
    if None in (heading, speed, latitude, longitude, layback, depth, sag, pitch) or legs is None:
        return None, table.values
    way = legs_way((0.0, 0.0), heading or 0.0, speed or 0.0, legs)
    own = Own(way, latitude or 0.0, longitude or 0.0, layback or 0.0, depth or 0.0, sag or 0.0, pitch or 0.0)
    return own, table.values


def _rest(raw: Mapping[str, Any], notes: Notes, channels: int | None) -> dict[str, Any]:
    """What asks nothing of the others."""
    flow, hum, strum = (raw.get(key) for key in ("flow", "hum", "strum"))
    clock = Table(raw.get("clock", {}), "clock", notes)
    drift = clock.number("drift_ppm", 0.0, "must be from -1000 to 1000", low=-1000, high=1000)
    clock.close()
    return {
        "ambient": _ambient(raw.get("ambient", {}), notes),
        "flow": None if flow is None else _flow(flow, notes),
        "hum": None if hum is None else _hum(hum, notes),
        "strum": None if strum is None else _strum(strum, notes),
        "faults": _faults(raw.get("faults", []), notes, channels),
        "gaps": _gaps(raw.get("gaps", []), notes),
        "drift_ppm": drift,
        "navigation": _navigation(raw.get("navigation", {}), notes),
    }


def _ambient(values: Any, notes: Notes) -> Ambient:
    table, plain = Table(values, "ambient", notes), Ambient()
    word = table.word("shape", plain.shape, get_args(AmbientShape))
    shipping = table.number("shipping", plain.shipping, "must be from 0 (none near) to 1 (heavy)", low=0, high=1)
    wind = table.number("wind_m_s", plain.wind_m_s, "must be a number of m/s from 0 to 40", low=0, high=40)
    flat = table.number("flat_db", None, "must be a level in dB re 1 µPa²/Hz", low=-100, high=200)
    electronic = table.number("electronic_db", None, "must be a level in dB re 1 µPa²/Hz", low=-100, high=200)
    enabled = table.flag("enabled", True)
    table.close()
    return Ambient(word, shipping or 0.0, wind or 0.0, flat, electronic, bool(enabled))  # type: ignore[arg-type]


def _flow(values: Any, notes: Notes) -> Flow:
    table = Table(values, "flow", notes)
    level = table.number("level_db", None, "must be a level in dB re 1 µPa²/Hz", low=-100, high=200, required=True)
    slope = table.number("slope_db", 30.0, NOT_NEGATIVE, low=0)
    convection = table.number("convection", 0.8, "must be above 0, at most 1", above=0, high=1)
    table.close()
    return Flow(level or 0.0, slope or 0.0, convection or 1.0)


def _hum(values: Any, notes: Notes) -> Hum:
    table = Table(values, "hum", notes)
    tones = parse_pairs(table, "tones", required=True)
    table.close()
    return Hum(tones)


def _strum(values: Any, notes: Notes) -> Strum:
    table = Table(values, "strum", notes)
    speed = table.number("wave_speed_m_s", 40.0, "must be a number of m/s above 0", above=0)
    decay = table.number("decay_m", 20.0, "must be a number of metres above 0", above=0)
    tones = parse_pairs(table, "tones", required=True)
    table.close()
    return Strum(speed or 1.0, decay or 1.0, tones)


def _faults(rows: Any, notes: Notes, channels: int | None) -> tuple[Fault, ...]:
    return tuple(
        _fault(Table(row, f"faults[{i}]", notes), channels) for i, row in enumerate(_rows(rows, "faults", notes))
    )


def _fault(table: Table, channels: int | None) -> Fault:
    top = (channels or 1 << 20) - 1
    must = f"must be a channel number from 0 to {top}"
    channel = table.integer("channel", None, must, low=0, high=top, required=True)
    state = table.word("state", "dead", get_args(FaultState))
    begin = table.number("from_s", 0.0, NOT_NEGATIVE, low=0)
    end = table.number("to_s", None, "must be a number of seconds after from_s", above=begin or 0.0)
    other, amount = None, 0.0
    match state:
        case "exchanged":
            other = table.integer("with", None, must, low=0, high=top, required=True)
            if other is not None and other == channel:
                table.got("with", "must be another channel")
        case "noisy":
            amount = table.number("level_db", 80.0, "must be a level in dB re 1 µPa²/Hz", low=-100, high=250) or 0.0
        case "clipped":
            amount = table.number("gain_db", 40.0, "must be a number of dB above 0", above=0, high=120) or 0.0
        case "intermittent":
            amount = table.number("share", 0.2, "must be above 0 and below 1", above=0, below=1) or 0.0
    table.close()
    return Fault(channel or 0, state or "dead", begin or 0.0, float("inf") if end is None else end, other, amount)  # type: ignore[arg-type]


def _gaps(rows: Any, notes: Notes) -> tuple[Gap, ...]:
    gaps = []
    for i, row in enumerate(_rows(rows, "gaps", notes)):
        table = Table(row, f"gaps[{i}]", notes)
        at = table.number("at_s", None, NOT_NEGATIVE, low=0, required=True)
        length = table.number("length_s", None, "must be above 0, at most 60", above=0, high=60, required=True)
        table.close()
        gaps.append(Gap(at or 0.0, length or 0.0))
    return tuple(gaps)


def _navigation(values: Any, notes: Notes) -> NavigationSending:
    table, plain = Table(values, "navigation", notes), NavigationSending()
    numbers = {
        key: table.number(key, getattr(plain, key), NOT_NEGATIVE, low=0)
        for key in ("every_s", "heading_sigma_deg", "position_sigma_m", "depth_sigma_m", "positions_every_s")
    }
    table.close()
    return NavigationSending(**{key: value or 0.0 for key, value in numbers.items()})


def _reverberation(values: Any, notes: Notes, emitters: tuple[Emitter, ...]) -> Reverberation | None:
    if values is None:
        return None
    table = Table(values, "own.reverberation", notes)
    guns = [emitter.name for emitter in emitters if emitter.kind == "gun"]
    source = table.word("source", "", guns)
    level = table.number("level_db", None, "must be a level in dB re 1 µPa²/Hz", low=-100, high=250, required=True)
    slope = table.number("slope_db", 20.0, NOT_NEGATIVE, low=0)
    decay = table.number("decay_db", 10.0, "must be a number of dB a second above 0", above=0)
    table.close()
    return Reverberation(source or "", level or 0.0, slope or 0.0, decay or 1.0)


def _rows(rows: Any, where: str, notes: Notes) -> list[Any]:
    if isinstance(rows, list):
        return rows
    notes.problem(where, f"got {shown(rows)}; must be tables [[{where}]]")
    return []


def _check_names(emitters: tuple[Emitter, ...], notes: Notes) -> None:
    names = [emitter.name for emitter in emitters]
    for name in sorted({name for name in names if names.count(name) > 1}):
        notes.problem("contacts", f"got two sources named {shown(name)}; each must have a name of its own")
