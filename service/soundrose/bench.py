"""process: `soundrose bench`: time the beam stage on this machine beside the bare arithmetic and the plain script."""

import gc
import json as json_text
import platform
import time
from collections.abc import Callable
from pathlib import Path
from statistics import median
from typing import Any

import numpy as np
import scipy
from rich.console import Console
from rich.table import Table
from threadpoolctl import threadpool_info, threadpool_limits

from soundrose.beam.workload import LOADS, BareArithmetic, Load, PlainScript, StageLoop, load_settings_of

__all__ = ["machine_facts", "measure", "run_bench"]

#: rounds of a load; in each, everything is run in turn, so that a slow moment of the machine hits all alike
ROUNDS = 15
#: processor time of this thread, ns: everything timed here runs in it alone and waits for nothing, so it is the
#: time that passes on a quiet machine, and other programs on a busy one disturb it least
_clock = time.thread_time_ns
#: the plain script is slow and steady: it runs in every third round
PLAIN_EVERY = 3


def run_bench(json: bool, console: Console) -> int:
    """Measure the three loads and print a table, or JSON. Returns the exit status, 0."""
    with threadpool_limits(1, user_api="blas"):
        facts = machine_facts()
        results = []
        for load in LOADS:
            if not json:
                console.print(f"[dim]{_title(load)} ...[/dim]")
            results.append(measure(load, ROUNDS))
    if json:
        console.out(json_text.dumps({"machine": facts, "loads": results}, indent=1), highlight=False)
    else:
        _show(console, facts, results)
    return 0


def machine_facts() -> dict[str, Any]:
    """What the figures depend on: processor, library versions, BLAS kernels and threads."""
    pools = [pool for pool in threadpool_info() if pool["user_api"] == "blas"]
    return {
        "cpu": _cpu_name(),
        "python": platform.python_version(),
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "blas": [
            {key: pool.get(key) for key in ("internal_api", "version", "architecture", "num_threads")} for pool in pools
        ],
    }


def measure(load: Load, rounds: int) -> dict[str, Any]:
    """Medians of one load, milliseconds per hop (half a frame).

    `beam_ms` runs from the transform to the averaged power; `frames_ms` is copying and bookkeeping, `levels_ms` the map
    in dB. `bare_ms` is transform plus bare real-pair product, in the best layout. The ratios are medians over rounds
    of what was measured in the same round.
    """
    rng = np.random.default_rng(1)
    samples = rng.standard_normal((load.channels, 4 * load.frame), dtype=np.float32)
    settings = load_settings_of(load)
    loop = StageLoop(settings, samples, _clock)
    bare = BareArithmetic(load, samples)
    plain = PlainScript(settings, samples)
    works: tuple[Callable[[], object], ...] = (loop, bare.transform, *bare.products, plain)
    for work in works:
        work()
    gc.collect()
    taken: dict[str, list[float]] = {}
    for turn in range(rounds):
        _round(taken, loop, bare, plain if turn % PLAIN_EVERY == 0 else None)
    return _summary(load, loop.stage.kernel, taken)


def _round(
    taken: dict[str, list[float]], loop: StageLoop, bare: BareArithmetic, plain: PlainScript | None
) -> None:  # fmt: skip
    def note(name: str, milliseconds: float) -> float:
        taken.setdefault(name, []).append(milliseconds)
        return milliseconds

    before = dict(loop.stage.timings)
    hop = note("hop_ms", _timed(loop))
    stages = {name: (now - before[name]) / 1e6 for name, now in loop.stage.timings.items()}
    beam = note("beam_ms", note("transform_ms", stages["transform"]) + note("average_ms", stages["beams"]))
    note("frames_ms", hop - beam - note("levels_ms", stages["levels"]))
    transform = note("bare_transform_ms", _timed(bare.transform))
    product = note("bare_product_ms", min(_timed(layout) for layout in bare.products))
    note("ratio_to_bare", beam / note("bare_ms", transform + product))
    if plain is not None:
        note("faster_than_plain", note("plain_ms", _timed(plain)) / beam)


def _timed(work: Callable[[], object]) -> float:
    """Milliseconds."""
    begun = _clock()
    work()
    return (_clock() - begun) / 1e6


def _summary(load: Load, kernel: str, taken: dict[str, list[float]]) -> dict[str, Any]:
    medians = {name: round(median(values), 3) for name, values in taken.items()}
    return {
        "channels": load.channels, "rate_hz": load.rate_hz, "frame": load.frame, "beams": load.beams,
        "bins": load.bins, "kernel": kernel, "hop_duration_ms": round(1e3 * load.hop_s, 3), **medians,
        "load": round(medians["hop_ms"] / 1e3 / load.hop_s, 4),
    }  # fmt: skip


def _cpu_name() -> str:
    """The processor's name as the system tells it."""
    info = Path("/proc/cpuinfo")
    lines = info.read_text().splitlines() if info.exists() else []
    names = [line.partition(":")[2].strip() for line in lines if line.startswith("model name")]
    return names[0] if names else platform.processor() or platform.machine()


def _title(load: Load) -> str:
    return f"{load.channels} hydrophones, {load.beams} beams, {load.bins} bins, frame {load.frame}"


def _show(console: Console, facts: dict[str, Any], results: list[dict[str, Any]]) -> None:
    blas = ", ".join(f"{pool['internal_api']} {pool['version']} {pool['architecture']}" for pool in facts["blas"])
    console.print(f"{facts['cpu']}; numpy {facts['numpy']}, scipy {facts['scipy']}; {blas}; one thread")
    table = Table(title="Time per hop (half a frame), ms, medians", title_justify="left")
    table.add_column("")
    for load in LOADS:
        table.add_column(f"{load.channels} x {load.beams} x {load.bins}", justify="right")
    lines = (
        ("frames", "frames_ms"), ("transform", "transform_ms"), ("product, taper, power, average", "average_ms"),
        ("map in dB", "levels_ms"), ("whole hop", "hop_ms"), ("hop lasts", "hop_duration_ms"), ("load", "load"),
        ("bare transform and product", "bare_ms"), ("plain script", "plain_ms"),
        ("beam stage / bare", "ratio_to_bare"), ("times faster than plain", "faster_than_plain"),
    )  # fmt: skip
    for title, key in lines:
        table.add_row(title, *(f"{result[key]:.3g}" for result in results))
    console.print(table)
