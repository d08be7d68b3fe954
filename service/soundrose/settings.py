"""process: the settings file, read once: TOML in, `Settings` out, or every mistake at once."""

import csv
import io
import re
import tomllib
from collections.abc import Mapping
from functools import partial
from pathlib import Path
from typing import Any

from soundrose.errors import ConfigError
from soundrose.settings_array import MAX_HYDROPHONES, parse_array, parse_calibration, parse_water, place
from soundrose.settings_bands import Surroundings, parse_bands
from soundrose.settings_reader import Notes, Table, one_line, shown
from soundrose.settings_services import (
    check_endpoints,
    parse_detection,
    parse_feed,
    parse_log,
    parse_publish,
    parse_serve,
    parse_store,
    parse_stream,
)
from soundrose.settings_types import Settings

__all__ = ["RESERVED", "TABLES", "load_settings", "parse_settings"]

TABLES = (
    "array",
    "feed",
    "calibration",
    "water",
    "bands",
    "detection",
    "stream",
    "publish",
    "serve",
    "store",
    "log",
)
#: accepted, so that a file written for a later version loads; not used by this one
RESERVED = ("access", "curve", "navigation", "zones", "vessel", "record")
MAX_FILE_BYTES = 4 << 20
HEADER = ["x_m", "y_m", "z_m"]


def load_settings(path: str | Path) -> Settings:
    """The settings in the TOML file `path`. ConfigError: it cannot be read, or has mistakes (all are listed)."""
    path = Path(path)
    try:
        raw = tomllib.loads(_read_text(path))
    except (OSError, RecursionError, ValueError) as error:
        raise ConfigError([one_line(f"{path.name}: {_why(error)}")]) from None
    return parse_settings(raw, path.parent, path.name)


def parse_settings(raw: Mapping[str, Any], base_dir: str | Path = ".", file_name: str = "settings") -> Settings:
    """The settings in a parsed TOML document.

    base_dir : folder that `positions_file` is relative to.  file_name : what the lines about mistakes begin with.
    ConfigError: there are mistakes; `problems` has one line for each.
    """
    notes = Notes(file_name)
    _check_tables(raw, notes)
    array = _array(raw, notes, Path(base_dir))
    feed, rate = parse_feed(raw.get("feed", {}), notes)
    calibration = parse_calibration(raw.get("calibration"), notes, array.channels if array else None)
    water = parse_water(raw.get("water"), notes)
    bands = parse_bands(raw.get("bands"), notes, Surroundings(array, calibration, water, rate))
    detection = parse_detection(raw.get("detection", {}), notes)
    stream, publish = parse_stream(raw.get("stream", {}), notes), parse_publish(raw.get("publish", {}), notes)
    serve, store = parse_serve(raw.get("serve", {}), notes), parse_store(raw.get("store", {}), notes)
    log = parse_log(raw.get("log", {}), notes)
    check_endpoints(feed, stream, publish, notes)
    for band in bands:
        if band.place == "elsewhere" and stream.bind.startswith("ipc://"):
            notes.warning(
                f"bands.{band.name}.place", "'elsewhere' on another host needs a tcp:// address in stream.bind"
            )
    if notes.problems or array is None or calibration is None or water is None:
        raise ConfigError(notes.problems)
    return Settings(
        array, feed, calibration, water, bands, detection, stream, publish, serve, store, log, tuple(notes.warnings)
    )


def _array(raw: Mapping[str, Any], notes: Notes, base_dir: Path) -> Any:
    if "array" in raw:
        return parse_array(raw["array"], notes, partial(_read_places, base_dir))
    notes.problem("array", "missing; must be a table with an id and the places of the hydrophones")
    return None


def _check_tables(raw: Mapping[str, Any], notes: Notes) -> None:
    top = Table(raw, "", notes)
    for name in TABLES:
        top.has(name)
    for name in RESERVED:
        if top.has(name):
            notes.warning(name, "reserved, not used by this version")
    top.known = [name for name in top.known if name in raw or name not in RESERVED]
    top.close()


def _read_text(path: Path) -> str:
    """The text of a file in UTF-8, with or without its mark. OSError, or ValueError that tells the line."""
    with path.open("rb") as file:
        data = file.read(MAX_FILE_BYTES + 1)
    if len(data) > MAX_FILE_BYTES:
        raise ValueError(f"is longer than {MAX_FILE_BYTES} bytes; this is no settings or positions file")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise ValueError(f"line {line}: is not UTF-8 (byte {data[error.start]:#04x}); save it as UTF-8") from None


def _why(error: Exception) -> str:
    """One line about a file that cannot be read or parsed."""
    if isinstance(error, OSError):
        return f"cannot be read: {error.strerror or error}"
    if isinstance(error, RecursionError):
        return "cannot be read: brackets are nested too deep"
    where = re.fullmatch(r"(.*?) ?\(at (line \d+, column \d+|end of document)\)", str(error), re.DOTALL)
    text = f"{where[2]}: {where[1]}; this is not TOML" if where else str(error)
    return " ".join(text.split())


def _read_places(base_dir: Path, file_name: str, table: Table) -> tuple[tuple[float, float, float], ...] | None:
    """The places in a CSV file with the header x_m,y_m,z_m; mistakes are noted with their lines."""
    where = f"{table.where}.positions_file"
    try:
        rows = csv.reader(io.StringIO(_read_text(base_dir / file_name), newline=""), strict=True)
        lines = [(rows.line_num, [cell.strip() for cell in row]) for row in rows if any(cell.strip() for cell in row)]
    except (OSError, ValueError, csv.Error) as error:
        table.notes.problem(where, f"{file_name}: {_why(error)}")
        return None
    if not lines or lines[0][1] != HEADER:
        first = ",".join(lines[0][1]) if lines else ""
        table.notes.problem(where, f'{file_name}: line 1: got {shown(first)}; must be the header "x_m,y_m,z_m"')
        return None
    if not 2 <= len(lines) - 1 <= MAX_HYDROPHONES:
        table.notes.problem(where, f"{file_name}: got {len(lines) - 1} positions; must be 2 to {MAX_HYDROPHONES}")
        return None
    places = [(line, row, place([_number(cell) for cell in row])) for line, row in lines[1:]]
    for line, row, found in places:
        if found is None:
            got = shown(",".join(row))
            table.notes.problem(where, f"{file_name}: line {line}: got {got}; must be three finite numbers x, y, z")
    found_all = tuple(found for _, _, found in places if found is not None)
    return found_all if len(found_all) == len(places) else None


def _number(cell: str) -> Any:
    try:
        return float(cell)
    except ValueError:
        return cell
