"""process: `soundrose feed scene`: act as the array of a scene. Exit status 1: samples were not taken; 2: a mistake."""

import signal
from collections.abc import Iterator
from contextlib import contextmanager, nullcontext
from dataclasses import dataclass
from pathlib import Path
from typing import IO, TYPE_CHECKING, Annotated, Any
from uuid import uuid4

import typer
from rich.console import Console

from soundrose.errors import ConfigError, StreamError, UsageError
from soundrose.feed.command import BLOCK_S, EXIT_INTERRUPTED, EXIT_NOT_TAKEN, EXIT_USAGE, parse_start, target_of

if TYPE_CHECKING:
    from soundrose.feed.send import Sent
    from soundrose.scene.scene_types import Scene
    from soundrose.settings_types import Settings

__all__ = ["SceneOptions", "check_fit", "feed_scene", "mount_scene"]

PLACE_TOLERANCE_M = 1e-6


@dataclass(frozen=True, slots=True)
class SceneOptions:
    """The options of `soundrose feed scene`. seconds : of the scene, None for ever.  truth : file of JSON lines."""

    to: str | None = None
    config: Path | None = None
    speed: str = "1"
    seconds: float | None = None
    truth: Path | None = None
    start: str | None = None
    run: str | None = None
    timeout_s: float = 10.0


def feed_scene(path: Path, options: SceneOptions = SceneOptions(), console: Console | None = None) -> int:
    """Plays a scene into a feed and returns the exit status; summary and what is wrong go to `console` (standard error
    by default)."""
    console = console or Console(stderr=True)
    try:
        _feed_scene(path, options, console)
    except KeyboardInterrupt:
        return EXIT_INTERRUPTED
    except (ConfigError, UsageError) as error:
        _complain(console, error)
        return EXIT_USAGE
    except StreamError as error:
        _complain(console, error)
        return EXIT_NOT_TAKEN
    return 0


def _complain(console: Console, error: Exception) -> None:
    for line in str(error).splitlines():
        _say(console, f"soundrose feed: {line}")


def _say(console: Console, text: str) -> None:
    console.print(text, markup=False, highlight=False, soft_wrap=True)


def _feed_scene(path: Path, options: SceneOptions, console: Console) -> None:
    from soundrose.feed.pacing import parse_speed
    from soundrose.feed.send import Sent
    from soundrose.scene.play import ScenePlay, play_scene
    from soundrose.scene.recorder import Recorder
    from soundrose.scene.scene_file import load_scene, shipped, shipped_names
    from soundrose.settings import load_settings

    speed, start_ns = parse_speed(options.speed), parse_start(options.start)
    scene = load_scene(path if path.exists() or str(path) not in shipped_names() else shipped(str(path)))
    settings = None if options.config is None else load_settings(options.config)
    if settings is not None:
        check_fit(scene, settings)
    target = target_of(options.to, scene.array.id, settings)
    block = max(1, round(BLOCK_S * scene.rate_hz))
    run = options.run or f"{scene.array.id}-{uuid4().hex[:12]}"
    recorder = Recorder(scene, run, start_ns, block, _samples(scene, options.seconds))
    sent = Sent()
    _say(
        console,
        f"{scene.name}: {scene.array.channels} hydrophones at {scene.rate_hz:g} Hz to {target.address}, run {run!r}",
    )
    try:
        with _opened(options.truth) as truth:
            play_scene(
                recorder, block, ScenePlay(speed, options.timeout_s, truth), target.address, sent, lambda _: None
            )
    finally:
        _say(console, _summary(sent, scene.rate_hz))


def _samples(scene: "Scene", seconds: float | None) -> int | None:
    if seconds is not None and not 0 < seconds < 1e9:
        raise UsageError(f"seconds: got {seconds:g}; give a number of seconds above 0")
    return None if seconds is None else max(1, round(seconds * scene.rate_hz))


def check_fit(scene: "Scene", settings: "Settings") -> None:
    """UsageError where a service with these settings would misread the scene's array: every difference is told."""
    import numpy as np

    found = []
    if scene.array.id != settings.array.id:
        found.append(f"array.id is {scene.array.id!r} in the scene and {settings.array.id!r} in the settings")
    if scene.rate_hz != settings.feed.rate_hz:
        found.append(f"feed.rate_hz is {scene.rate_hz:g} in the scene and {settings.feed.rate_hz:g} in the settings")
    ours, theirs = np.array(scene.array.positions_m), np.array(settings.array.positions_m)
    if ours.shape != theirs.shape or np.abs(ours - theirs).max() > PLACE_TOLERANCE_M:
        found.append("the hydrophones stand elsewhere in the scene than in the settings ([array])")
    found += [
        f"calibration.{key} differs between scene and settings"
        for key in ("sensitivity_db", "gain_db", "full_scale_v", "delay_s")
        if getattr(scene.calibration, key) != getattr(settings.calibration, key)
    ]
    if found:
        raise UsageError(
            "scene and settings do not fit:\n" + "\n".join(found) + "\nmake the scene's tables those of the settings"
        )


@contextmanager
def _opened(path: Path | None) -> Iterator[IO[str] | None]:
    try:
        opened: Any = nullcontext() if path is None else path.open("w", encoding="utf-8")
    except OSError as error:
        raise UsageError(f"truth: cannot write {path}: {error.strerror}") from None
    with opened as file:
        yield file


def _summary(sent: "Sent", rate_hz: float) -> str:
    seconds = sent.samples / rate_hz
    speed = f", {seconds / sent.elapsed_s:.2f} x real time" if sent.elapsed_s > 0 else ""
    return f"sent {sent.samples} samples ({seconds:.1f} s) in {sent.blocks} blocks in {sent.elapsed_s:.1f} s{speed}"


def mount_scene(feed_app: typer.Typer) -> None:
    """Adds `scene` to the commands of `soundrose feed`."""
    feed_app.command(
        "scene",
        help="Send a simulated sea, made from a scene file as it goes (or demo.toml, which comes with the program).",
        epilog="Examples:\n\n\b\n"
        "  soundrose feed scene demo.toml --seconds 600\n"
        "  soundrose feed scene night.toml --config aft.toml --speed max --seconds 3600 --truth night.jsonl",
    )(_scene)


def _scene(
    scene: Annotated[Path, typer.Argument(metavar="SCENE.toml", show_default=False)],
    to: Annotated[str | None, typer.Option(help="Endpoint; default feed.bind of --config, or port 5510 here.")] = None,
    config: Annotated[Path | None, typer.Option(help="The service's settings: checked against the scene.")] = None,
    speed: Annotated[str, typer.Option(help="Times real time, or max.")] = "1",
    seconds: Annotated[
        float | None, typer.Option(help="End after so many seconds of the scene; default never.")
    ] = None,
    truth: Annotated[Path | None, typer.Option(help="Write what is truly there, a JSON line a second.")] = None,
    start: Annotated[str | None, typer.Option(help="Time of the first sample, RFC 3339; default now.")] = None,
    run: Annotated[str | None, typer.Option(help="Name of the run; default a new one.")] = None,
    timeout: Annotated[float, typer.Option(help="Give up when nothing takes samples for so many seconds.")] = 10.0,
) -> None:
    signal.signal(signal.SIGTERM, signal.default_int_handler)  # told to end: say so to the service too
    raise typer.Exit(feed_scene(scene, SceneOptions(to, config, speed, seconds, truth, start, run, timeout)))
