"""core: the tables of a scene's sources: where they go and what they sound like."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from soundrose.scene.place import Line
from soundrose.scene.scene_types import (
    Clicks,
    Emitter,
    Events,
    Motor,
    Own,
    Pulse,
    Range,
    Schedule,
    Shape,
    Shot,
    Sound,
    Sweep,
    Water,
)
from soundrose.scene.track import Leg, Way, legs_way, waypoints_way
from soundrose.settings_reader import Notes, Table, finite, shown

__all__ = ["Surroundings", "parse_contacts", "parse_legs", "parse_own_sources", "parse_pairs"]

TOP = 0.45  # of the rate
LEVEL = "must be a level in dB from -400 to 300"
SECONDS = "must be a number of seconds above 0"
RANGE = "must be a number of seconds above 0, or two that rise, [least, most]"
SPEED = "must be a number of m/s from 0 to 50"
LEGS = "must be a list of tables {seconds, turn_deg_s}"
PARTS = ("ambient", "reverberation", "hum", "strum")
OWN_PLACES = {"ship": (0.0, 4.0), "gun": (40.0, 6.0), "sounder": (0.0, 5.0)}  # behind the ship's reference, depth


@dataclass(frozen=True, slots=True)
class Surroundings:
    """What a source is judged against."""

    own: Own
    water: Water
    rate_hz: float

    @property
    def top_hz(self) -> float:
        return TOP * self.rate_hz


SoundMaker = Callable[[Table, Surroundings], Sound | None]


def parse_contacts(rows: Any, notes: Notes, around: Surroundings) -> tuple[Emitter, ...]:
    """[[contacts]]; those with mistakes are left out, the mistakes noted."""
    kinds: dict[str, SoundMaker] = {"ship": _motor, "animal": _animal, "pinger": _pinger}
    found = []
    for i, row in enumerate(_rows(rows, "contacts", notes)):
        table = Table(row, f"contacts[{i}]", notes)
        name, kind = _name(table), table.word("kind", "ship", tuple(kinds))
        depth, bounces = _depth(table, around, None), _bounces(table, 1)
        way = _way(table, around)
        sound = kinds[kind](table, around) if kind else None
        if kind:
            table.close()
        if name is not None and kind and depth is not None and bounces is not None and way and sound:
            found.append(Emitter(name, kind, way, depth, sound, bounces))
    return tuple(found)


def parse_own_sources(rows: Any, notes: Notes, around: Surroundings) -> tuple[Emitter, ...]:
    """[[own.sources]]: aboard or towed, on own ship's way."""
    kinds: dict[str, SoundMaker] = {"ship": _motor, "gun": _gun, "sounder": _pinger}
    found = []
    for i, row in enumerate(_rows(rows, "own.sources", notes)):
        table = Table(row, f"own.sources[{i}]", notes)
        name, kind = _name(table), table.word("kind", "ship", tuple(kinds))
        behind, depth = OWN_PLACES[kind or "ship"]
        behind_m = table.number("behind_m", behind, "must be a number of metres")
        depth_m, bounces = _depth(table, around, depth), _bounces(table, 1)
        announce = table.flag("announce", False) if kind != "ship" else False
        sound = kinds[kind](table, around) if kind else None
        if kind:
            table.close()
        if None not in (name, kind, behind_m, depth_m, bounces) and sound:
            told = kind if announce else None
            found.append(
                Emitter(
                    name or "", kind or "", around.own.way, depth_m or 0.0, sound, bounces or 0, behind_m or 0.0, told
                )
            )
    return tuple(found)


def parse_pairs(
    table: Table, key: str, *, required: bool = False, top_hz: float = 1e6
) -> tuple[tuple[float, float], ...]:
    """[[frequency, level], ...]; those that are wrong are noted."""
    must = f"must be pairs [Hz above 0 and at most {top_hz:g}, dB]"
    rows = table.raw(key, [], must, required)
    pairs = []
    for row in rows if isinstance(rows, list) else [rows]:
        numbers = [finite(item) for item in row] if isinstance(row, list) else []
        if len(numbers) != 2 or numbers[0] is None or numbers[1] is None or not 0 < numbers[0] <= top_hz:
            if rows is not None:
                table.got(key, must)
            return ()
        pairs.append((numbers[0], numbers[1]))
    return tuple(pairs)


