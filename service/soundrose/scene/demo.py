"""process: `soundrose demo`: the whole service, a simulated sea that sends to it, and where to look."""

import ctypes
import json
import os
import selectors
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import IO, Any

from rich.console import Console, Group
from rich.live import Live
from rich.text import Text

from soundrose.errors import StartError
from soundrose.scene.picture import map_picture
from soundrose.scene.scene_file import shipped
from soundrose.scene.sighting import Sighting, sighting
from soundrose_client import MapMessage, Message, ReceiveTimeout, Subscriber

__all__ = ["demo"]

READY_S = 60.0  # a cold start on a small machine takes some seconds
END_S = 6.0
DRAW_S = 0.25
BAND = "low"  # the one whose map is shown here
SETTINGS, TRUTH = "skarvholm.toml", "truth.jsonl"
PR_SET_PDEATHSIG = 1


def demo(seconds: float | None = None, port: int = 8080, picture: bool = False, console: Console | None = None) -> int:
    """Runs for `seconds` from the first map on, or until Ctrl-C or SIGTERM; prints what was seen.

    Returns the exit status: 0, or 1 if no map came.
    port : of HTTP; 0 takes any free port for everything.  picture : the map in this terminal, not only a line.
    StartError: the service did not start.
    """
    console = console or _console()
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    with tempfile.TemporaryDirectory(prefix="soundrose-demo-") as folder:
        place = Path(folder)
        try:
            with _service(place, port) as ready:
                console.print(f"\n  {ready['http']}/\n", highlight=False)
                console.print("Survey vessel Skarvholm, array aft, 48 hydrophones: an invented sea. Ctrl-C ends.")
                with _array(place, ready["feed"], console):
                    return _watch(ready, place / TRUTH, seconds, picture, console)
        except KeyboardInterrupt:  # before there was anything to watch
            return 0


def _console() -> Console:
    """With 256 colours in a terminal that does not say how many it has: sixteen cannot show levels."""
    console = Console()
    plain = console.color_system == "standard" and os.environ.get("TERM") != "linux"
    return Console(color_system="256") if plain else console


@contextmanager
def _service(place: Path, port: int) -> Iterator[Mapping[str, str]]:
    """The service as a process of its own; its ready line."""
    (place / SETTINGS).write_text(_settings_text(port, place / "store"), "utf-8")
    with (place / "service.log").open("wb") as log:
        process = _start(["run", "--config", str(place / SETTINGS)], stdout=subprocess.PIPE, stderr=log)
        try:
            yield _ready_line(process, place / "service.log")
        finally:
            _end(process, signal.SIGTERM)
            if process.stdout is not None:
                process.stdout.close()


def _settings_text(port: int, store: Path) -> str:
    """The settings that come with the demo's scene, with these ports and this store."""
    text = shipped("demo-settings.toml").read_text("utf-8")
    changes = [("port = 8080", f"port = {port}"), ('path = "soundrose-data"', f"path = {json.dumps(str(store))}")]
    if port == 0:
        changes += [(f"127.0.0.1:{fixed}", "127.0.0.1:*") for fixed in (5510, 5511)]
    for old, new in changes:
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    return text


def _start(arguments: list[str], **streams: Any) -> "subprocess.Popen[bytes]":
    """`soundrose ARGUMENTS` in a session of its own: Ctrl-C reaches this process alone, which ends them in order."""
    parent = os.getpid()

    def follow() -> None:  # in the child: it is told to end should this process vanish
        ctypes.CDLL(None).prctl(PR_SET_PDEATHSIG, signal.SIGTERM, 0, 0, 0)
        if os.getppid() != parent:
            os._exit(1)

    return subprocess.Popen(
        [sys.executable, "-m", "soundrose", *arguments],
        stdin=subprocess.DEVNULL,
        start_new_session=True,
        preexec_fn=follow,
        **streams,
    )


def _ready_line(process: "subprocess.Popen[bytes]", log: Path) -> Mapping[str, str]:
    assert process.stdout is not None
    line = _line_within(process.stdout, READY_S)
    if not line:
        status = process.poll()
        raise StartError(
            f"the service {'is not ready' if status is None else f'ended with status {status}'}:\n"
            f"{log.read_text('utf-8', 'replace').strip()[-2000:]}"
        )
    ready: dict[str, str] = json.loads(line)
    return ready


def _line_within(stream: IO[bytes], limit_s: float) -> bytes:
    """The first line; empty if it does not come in time or the stream ends."""
    with selectors.DefaultSelector() as selector:
        selector.register(stream, selectors.EVENT_READ)
        return stream.readline() if selector.select(limit_s) else b""


