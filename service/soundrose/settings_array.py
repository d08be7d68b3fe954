"""core: the tables [array], [calibration] and [water] of the settings file."""

from collections.abc import Callable
from typing import Any

from soundrose.array.water import sound_speed_m_s
from soundrose.settings_reader import Notes, Table, finite, is_integer, shown
from soundrose.settings_types import ArraySettings, CalibrationSettings, WaterSettings

__all__ = ["MAX_HYDROPHONES", "Place", "ReadPlaces", "parse_array", "parse_calibration", "parse_water", "place"]

Place = tuple[float, float, float]
#: given the name of a positions file, its places, or None after noting what is wrong
ReadPlaces = Callable[[str, Table], "tuple[Place, ...] | None"]

#: far beyond any line in use; keeps a slip of the finger from asking for gigabytes
MAX_HYDROPHONES = 4096
_WAYS = "give hydrophones with spacing_m, or positions_m, or positions_file: exactly one of the three"
_ROW = "must be three finite numbers x, y, z in metres"


def parse_array(values: Any, notes: Notes, read_places: ReadPlaces) -> ArraySettings | None:
    """[array]: the id, where the hydrophones are, and which are left out.

    None where the places are not known; other mistakes are in `notes`, and bands can still be read against the rest.
    """
    table = Table(values, "array", notes)
    if not table.is_table:
        return None
    name = table.text(
        "id", None, "must be a name of 1 to 64 printable characters without blanks at its ends",
        pattern=r"(?=\S)[^\x00-\x1f\x7f-\x9f]{1,64}(?<=\S)", required=True,
    )  # fmt: skip
    places, spacing = _places(table, read_places)
    exclude = _exclude(table, len(places)) if places else None
    table.has("exclude")
    table.close()
    return None if places is None else ArraySettings(name or "", places, exclude or (), spacing)


def place(values: Any) -> Place | None:
    """Three finite numbers, or None."""
    if not isinstance(values, list) or len(values) != 3:
        return None
    x, y, z = (finite(value) for value in values)
    return None if x is None or y is None or z is None else (x, y, z)


def _places(table: Table, read_places: ReadPlaces) -> tuple[tuple[Place, ...] | None, float | None]:
    """The places as listed, and the spacing of a uniform line."""
    uniform = [table.has("hydrophones"), table.has("spacing_m")]
    ways = [any(uniform), table.has("positions_m"), table.has("positions_file")]
    if sum(ways) != 1:
        table.notes.problem(table.where, f"got {sum(ways)} ways of saying where the hydrophones are; {_WAYS}")
        return None, None
    if ways[0]:
        return _uniform(table)
    if ways[1]:
        return _listed(table), None
    file_name = table.text("positions_file", None, "must be the name of a CSV file", required=True)
    return (None if file_name is None else read_places(file_name, table)), None


def _uniform(table: Table) -> tuple[tuple[Place, ...] | None, float | None]:
    """Channel 0 foremost (largest x), the line centred on x = 0."""
    count = table.integer(
        "hydrophones", None, f"must be a whole number from 2 to {MAX_HYDROPHONES}", low=2, high=MAX_HYDROPHONES,
        required=True,
    )  # fmt: skip
    spacing = table.number("spacing_m", None, "must be a number of metres above 0", above=0, required=True)
    if count is None or spacing is None:
        return None, None
    return tuple(((count - 1 - 2 * m) * spacing / 2, 0.0, 0.0) for m in range(count)), spacing


def _listed(table: Table) -> tuple[Place, ...] | None:
    rows = table.values["positions_m"]
    if not isinstance(rows, list) or not 2 <= len(rows) <= MAX_HYDROPHONES:
        count = f"{len(rows)} positions" if isinstance(rows, list) else shown(rows)
        table.notes.problem(
            f"{table.where}.positions_m", f"got {count}; must be a list of 2 to {MAX_HYDROPHONES} positions [x, y, z]"
        )
        return None
    places = [place(row) for row in rows]
    for i, (row, found) in enumerate(zip(rows, places, strict=True)):
        if found is None:
            table.notes.problem(f"{table.where}.positions_m[{i}]", f"got {shown(row)}; {_ROW}")
    return tuple(p for p in places if p) if all(places) else None


