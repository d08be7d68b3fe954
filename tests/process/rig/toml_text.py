"""Writes the settings file: tables, lists of tables, strings, numbers, booleans and lists."""

import json
from typing import Any

__all__ = ["toml_text"]


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return json.dumps(value)
    if isinstance(value, int):
        return repr(value)
    if isinstance(value, float):
        return repr(float(value))  # NumPy's floats are floats, but their repr is not TOML
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    raise TypeError(f"no TOML for {value!r}")


def _is_tables(value: Any) -> bool:
    return isinstance(value, list) and bool(value) and all(isinstance(item, dict) for item in value)


def toml_text(settings: dict[str, Any]) -> str:
    """Text of the settings; a dict is a table, a list of dicts a list of tables."""
    lines: list[str] = []
    for name, part in settings.items():
        if not isinstance(part, dict) and not _is_tables(part):
            lines.append(f"{name} = {_value(part)}")
    for name, part in settings.items():
        for title, table in [(f"[{name}]", part)] if isinstance(part, dict) else [(f"[[{name}]]", t) for t in part]:
            lines.append(title)
            lines.extend(f"{key} = {_value(value)}" for key, value in table.items())
    return "\n".join(lines) + "\n"