@contextmanager
def _array(place: Path, feed: str, console: Console) -> Iterator[None]:
    """The array: the scene, made as it goes by a process of its own, which also writes down what is truly there."""
    arguments = ["feed", "scene", "demo.toml", "--config", str(place / SETTINGS), "--to", feed]
    with (place / "feed.log").open("wb") as log:
        process = _start([*arguments, "--truth", str(place / TRUTH)], stdout=log, stderr=log)
        try:
            yield
        finally:
            gone = process.poll()
            _end(process, signal.SIGINT)
    if gone is not None:
        console.print((place / "feed.log").read_text("utf-8", "replace").strip(), markup=False)


def _end(process: "subprocess.Popen[bytes]", number: int) -> None:
    if process.poll() is None:
        process.send_signal(number)
    try:
        process.wait(END_S)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()


def _watch(ready: Mapping[str, str], truth: Path, seconds: float | None, picture: bool, console: Console) -> int:
    """Shows what comes until the time is over; prints what was seen."""
    view = _View(ready, picture, console)
    with Subscriber(ready["publish"], [f"map/{BAND}", "status"]) as subscriber:
        try:
            view.follow(subscriber, time.monotonic() + READY_S, until_map=True)
            view.follow(subscriber, float("inf") if seconds is None else time.monotonic() + seconds)
        except KeyboardInterrupt:
            pass
        _print_summary(view, _newest_truth(truth), subscriber, console)
    return 0 if view.maps else 1


def _newest_truth(path: Path) -> Mapping[str, Any] | None:
    """The last whole line; None before there is one."""
    lines = path.read_text("utf-8").split("\n")[:-1] if path.exists() else []
    return json.loads(lines[-1]) if lines else None


class _View:
    """The newest map and status, and how to show them: a line or a picture in a terminal, a line a second elsewhere."""

    def __init__(self, ready: Mapping[str, str], picture: bool, console: Console) -> None:
        self.maps = 0
        self.newest: MapMessage | None = None
        self._ready, self._picture_wanted, self._console = ready, picture, console
        self._status: Message | None = None
        self._due = 0.0

    def follow(self, subscriber: Subscriber, until: float, until_map: bool = False) -> None:
        with Live(console=self._console, auto_refresh=False, transient=until_map) as live:
            while (now := time.monotonic()) < until and not (until_map and self.maps):
                try:
                    self._take(subscriber.receive(min(DRAW_S, until - now)))
                except ReceiveTimeout:
                    pass
                if now >= self._due:
                    self._draw(live)

    def _take(self, message: Message) -> None:
        if isinstance(message, MapMessage):
            self.newest = message
            self.maps += 1
        else:
            self._status = message

    def _draw(self, live: Live) -> None:
        often = self._console.is_terminal and self._picture_wanted
        self._due = time.monotonic() + (DRAW_S if often else 1.0)
        if self._console.is_terminal:
            live.update(self._picture() if self._picture_wanted else Text(self._line(), no_wrap=True), refresh=True)
        elif self.newest is not None:
            self._console.print(self._line(), highlight=False, soft_wrap=True)

    def _picture(self) -> Group:
        m = self.newest
        if m is None:
            return Group(Text(self._line()))
        width, height = min(self._console.width, 110), max(6, min(self._console.height - 6, 30))
        picture = map_picture(
            m.level_db, m.cone_deg.tolist(), m.f0_hz, m.df_hz, width=max(30, width), height=height
        )  # fmt: skip
        return Group(picture, Text(self._line(), no_wrap=True), Text(f"{self._ready['http']}/   Ctrl-C ends"))

    def _line(self) -> str:
        if self.newest is None:
            return "waiting for the first map ..."
        loudest, latency = self.newest.loudest(), self.newest.latency_ms
        state = "?" if self._status is None else self._status.header.get("state", "?")
        delay = "?" if latency is None else f"{latency:.0f} ms"
        return (
            f"{self.newest.time[11:19]}  loudest {loudest.cone_deg:5.1f}° at {loudest.level_db:5.1f} dB re 1 µPa   "
            f"latency {delay}   feed {state}"
        )


def _print_summary(view: _View, truth: Mapping[str, Any] | None, subscriber: Subscriber, console: Console) -> None:
    counters = subscriber.counters
    console.print(
        f"\n{view.maps} maps; missed {counters.missed}, new starts {counters.restarts}, "
        f"unreadable {sum(counters.malformed.values())}",
        highlight=False,
    )
    if view.newest is not None and truth is not None:
        m = view.newest
        seen: Sighting = sighting(m.level_db, m.cone_deg, m.frequency_hz, truth)
        console.print(f"  {seen.text}", highlight=False, soft_wrap=True)
    console.print("Not a navigation or collision-avoidance aid; a line array cannot tell port from starboard.")
