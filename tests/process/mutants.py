"""Breaks a copy of the service on purpose, one way at a time, and shows that the outside tests notice.

    python tests/process/mutants.py            all of them, a few minutes
    python tests/process/mutants.py cone gap   those whose name holds one of the words
    python tests/process/mutants.py --list

First an unchanged copy goes through the same tests: it must be green, or red would mean nothing.
A mutant is a place in the text and what to write there instead. A place that is not there exactly once is an error:
the code has moved on, and the mutant must follow. Exit status 0: every mutant was red. Not a test itself: pytest does
not collect it.
"""

import os
import shutil
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

HERE = Path(__file__).resolve().parent
ROOT = HERE.parents[1]


@dataclass(frozen=True)
class Mutant:
    """name; edits, (file under service/soundrose, text there, text instead); tests, arguments of pytest."""

    name: str
    edits: tuple[tuple[str, str, str], ...]
    tests: tuple[str, ...]


def one(name: str, file: str, old: str, new: str, *tests: str) -> Mutant:
    return Mutant(name, ((file, old, new),), tests)


WAVES, RULES, HOSTILE = "test_plane_waves.py", "test_feed_rules.py", "test_hostile_feed.py"
NOTES, HOLD, LOAD = "test_notes.py", "test_hold.py", "test_overload.py"
SERVED, FAULTS = "test_served_maps.py", "test_faults.py"
HEALTH, CLOCK = "test_health_states.py", "test_sample_clock.py"