def parse_legs(table: Table) -> list[Leg] | None:
    """legs: one after the other. None after a mistake."""
    rows = table.raw("legs", [], LEGS)
    if not isinstance(rows, list):
        table.got("legs", LEGS)
        return None
    legs: list[Leg] | None = []
    for i, row in enumerate(rows):
        leg = Table(row, f"{table.where}.legs[{i}]", table.notes)
        seconds = leg.number("seconds", None, SECONDS, above=0, required=True)
        turn = leg.number("turn_deg_s", 0.0, "must be from -10 to 10 degrees a second", low=-10, high=10)
        leg.close()
        legs = None if legs is None or seconds is None or turn is None else [*legs, Leg(seconds, turn)]
    laps = _laps(table)
    return None if legs is None or laps is None else legs * laps


def _laps(table: Table) -> int | None:
    """How many times legs or waypoints are gone through."""
    return table.integer("laps", 1, "must be a whole number from 1 to 1000", low=1, high=1000)


def _name(table: Table) -> str | None:
    name = table.text("name", None, "must be a name", pattern=r"[^\x00-\x1f]{1,64}", required=True)
    if name in PARTS:
        table.got("name", f"must be none of {', '.join(PARTS)}")
    return name


def _depth(table: Table, around: Surroundings, default: float | None) -> float | None:
    deep = around.water.depth_m
    must = f"must be a number of metres above 0 and below {deep:g}, water.depth_m"
    return table.number("depth_m", default, must, above=0, below=deep, required=default is None)


def _bounces(table: Table, default: int) -> int | None:
    return table.integer("bounces", default, "must be 0, 1, 2 or 3", low=0, high=3)


def _way(table: Table, around: Surroundings) -> Way | None:
    speed = table.number("speed_m_s", 0.0, SPEED, low=0, high=50)
    if table.has("waypoints_m"):
        return _waypoints(table, speed)
    distance = table.number(
        "range_m", None, "must be a number of metres above 0, or waypoints_m", above=0, required=True
    )
    bearing = table.number("bearing_deg", None, "must be degrees from 0 to 360, true", low=0, high=360, required=True)
    course = table.number("course_deg", 0.0, "must be degrees from 0 to 360, true", low=0, high=360)
    legs = parse_legs(table)
    if speed is None or distance is None or bearing is None or course is None or legs is None:
        return None
    origin = Line(around.own, np.zeros((1, 3))).origin(np.zeros(1))[0]
    start = (
        float(origin[0] + distance * np.cos(np.deg2rad(bearing))),
        float(origin[1] + distance * np.sin(np.deg2rad(bearing))),
    )
    return legs_way(start, course, speed, legs)


def _waypoints(table: Table, speed: float | None) -> Way | None:
    must = "must be two or more different places [north, east] in metres from where own ship begins"
    radius = table.number("radius_m", 100.0, "must be a number of metres above 0", above=0)
    rows = table.values["waypoints_m"]
    points: list[tuple[float, float]] = []
    for row in rows if isinstance(rows, list) else []:
        numbers = [finite(item) for item in row] if isinstance(row, list) and len(row) == 2 else [None]
        if numbers[0] is None or numbers[-1] is None or (points and points[-1] == (numbers[0], numbers[1])):
            table.notes.problem(f"{table.where}.waypoints_m[{len(points)}]", f"got {shown(row)}; {must}")
            return None
        points.append((numbers[0], numbers[-1]))
    if len(points) < 2:
        table.got("waypoints_m", must)
        return None
    laps = _laps(table)
    if speed is None or radius is None or laps is None:
        return None
    if laps > 1 and points[0] == points[-1]:
        table.got("laps", "waypoints_m must not end where they begin: the way back is part of each lap")
        return None
    return waypoints_way(points * laps, speed, radius)


def _motor(table: Table, around: Surroundings) -> Motor | None:
    top, plain = around.top_hz, Motor(0.0)
    level = table.number("level_db", None, LEVEL, low=-400, high=300, required=True)
    corner = table.number("corner_hz", plain.corner_hz, f"must be above 0, at most {top:g}", above=0, high=top)
    slope = table.number("slope_db", plain.slope_db, "must be 0 dB a decade or more", low=0, high=100)
    blade = table.number("blade_hz", plain.blade_hz, "must be above 0, at most 100", above=0, high=100)
    depth = table.number("modulation", plain.modulation, "must be from 0 to 1", low=0, high=1)
    tones = parse_pairs(table, "tones", top_hz=top)
    if level is None or corner is None or slope is None or blade is None or depth is None:
        return None
    return Motor(level, corner, slope, blade, depth, tones)


def _pinger(table: Table, around: Surroundings) -> Events | None:
    schedule = _schedule(table)
    level, length, frequency = (
        _level(table),
        _seconds(table, "length_s", 0.01),
        _frequency(table, "frequency_hz", around),
    )
    if schedule is None or level is None or length is None or frequency is None:
        return None
    return Events(schedule, (Sweep(level, length, frequency, frequency),))


