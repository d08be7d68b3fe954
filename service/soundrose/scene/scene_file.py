"""process: a scene's file, read once: TOML in, `Scene` out, or every mistake at once."""

import tomllib
from importlib.resources import files
from pathlib import Path

from soundrose.errors import ConfigError, UsageError
from soundrose.scene.scene_tables import parse_scene
from soundrose.scene.scene_types import Scene
from soundrose.settings_reader import one_line

__all__ = ["load_scene", "shipped", "shipped_names"]

MAX_FILE_BYTES = 4 << 20


def load_scene(path: str | Path) -> Scene:
    """The scene in the TOML file `path`. ConfigError: it cannot be read, or has mistakes (all are listed)."""
    path = Path(path)
    try:
        data = path.read_bytes()
        if len(data) > MAX_FILE_BYTES:
            raise ValueError(f"{len(data)} bytes; a scene has at most {MAX_FILE_BYTES}")
        raw = tomllib.loads(data.decode("utf-8"))
    except (OSError, RecursionError, ValueError) as error:
        why = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise ConfigError([one_line(f"{path.name}: {why}")]) from None
    return parse_scene(raw, path.name)


def shipped(name: str) -> Path:
    """A file that comes with the program, such as "demo.toml". UsageError for one that does not."""
    if name not in (names := shipped_names()):
        raise UsageError(f"no scene {name!r} comes with the program; there are {', '.join(names)}")
    return Path(str(files("soundrose.scene") / "scenes" / name))


def shipped_names() -> list[str]:
    """Files that come with the program."""
    return sorted(item.name for item in (files("soundrose.scene") / "scenes").iterdir() if item.name.endswith(".toml"))
