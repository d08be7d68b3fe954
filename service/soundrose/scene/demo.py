"""process: `soundrose demo`: the whole service, an invented array that sends to it, and its maps in this terminal."""

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

import soundfile
from rich.console import Console, Group
from rich.live import Live
from rich.text import Text

from soundrose.errors import StartError
from soundrose.scene import scenario
from soundrose.scene.picture import map_picture
from soundrose.scene.plane import PlaneWaves, to_counts
from soundrose.scene.tally import Tally
from soundrose_client import MapMessage, Message, ReceiveTimeout, Subscriber

__all__ = ["demo"]

READY_S = 60.0  # a cold start on a small machine takes some seconds
END_S = 6.0
DRAW_S = 0.25
PR_SET_PDEATHSIG = 1


def demo(seconds: float | None = None, port: int = 8080, console: Console | None = None) -> int:
    """Runs until `seconds` are over, Ctrl-C or SIGTERM; prints what was seen. Exit status 0, 1 if no map came.

    port : of HTTP; 0 takes any free port for everything. StartError: the service did not start.
    """
    console = console or _console()
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    with tempfile.TemporaryDirectory(prefix="soundrose-demo-") as folder:
        place = Path(folder)
        console.print("Survey vessel Skarvholm, array aft, 48 hydrophones: an invented scenario.", highlight=False)
        try:
            with _service(place, port) as ready, _array(place, ready["feed"], console):
                return _watch(ready, seconds, console)
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
    any_port = port == 0
    text = scenario.settings_text(
        "tcp://127.0.0.1:*" if any_port else "tcp://127.0.0.1:5510",
        "tcp://127.0.0.1:*" if any_port else "tcp://127.0.0.1:5511",
        port,
        str(place / "store"),
    )
    (place / "skarvholm.toml").write_text(text, "utf-8")
    with (place / "service.log").open("wb") as log:
        process = _start(["run", "--config", str(place / "skarvholm.toml")], stdout=subprocess.PIPE, stderr=log)
        try:
            yield _ready_line(process, place / "service.log")
        finally:
            _end(process, signal.SIGTERM)
            if process.stdout is not None:
                process.stdout.close()


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
    """The array: its recording, played round and round by a process of its own."""
    recording = place / "skarvholm.wav"
    _record(recording)
    arguments = ["feed", "file", str(recording), "--config", str(place / "skarvholm.toml"), "--to", feed]
    with (place / "feed.log").open("wb") as log:
        process = _start([*arguments, "--repeat", "0"], stdout=log, stderr=log)
        try:
            yield
        finally:
            gone = process.poll()
            _end(process, signal.SIGINT)
    if gone is not None:
        console.print((place / "feed.log").read_text("utf-8", "replace").strip(), markup=False)


def _record(path: Path) -> None:
    """One period of the scenario's sounds as the array's converters give them."""
    waves = PlaneWaves(
        scenario.positions(),
        scenario.RATE_HZ,
        scenario.SOUND_SPEED_M_S,
        [sound.wave for sound in scenario.SOUNDS],
        sensor_db=scenario.SENSOR_DB,
        seed=1,
        period=scenario.PERIOD,
    )
    rate = int(scenario.RATE_HZ)
    with soundfile.SoundFile(path, "w", rate, scenario.CHANNELS, subtype=f"PCM_{scenario.BITS}") as file:
        for pressure in waves.blocks(scenario.PERIOD, rate):
            counts = to_counts(pressure, **scenario.CALIBRATION, bits=scenario.BITS)
            file.write(counts.T << (32 - scenario.BITS))


def _end(process: "subprocess.Popen[bytes]", number: int) -> None:
    if process.poll() is None:
        process.send_signal(number)
    try:
        process.wait(END_S)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()


def _watch(ready: Mapping[str, str], seconds: float | None, console: Console) -> int:
    """Shows what comes until the time is over; prints what was seen."""
    until = time.monotonic() + seconds if seconds is not None else float("inf")
    view = _View(ready, console)
    with Subscriber(ready["publish"], ["map/main", "status"]) as subscriber:
        try:
            view.follow(subscriber, until)
        except KeyboardInterrupt:
            pass
        _print_summary(view, subscriber, console)
    return 0 if view.tally.maps else 1


class _View:
    """The newest map and status, and how they are shown: a picture in a terminal, a line a second elsewhere."""

    def __init__(self, ready: Mapping[str, str], console: Console) -> None:
        self.tally = Tally()
        self._ready, self._console = ready, console
        self._map: MapMessage | None = None
        self._status: Message | None = None
        self._due = 0.0

    def follow(self, subscriber: Subscriber, until: float) -> None:
        with Live(console=self._console, auto_refresh=False, transient=False) as live:
            while (now := time.monotonic()) < until:
                try:
                    self._take(subscriber.receive(min(DRAW_S, until - now)))
                except ReceiveTimeout:
                    pass
                if now >= self._due:
                    self._draw(live)

    def _take(self, message: Message) -> None:
        if isinstance(message, MapMessage):
            self._map = message
            self.tally.add(message.level_db, message.cone_deg, message.frequency_hz)
        else:
            self._status = message

    def _draw(self, live: Live) -> None:
        self._due = time.monotonic() + (DRAW_S if self._console.is_terminal else 1.0)
        if self._console.is_terminal:
            live.update(self._picture(), refresh=True)
        elif self._map is not None:
            self._console.print(self._line(), highlight=False, soft_wrap=True)

    def _picture(self) -> Group:
        if self._map is None:
            return Group(Text("waiting for the first map ..."))
        m = self._map
        width, height = min(self._console.width, 110), max(6, min(self._console.height - 6, 30))
        picture = map_picture(
            m.level_db, m.cone_deg.tolist(), m.f0_hz, m.df_hz, width=max(30, width), height=height
        )  # fmt: skip
        return Group(picture, Text(self._line(), no_wrap=True), Text(f"{self._ready['http']}   Ctrl-C ends"))

    def _line(self) -> str:
        assert self._map is not None
        loudest, latency = self._map.loudest(), self._map.latency_ms
        state = "?" if self._status is None else self._status.header.get("state", "?")
        delay = "?" if latency is None else f"{latency:.0f} ms"
        return (
            f"{self._map.time[11:19]}  loudest {loudest.cone_deg:5.1f}° at {loudest.level_db:5.1f} dB re 1 µPa   "
            f"latency {delay}   feed {state}"
        )


def _print_summary(view: _View, subscriber: Subscriber, console: Console) -> None:
    counters = subscriber.counters
    console.print(
        f"\n{view.tally.maps} maps; missed {counters.missed}, new starts {counters.restarts}, "
        f"unreadable {sum(counters.malformed.values())}",
        highlight=False,
    )
    for finding in view.tally.findings(scenario.SOUNDS):
        console.print(
            f"  {finding.name:20} true {finding.true_deg:5.1f}°   loudest beam {finding.found_deg:5.1f}°",
            highlight=False,
        )
    console.print("Not a navigation or collision-avoidance aid; a line array cannot tell port from starboard.")
