"""process: `soundrose feed`: act as an array. Exit status 1: samples were not taken; 2: a mistake in what was asked."""

import signal
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, cast, get_args
from uuid import uuid4

import typer
from rich.console import Console

from soundrose.errors import ConfigError, StreamError, UsageError

if TYPE_CHECKING:
    from collections.abc import Callable

    from soundrose.feed.messages import Unit
    from soundrose.feed.recording import Recording
    from soundrose.feed.send import Sent
    from soundrose.settings_types import Settings

__all__ = ["FileOptions", "Target", "feed_app", "feed_file", "parse_start", "target_of"]

EXIT_NOT_TAKEN, EXIT_USAGE, EXIT_INTERRUPTED = 1, 2, 130
ADDRESS = "tcp://127.0.0.1:5510"
BLOCK_S = 0.05  # 20 blocks a second: small beside any frame, few enough to cost nothing

feed_app = typer.Typer(no_args_is_help=True, rich_markup_mode=None)


@feed_app.callback()
def _feed() -> None:
    """Act as an array: send samples to a running service."""


@dataclass(frozen=True, slots=True)
class Target:
    """Where samples go. rate_hz, channels : what the service expects, None where no settings were given."""

    address: str
    array: str
    rate_hz: float | None = None
    channels: int | None = None


def target_of(to: str | None, array: str | None, settings: "Settings | None") -> Target:
    """From the command line and, for what it leaves open, the service's settings. UsageError if that is too little."""
    if settings is None:
        if array is None:
            raise UsageError("which array? give --array ID, or --config FILE with the service's settings")
        return Target(to or ADDRESS, array)
    address = to or settings.feed.bind.replace("//*:", "//127.0.0.1:").replace("//0.0.0.0:", "//127.0.0.1:")
    if address.endswith((":*", ":0")):
        raise UsageError(f"feed.bind is {settings.feed.bind!r}: any free port; say which with --to (`run` prints it)")
    return Target(address, array or settings.array.id, settings.feed.rate_hz, settings.array.channels)


def parse_start(text: str | None) -> int:
    """RFC 3339 text -> ns since 1970 UTC; None is now. UsageError for anything else, or a time without its zone."""
    if text is None:
        return time.time_ns()
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        moment = None
    if moment is None or moment.tzinfo is None:
        raise UsageError(f"start: got {text!r}; give a time with its zone, such as 2026-05-04T03:00:00Z")
    since = moment - datetime.fromisoformat("1970-01-01T00:00:00+00:00")
    return ((since.days * 86400 + since.seconds) * 1_000_000 + since.microseconds) * 1000


@dataclass(frozen=True, slots=True)
class FileOptions:
    """The options of `soundrose feed file`. repeat : times over, 0 for ever."""

    to: str | None = None
    array: str | None = None
    config: Path | None = None
    channel_map: Path | None = None
    channels: str | None = None
    run: str | None = None
    start: str | None = None
    speed: str = "1"
    block: int | None = None
    unit: str = "count"
    repeat: int = 1
    end: bool = True
    timeout_s: float = 10.0


DROP_WARNING = (
    'these settings say overload = "drop": what the service cannot keep up with at this speed is left out of its maps '
    'and counted in status (dropped_hops); overload = "hold" under [feed] waits instead'
)


def feed_file(recordings: Sequence[Path], options: FileOptions = FileOptions(), console: Console | None = None) -> int:
    """Plays recordings into a feed and returns the exit status; progress, summary and what is wrong go to `console`
    (standard error by default)."""
    console = console or Console(stderr=True)
    try:
        _feed_file(recordings, options, console)
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
        console.print(f"soundrose feed: {line}", markup=False, highlight=False, soft_wrap=True)


def _feed_file(recordings: Sequence[Path], options: FileOptions, console: Console) -> None:
    from soundrose.feed.pacing import Pace, parse_speed
    from soundrose.feed.send import Play, Sent, play
    from soundrose.settings import load_settings

    settings = None if options.config is None else load_settings(options.config)
    target = target_of(options.to, options.array, settings)
    recording = _open(recordings, options)
    _check_target(target, recording)
    how = Play(
        array=target.array,
        run=options.run or f"{target.array}-{uuid4().hex[:12]}",
        pace=Pace(recording.rate_hz, parse_speed(options.speed), parse_start(options.start)),
        block=max(1, round(BLOCK_S * recording.rate_hz)) if options.block is None else options.block,
        unit=_checked_unit(options.unit),
        repeat=_checked_repeat(options.repeat),
        end=options.end,
        timeout_s=options.timeout_s,
    )
    if settings is not None and settings.feed.overload == "drop" and parse_speed(options.speed) != 1:
        _say(console, DROP_WARNING)
    sent = Sent()
    total = recording.duration_s * options.repeat if options.repeat else None
    _say(console, f"{_described(recording)} to {target.address}, array {how.array!r}, run {how.run!r}")
    try:
        with _progress(console, total, recording.rate_hz) as report:
            play(recording, how, target.address, sent, report)
    finally:
        _say(console, _summary(sent, recording.rate_hz))