def _exclude(table: Table, channels: int) -> tuple[int, ...] | None:
    must = f"must be a list of different channel numbers from 0 to {channels - 1}"
    listed = table.raw("exclude", [], must)
    good = isinstance(listed, list) and all(is_integer(i) and 0 <= i < channels for i in listed)
    if not good or len(set(listed)) != len(listed):
        table.got("exclude", must)
        return None
    return tuple(sorted(listed))


#: key: (default, what is allowed, lowest value (exclusive))
_CALIBRATION: dict[str, tuple[float, str, float | None]] = {
    "sensitivity_db": (-180.0, "a finite number of dB re 1 V/µPa", None),
    "gain_db": (20.0, "a finite number of dB", None),
    "full_scale_v": (2.5, "a number of volts above 0", 0.0),
    "delay_s": (0.0, "a finite number of seconds", None),
}


def parse_calibration(values: Any | None, notes: Notes, channels: int | None) -> CalibrationSettings | None:
    """[calibration]: each key one value, or a list with one per channel (`channels`, None where not known)."""
    table = Table({} if values is None else values, "calibration", notes)
    columns = {key: _column(table, key, channels) for key in _CALIBRATION}
    table.close()
    assumed = [key for key in ("sensitivity_db", "gain_db", "full_scale_v") if not table.has(key)]
    if values is None:
        notes.warning("calibration", "not given; levels are NOT calibrated: -180 dB re 1 V/µPa, 20 dB, 2.5 V assumed")
    elif assumed:
        taken = ", ".join(f"{key} = {_CALIBRATION[key][0]}" for key in assumed)
        notes.warning("calibration", f"not given in full; levels are NOT calibrated: {taken} assumed")
    sensitivity, gain, full_scale, delay = columns.values()
    if channels is None or sensitivity is None or gain is None or full_scale is None or delay is None:
        return None
    return CalibrationSettings(sensitivity, gain, full_scale, delay, given=not assumed)


def _column(table: Table, key: str, channels: int | None) -> tuple[float, ...] | None:
    default, allowed, above = _CALIBRATION[key]
    value = table.raw(key, default, allowed)
    numbers = [finite(item) for item in value] if isinstance(value, list) else [finite(value)]
    column = tuple(n for n in numbers if n is not None and (above is None or n > above))
    if len(column) < len(numbers):
        table.got(key, f"must be {allowed}, or a list with one for each channel")
        return None
    if isinstance(value, list) and channels is not None and len(column) != channels:
        table.notes.problem(
            f"{table.where}.{key}", f"got a list of {len(column)}; must be one value or a list of {channels}"
        )
        return None
    return column if isinstance(value, list) else column * (channels or 1)


def parse_water(values: Any | None, notes: Notes) -> WaterSettings | None:
    """[water]: the sound speed itself, or temperature and salinity (and depth) to compute it from."""
    table = Table({} if values is None else values, "water", notes)
    given = table.has("sound_speed_m_s")
    measured = [key for key in ("temperature_c", "salinity", "depth_m") if table.has(key)]
    water: WaterSettings | None
    if given and measured:
        notes.problem(
            "water", f"got sound_speed_m_s and {', '.join(measured)}; give the speed, or what it follows from"
        )
        water = None
    elif measured:
        water = _computed(table)
    else:
        speed = table.number("sound_speed_m_s", 1500.0, "must be a number of m/s above 0", above=0)
        water = None if speed is None else WaterSettings(speed, "given" if given else "assumed")
        if not given:
            notes.warning("water", "not given; a sound speed of 1500 m/s is assumed until navigation tells another")
    table.close()
    if water is not None and not 1400 <= water.sound_speed_m_s <= 1600:
        notes.warning("water.sound_speed_m_s", f"{water.sound_speed_m_s:g} m/s is outside 1400-1600, sea water's range")
    return water


def _computed(table: Table) -> WaterSettings | None:
    temperature = table.number(
        "temperature_c", None, "must be a number of degrees Celsius from -2.5 to 40", low=-2.5, high=40, required=True
    )
    salinity = table.number(
        "salinity", None, "must be a practical salinity from 0 to 42", low=0, high=42, required=True
    )
    depth = table.number("depth_m", 0.0, "must be a number of metres from 0 to 11000", low=0, high=11000)
    if temperature is None or salinity is None or depth is None:
        return None
    source = f"computed (TEOS-10) from {temperature:g} °C, practical salinity {salinity:g}, {depth:g} m"
    return WaterSettings(sound_speed_m_s(temperature, salinity, depth), source)