MUTANTS = (
    one("mirrored cone", "beam/steering.py", "tau = np.multiply.outer(self.cos[beams],",
        "tau = np.multiply.outer(-self.cos[beams],", WAVES, "-k", "nearest"),
    one("levels 1 dB off", "beam/average.py", "np.full(len(bins), 2.0 / (", "np.full(len(bins), 2.518 / (",
        WAVES, "-k", "level_is"),
    one("every tenth map missing", "beam/stage.py", "if not self._due(frame):",
        "if not self._due(frame) or frame.first // (frame.length // 2) % 10 == 9:", WAVES, "-k", "one_map"),
    Mutant("NaN let through", (
        ("feed/calibrate.py", "fit = peak <= limit\n", "fit = np.ones(len(peak), bool)\n"),
        ("beam/frames.py", " & (peak <= LOUDEST_UPA)", ""),
    ), (HOSTILE, "-k", "not_a_number")),
    one("one sample lost at each block seam", "feed/assemble.py",
        "samples, position, health = block.values.shape[1], 0, self.health",
        "samples, position, health = block.values.shape[1], 1, self.health", WAVES, "-k", "exact_beamformer"),
    one("24-bit samples put a byte off", "feed/calibrate.py", "[..., 1:] = ", "[..., :3] = ", WAVES, "-k", "i3"),
    one("time of the block, not of the frame", "feed/hop.py", "return block_t + round((index - block_first)",
        "return block_t + 0 * round((index - block_first)", WAVES, "-k", "exact_times"),
    one("overlap of frames not counted", "beam/average.py", "HANN_HALF_OVERLAP = 1.0 / 36.0",
        "HANN_HALF_OVERLAP = 4.0 / 9.0", WAVES, "-k", "averages"),
    one("jump counted as repeat", "feed/sequence.py", 'return self._drop("jump"', 'return self._drop("repeat"',
        HOSTILE, "-k", "by_reason and hold"),
    one("a far index believed at once", "feed/sequence.py", "JUMP_S: Final = 60.0", "JUMP_S: Final = 6.0e15",
        HOSTILE, "-k", "by_reason and hold"),
    one("no restart is ever seen", "feed/sequence.py", "return candidate is not None and candidate.end == first",
        "return False and candidate is not None and candidate.end == first", HOSTILE, "-k", "fifteen"),
    one("overlap not trimmed but taken twice", "feed/intake.py", "verdict.skip", "0 * verdict.skip",
        RULES, "-k", "maps or average"),
    one("trimmed count one short", "feed/sequence.py", "counters.trimmed_samples += skip",
        "counters.trimmed_samples += skip - 1", RULES, "-k", "trimmed"),
    one("late messages not counted", "feed/intake.py", "self.counters.late += 1", "self.counters.late += 0",
        RULES, "-k", "late"),
    one("gap never flagged", "beam/stage.py", "return fresh or frame.since_gap <", "return False and frame.since_gap <",
        RULES, "-k", "flagged"),
    one("average not aged over a gap", "beam/average.py", "exp(-elapsed / self", "exp(-min(elapsed, 512) / self",
        RULES, "-k", "average"),
    one("frame spans a gap", "feed/sequence.py", "verdict = Verdict(breaks=True)\n        elif", "pass\n        elif",
        RULES, "-k", "maps or unused"),
    one("positions not taken", "beam/stage.py", "self._positions = note.positions_m",
        "self._positions = self._positions", NOTES, "-k", "is_right"),
    one("sound speed not taken", "beam/stage.py", "self._sound_speed = speed if", "self._sound_speed = 1500.0 if",
        NOTES, "-k", "is_right"),
    one("messages act at once", "beam/stage.py", "if note.t_ns <= t_ns]", "if note.t_ns <= t_ns + 10**18]",
        NOTES, "-k", "until_the_service or acts"),
    one("beams not rescaled without a hydrophone", "beam/stage.py", "step.gain / left**2 if", "step.gain if",
        "test_web_and_state.py", "-k", "without_the_sick"),
    Mutant("hold does not wait", (
        ("feed/ring.py", "return self._hold and any(", "return False and any("),
        ("feed/ring.py", "        if self._hold:\n            keep_from", "        if False:\n            keep_from"),
    ), (HOLD, "-k", "no_map")),
    one("missed hops not told", "feed/ring.py", "missed += self._end - 1 - band.cursor", "missed += 0", LOAD),
    one("host clock in the last bits", "beam/stage.py", "step.gain / left**2 if",
        "step.gain / left**2 * (1 + 1e-6 * (frame.received_ns % 2)) if", HOLD, "-k", "same_bits"),
    Mutant("children outlive the supervisor", (
        ("child.py", "if not parent:\n            return", "if True:\n            return"),
    ), ("test_start_and_end.py", "-k", "supervisor_is_killed")),
    one("any Host answered", "serve/guard.py", "if len(hosts) != 1 or hosts[0].lower() not in self._hosts:",
        "if len(hosts) != 1:", "test_web_and_state.py", "-k", "foreign"),
    one("field line heard from the other end", "array/geometry.py",
        "positions = (listed - listed.mean(axis=0))[list(channels)]",
        "positions = -(listed - listed.mean(axis=0))[list(channels)]", "test_field_records.py", "-k", "sign"),
    one("decibels averaged on the way out", "product/reduce.py", "power = np.exp(level_db[:, chosen] * _NEPER_PER_DB)",
        "power = np.exp(np.mean(level_db[:, chosen], axis=1, keepdims=True) * _NEPER_PER_DB + 0 * level_db[:, chosen])",
        SERVED),
    one("bytes cut, not rounded", "serve/live_frames.py", "steps = np.rint(", "steps = np.floor(", SERVED),
    one("stuck process left alone", "children.py", "STUCK_S = 2.0", "STUCK_S = 1e9", FAULTS),
    one("restart of a band not flagged", "beam/frames.py", "if (missed or resumed) and not new_run:",
        "if False and not new_run:", FAULTS),
    one("count not kept over a restart of ingest", "feed/process.py",
        "Intake(settings, self._record.read() or None)", "Intake(settings, None)", FAULTS),
    one("health: polarity never turned", "feed/phase.py", "(sign < 0) & (score < -least)", "(sign < -1)",
        HEALTH, "-k", "named"),
    one("health: mirrored places", "feed/phase.py", "for way, other in ((step, 0), (-step, 1)):",
        "for way, other in ((step, 1), (-step, 0)):", HEALTH, "-k", "named"),
    one("health: phases not kept whole", "feed/spectra.py", "kept = spectra[:, self._bins]",
        "kept = np.abs(spectra[:, self._bins])", HEALTH, "-k", "named"),
    one("health: compared with itself", "feed/levels.py", "ambient = np.median(level[:, near], axis=2)",
        "ambient = level", HEALTH, "-k", "named"),
    one("health: compared with the loudest neighbour", "feed/levels.py", "ambient = np.median(level[:, near], axis=2)",
        "ambient = np.max(level[:, near], axis=2)", HEALTH, "-k", "named"),
    one("health: steps not remembered", "feed/latch.py", "self._at = (self._at + 1) % len(self._marks)",
        "self._at = 0", HEALTH, "-k", "named"),
    one("health: exclusion does not win", "feed/judge.py", "codes[conditions[code]] = code",
        "codes[conditions[max(code, 1)]] = max(code, 1)", HEALTH, "-k", "excluded"),
    one("health: the sick stay in use", "feed/judge.py", "| self._reversed.on | self._roaring.on", "", HEALTH,
        "-k", "named"),
    Mutant("health: a hardly better place is enough", (
        ("feed/phase.py", "BETTER: Final = 0.5", "BETTER: Final = 1.1"),
        ("feed/phase.py", "BETTER_EACH: Final = 0.7", "BETTER_EACH: Final = 1.5"),
        ("feed/phase.py", "EXPLAINED: Final = 0.5", "EXPLAINED: Final = 9.0"),
    ), (HEALTH, "-k", "meanwhile or long_watch")),
    one("clock: drift of the other sign", "feed/clock.py", "t_ns - self._t_ns - nominal_ns",
        "nominal_ns - t_ns + self._t_ns", CLOCK),
    one("clock: slopes over the whole span for the half", "feed/clock.py", "(x[-half:] - x[:half])",
        "(x[-1] - x[0])", CLOCK),
    one("clock: jumps not seen", "feed/clock.py", "STEP_MS: Final = 5.0", "STEP_MS: Final = 500.0", CLOCK),
)  # fmt: skip