def _open(recordings: Sequence[Path], options: FileOptions) -> "Recording":
    from soundrose.feed.recording import Part, open_recording, parse_channels, read_channel_map

    if bool(recordings) == (options.channel_map is not None):
        raise UsageError("give recordings, or --channel-map FILE that names them; one of the two")
    parts = [Part(tuple(recordings))] if options.channel_map is None else read_channel_map(options.channel_map)
    return open_recording(parts, None if options.channels is None else parse_channels(options.channels))


def _check_target(target: Target, recording: "Recording") -> None:
    if target.rate_hz is not None and target.rate_hz != recording.rate_hz:
        raise UsageError(
            f"the recording has {recording.rate_hz:g} samples a second, the settings say feed.rate_hz = "
            f"{target.rate_hz:g}; the service would drop it: resample it, or change the settings"
        )
    if target.channels is not None and target.channels != recording.channels:
        raise UsageError(
            f"{recording.channels} channels would be sent, the settings list {target.channels} hydrophones; "
            "choose with --channels 0,2,5:9"
        )


def _checked_unit(unit: str) -> "Unit":
    from soundrose.feed.messages import Unit

    if unit not in (units := get_args(Unit)):
        raise UsageError(f"unit: got {unit!r}; must be one of {', '.join(units)}")
    return cast("Unit", unit)


def _checked_repeat(repeat: int) -> int:
    if repeat < 0:
        raise UsageError(f"repeat: got {repeat}; give how many times to play, 0 for ever")
    return repeat


def _described(recording: "Recording") -> str:
    rounded = ", rounded to 32 bit" if recording.subtype == "DOUBLE" else ""
    return (
        f"{recording.duration_s:.1f} s of {recording.channels} channels at {recording.rate_hz:g} Hz, "
        f"{recording.subtype} as {recording.type}{rounded}"
    )


def _summary(sent: "Sent", rate_hz: float) -> str:
    seconds = sent.samples / rate_hz
    speed = f", {seconds / sent.elapsed_s:.2f} x real time" if sent.elapsed_s > 0 else ""
    return (
        f"sent {sent.samples} samples ({seconds:.1f} s) in {sent.blocks} blocks, {sent.data_bytes / 1e6:.1f} MB, "
        f"in {sent.elapsed_s:.1f} s{speed}"
    )


def _say(console: Console, text: str) -> None:
    console.print(text, markup=False, highlight=False, soft_wrap=True)


@contextmanager
def _progress(console: Console, total_s: float | None, rate_hz: float) -> "Iterator[Callable[[Sent], None]]":
    """A bar in a terminal, nothing elsewhere; drawn by rich ten times a second, however many blocks go out."""
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (BarColumn(), TextColumn("{task.completed:.1f} s"), TextColumn("{task.fields[speed]:.2f} x real time"))
    with Progress(*columns, TimeElapsedColumn(), console=console, disable=not console.is_terminal) as progress:
        task = progress.add_task("feed", total=total_s, speed=0.0)

        def report(sent: "Sent") -> None:
            seconds = sent.samples / rate_hz
            progress.update(task, completed=seconds, speed=seconds / max(sent.elapsed_s, 1e-9))

        yield report


@feed_app.command(
    "file",
    help="Send recordings (WAV, RF64, FLAC; 16, 24, 32 bit or float) as one run, files in the order given.",
    epilog="Examples:\n\n\b\n"
    "  soundrose feed file --config aft.toml monday-1.wav monday-2.wav\n"
    "  soundrose feed file --array aft --speed max --channels 0,2,5:9 survey.flac\n"
    "  soundrose feed file --config aft.toml --channel-map groups.toml --start 2026-05-04T03:00:00Z",
)
def _file(
    recordings: Annotated[list[Path] | None, typer.Argument(metavar="[RECORDING]...", show_default=False)] = None,
    to: Annotated[str | None, typer.Option(help="Endpoint; default feed.bind of --config, or port 5510 here.")] = None,
    array: Annotated[str | None, typer.Option(help="Id of the array; default that of --config.")] = None,
    config: Annotated[Path | None, typer.Option(help="The service's settings: array, rate, address.")] = None,
    channel_map: Annotated[
        Path | None, typer.Option(help="TOML file of [[part]] tables: files = [...], channels = [...], side by side.")
    ] = None,
    channels: Annotated[str | None, typer.Option(help="Which channels in which order, such as 0,2,5:9.")] = None,
    run: Annotated[str | None, typer.Option(help="Name of the run; default a new one.")] = None,
    start: Annotated[str | None, typer.Option(help="Time of the first sample, RFC 3339; default now.")] = None,
    speed: Annotated[str, typer.Option(help="Times real time, or max.")] = "1",
    block: Annotated[int | None, typer.Option(help="Samples in a block; default 0.05 s.")] = None,
    unit: Annotated[str, typer.Option(help="What floats mean: count (full scale 1), V or uPa.")] = "count",
    repeat: Annotated[int, typer.Option(help="Play so many times as one run; 0 for ever.")] = 1,
    end: Annotated[bool, typer.Option("--end/--no-end", help="Say that the run is over.")] = True,
    timeout: Annotated[float, typer.Option(help="Give up when nothing takes samples for so many seconds.")] = 10.0,
) -> None:
    options = FileOptions(
        to, array, config, channel_map, channels, run, start, speed, block, unit, repeat, end, timeout
    )  # fmt: skip
    signal.signal(signal.SIGTERM, signal.default_int_handler)  # told to end: say so to the service too
    raise typer.Exit(feed_file(recordings or (), options))
