"""process: the command line. One function per command; each says its exit status."""

import sys
from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console

from soundrose._version import __version__
from soundrose.errors import ConfigError, StartError
from soundrose.worker import EXIT_START

__all__ = ["app", "main"]

EXIT_CONFIG = 2

app = typer.Typer(
    name="soundrose",
    help="Real-time broadband beamforming for a hydrophone line array: from where, at which frequencies, how loud.",
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)


def _version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"soundrose {__version__}")
        raise typer.Exit


@app.callback()
def _top(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print it and end.")
    ] = False,
) -> None:
    """Commands of soundrose."""


def _examples(*lines: str) -> str:
    return "Examples:\n\n\b\n" + "\n".join(f"  {line}" for line in lines)


@app.command(
    help="Run the whole service until SIGINT or SIGTERM. Prints one JSON line on standard output when it is ready.",
    epilog=_examples("soundrose run --config deploy/line.toml"),
)
def run(config: Annotated[Path, typer.Option("--config", help="Settings file (TOML).")]) -> None:
    from soundrose.settings import load_settings
    from soundrose.supervise import run_service

    raise typer.Exit(run_service(load_settings(config), sys.stdout))


@app.command(
    help="Check a settings file: every mistake at once, or what the array can and cannot tell apart, as tables.",
    epilog=_examples("soundrose check deploy/line.toml", "soundrose check deploy/nested.toml"),
)
def check(file: Annotated[Path, typer.Argument(metavar="FILE", help="Settings file (TOML).")]) -> None:
    from soundrose.check import check_file

    raise typer.Exit(check_file(file, Console()))


@app.command(
    help='Work one band of a service that runs on another host (its settings say place = "elsewhere").',
    epilog=_examples("soundrose band --config aft.toml --name low"),
)
def band(
    config: Annotated[Path, typer.Option("--config", help="The service's settings file.")],
    name: Annotated[str, typer.Option("--name", help="Name of the band.")],
) -> None:
    from soundrose.beam.process import main as band_main
    from soundrose.child import Orders
    from soundrose.settings import load_settings

    settings = load_settings(config)
    if name not in (names := [item.name for item in settings.bands]):
        raise ConfigError([f"{config}: --name: got {name!r}; must be one of {', '.join(names)}"])
    endpoints = {
        "stream": settings.stream.bind,
        "collect": settings.stream.collect,
        "control": settings.stream.control,
    }
    if local := [f"stream.{key}" for key, endpoint in endpoints.items() if "{pid}" in endpoint]:
        raise ConfigError(
            [f"{config}: {', '.join(local)}: a band on another host needs tcp endpoints there, with fixed ports"]
        )
    raise typer.Exit(band_main(Orders(f"band:{name}", settings, endpoints)))


@app.command(
    help="Time the beam stage on this machine, beside the bare arithmetic and beside a plain script, in one run.",
    epilog=_examples("soundrose bench", "soundrose bench --json > bench.json"),
)
def bench(
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON instead of tables.")] = False,
) -> None:
    from soundrose.bench import run_bench

    raise typer.Exit(run_bench(as_json, Console()))


@app.command(
    help="Run the service on a simulated sea, and print where its display is. Needs no settings and no network.",
    epilog=_examples("soundrose demo", "soundrose demo --seconds 60 --port 8090", "soundrose demo --picture"),
)
def demo(
    seconds: Annotated[float | None, typer.Option("--seconds", help="End after this long.")] = None,
    port: Annotated[int, typer.Option("--port", help="HTTP port; 0 for any free one.")] = 8080,
    picture: Annotated[bool, typer.Option("--picture", help="Draw the map in this terminal.")] = False,
) -> None:
    from soundrose.scene.demo import demo as run_demo

    raise typer.Exit(run_demo(seconds, port, picture))


def _mount_feed() -> None:
    from soundrose.feed.command import feed_app
    from soundrose.scene.command import mount_scene

    mount_scene(feed_app)
    app.add_typer(feed_app, name="feed", help="Act as an array: send a recording or a scene to a service.")


def main() -> None:
    """Entry point. Exit status 2 for settings that cannot be used, 3 for a service that cannot start here."""
    _mount_feed()
    try:
        app()
    except ConfigError as error:
        for problem in error.problems:
            print(problem, file=sys.stderr)
        sys.exit(EXIT_CONFIG)
    except StartError as error:
        print(f"soundrose: {error}", file=sys.stderr)
        sys.exit(EXIT_START)