def copied(mutant: Mutant, folder: Path) -> str:
    """PYTHONPATH of a copy of the service with the mutant in it. ValueError where its place is not found once."""
    for part in ("service", "clients"):
        shutil.copytree(ROOT / part, folder / part, ignore=shutil.ignore_patterns("__pycache__"))
    for file, old, new in mutant.edits:
        path = folder / "service" / "soundrose" / file
        text = path.read_text(encoding="utf-8")
        if (found := text.count(old)) != 1:
            raise ValueError(f"{file}: {old!r} is there {found} times, not once")
        path.write_text(text.replace(old, new), encoding="utf-8")
    return os.pathsep.join([str(folder / "service"), str(folder / "clients" / "python")])


def judged(mutant: Mutant) -> tuple[str, str]:
    """red, GREEN(!) or ERROR, and the first line that says why."""
    with tempfile.TemporaryDirectory() as folder:
        try:
            path = copied(mutant, Path(folder))
        except (OSError, ValueError) as error:
            return "ERROR", str(error)
        command = [sys.executable, "-m", "pytest", "-q", "-x", "--tb=line", "-p", "no:cacheprovider", *mutant.tests]
        environment = {**os.environ, "SERVICE_PYTHONPATH": path}
        ended = subprocess.run(command, env=environment, cwd=HERE, capture_output=True, text=True, check=False)
    lines = [line for line in ended.stdout.splitlines() if line.startswith(("FAILED", "ERROR"))]
    if ended.returncode == 1 and lines:
        return "red", lines[0].split("::", 1)[-1]
    return ("GREEN(!)", "no test noticed") if ended.returncode == 0 else ("ERROR", ended.stdout[-300:])


def unchanged_is_green(chosen: list[Mutant]) -> bool:
    """Whether the copy without a mutant passes all the files of tests that the chosen ones are judged by."""
    files = sorted({mutant.tests[0] for mutant in chosen})
    outcome, why = judged(Mutant("unchanged", (), tuple(files)))
    print(f"{'(unchanged)':42} {len(files)} files {outcome if outcome != 'GREEN(!)' else 'green'}  {why}", flush=True)
    return outcome == "GREEN(!)"


def main(words: list[str]) -> int:
    """Run the mutants whose name holds one of the words (all without words) and print a line for each."""
    if words == ["--list"]:
        print("\n".join(mutant.name for mutant in MUTANTS))
        return 0
    chosen = [mutant for mutant in MUTANTS if not words or any(word in mutant.name for word in words)]
    if not chosen or not unchanged_is_green(chosen):
        return 1
    outcomes = []
    for mutant in chosen:
        begin = time.monotonic()
        outcome, why = judged(mutant)
        outcomes.append(outcome)
        took = time.monotonic() - begin
        print(f"{mutant.name:42} {mutant.tests[0]:24} {outcome:9} {took:5.1f} s  {why}", flush=True)
    print(f"{outcomes.count('red')} of {len(outcomes)} red")
    return 0 if set(outcomes) == {"red"} else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