def _gun(table: Table, around: Surroundings) -> Events | None:
    schedule = _schedule(table)
    level, bubble = _level(table), _seconds(table, "bubble_s", 0.1)
    frequency = table.number("frequency_hz", 60.0, "must be above 0, at most 1/40 of the rate", above=0,
                             high=around.rate_hz / 40)  # fmt: skip
    if schedule is None or level is None or bubble is None or frequency is None:
        return None
    return Events(schedule, (Shot(level, frequency, bubble),))


def _animal(table: Table, around: Surroundings) -> Events | None:
    schedule = _schedule(table)
    shapes: list[Shape] = []
    rows = table.raw("calls", None, "must be tables [[contacts.calls]], at least one", required=True)
    if rows is not None and (not isinstance(rows, list) or not rows):
        table.got("calls", "must be tables [[contacts.calls]], at least one")
    for i, row in enumerate(rows if isinstance(rows, list) else []):
        shape = _call(Table(row, f"{table.where}.calls[{i}]", table.notes), around)
        if shape is not None:
            shapes.append(shape)
    return Events(schedule, tuple(shapes)) if schedule and shapes else None


def _call(table: Table, around: Surroundings) -> Shape | None:
    makers: dict[str, Callable[[Table, Surroundings, float], Shape | None]] = {
        "sweep": _sweep, "pulse": _pulse, "clicks": _clicks
    }  # fmt: skip
    kind, level = table.word("shape", "sweep", tuple(makers)), _level(table)
    shape = makers[kind](table, around, level or 0.0) if kind else None
    if kind:
        table.close()
    return None if level is None else shape


def _sweep(table: Table, around: Surroundings, level_db: float) -> Shape | None:
    length = _seconds(table, "length_s", None)
    low, high = _frequency(table, "from_hz", around), _frequency(table, "to_hz", around)
    return None if length is None or low is None or high is None else Sweep(level_db, length, low, high)


def _pulse(table: Table, around: Surroundings, level_db: float) -> Shape | None:
    length, frequency = _seconds(table, "length_s", None), _frequency(table, "frequency_hz", around)
    return None if length is None or frequency is None else Pulse(level_db, length, frequency)


def _clicks(table: Table, around: Surroundings, level_db: float) -> Shape | None:
    number = table.integer("count", 10, "must be a whole number from 1 to 10000", low=1, high=10000)
    frequency = table.number(
        "frequency_hz", None, f"must be above 0, at most {around.top_hz / 2:g}, so that the click's band fits", above=0,
        high=around.top_hz / 2, required=True,
    )  # fmt: skip
    gap = table.number("gap_s", 0.1, "must be 10 cycles of frequency_hz or more", low=10 / (frequency or 1e9))
    return None if number is None or frequency is None or gap is None else Clicks(level_db, number, gap, frequency)


def _level(table: Table) -> float | None:
    return table.number("level_db", None, LEVEL, low=-400, high=300, required=True)


def _seconds(table: Table, key: str, default: float | None) -> float | None:
    return table.number(key, default, SECONDS, above=0, high=3600, required=default is None)


def _frequency(table: Table, key: str, around: Surroundings) -> float | None:
    must = f"must be above 0, at most {around.top_hz:g} Hz (0.45 of the rate)"
    return table.number(key, None, must, above=0, high=around.top_hz, required=True)


def _schedule(table: Table) -> Schedule | None:
    first = table.number("first_s", 0.0, "must be a number of seconds, 0 or more", low=0)
    interval, bout, silence = (_range(table, key) for key in ("interval_s", "bout_s", "silence_s"))
    if not table.has("interval_s"):
        table.missing("interval_s", RANGE)
    if table.has("bout_s") != table.has("silence_s"):
        table.notes.problem(f"{table.where}.bout_s", "bout_s and silence_s go together: give both or neither")
    return None if first is None or interval is None else Schedule(first, interval, bout, silence)


def _range(table: Table, key: str) -> Range | None:
    if not table.has(key):
        return None
    value = table.values[key]
    numbers = [finite(item) for item in (value if isinstance(value, list) else [value, value])]
    if len(numbers) != 2 or numbers[0] is None or numbers[1] is None or not 0 < numbers[0] <= numbers[1]:
        table.got(key, RANGE)
        return None
    return numbers[0], numbers[1]


def _rows(rows: Any, where: str, notes: Notes) -> list[Any]:
    if isinstance(rows, list):
        return rows
    notes.problem(where, f"got {shown(rows)}; must be tables [[{where}]]")
    return []
