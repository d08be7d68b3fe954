"""One scripted feed that meets every rule of the index and of the clock; counts and maps are worked out beside it."""

from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest
from rig import (
    ArrayModel,
    Block,
    ExactMap,
    Feeder,
    Message,
    Service,
    Wave,
    block_message,
    encode_samples,
    frame_maps,
    join_blocks,
    note,
    plane_wave,
    tapered_weights,
)  # fmt: skip

ARRAY = ArrayModel()
FRAME, AVERAGE_S, CONE = 1024, 0.5, 64.0
PERIOD = 32000
WEIGHTS = tapered_weights(32)
SEA = plane_wave(Wave(CONE), ARRAY.positions_m, PERIOD, ARRAY.rate_hz)
MINUTE = 60 * 8000
SECOND = 10**9


@dataclass
class Script:
    """Sends blocks and writes down, by the rule named at each call, what must come of them."""

    feeder: Feeder
    run: str = "a"
    next: int = 0
    t: int = 1_796_133_600 * SECOND  # of the sample `next`
    kept: list[tuple[str, int, int, int]] = field(default_factory=list)
    counts: Counter[str] = field(default_factory=Counter)
    dropped: Counter[str] = field(default_factory=Counter)

    def send(self, first: int, samples: int, t: int, run: str | None = None) -> None:
        """A block as it is; the sea is a function of the index, so that repeats repeat."""
        values = SEA[:, np.arange(first, first + samples) % PERIOD] / ARRAY.full_scale_upa
        block = Block(first, samples, t, encode_samples(values, "i3", "channel"))
        self.feeder.send(block_message(ARRAY, block, run or self.run, type="i3"))

    def good(self, samples: int, skip: int = 0, overlap: int = 0) -> None:
        """The block at hand; `skip` samples left out before it, `overlap` samples sent once more."""
        self.next, self.t = self.next + skip, self.t + self.lasting(skip)
        self.send(self.next - overlap, samples + overlap, self.t - self.lasting(overlap))
        self.accept(samples, overlap)
        self.counts += Counter(gaps=int(skip > 0), lost_samples=skip, trimmed_samples=overlap)

    def accept(self, samples: int, overlap: int = 0) -> None:
        self.kept.append((self.run, self.next, samples, self.t))
        self.counts += Counter(blocks=1, samples=samples)
        self.next, self.t = self.next + samples, self.t + self.lasting(samples)

    def restart(self, first: int, step: int, reason: str) -> None:
        """Two blocks without a seam from `first`, time stepped by `step`: the one is dropped, the other goes on."""
        self.next, self.t = first, self.t + step
        self.send(first, 1000, self.t)
        self.dropped[reason] += 1
        self.next, self.t = first + 1000, self.t + self.lasting(1000)
        self.send(self.next, 1000, self.t)
        self.counts["restarts"] += 1
        self.kept.append((f"end {len(self.kept)}", 0, 0, 0))  # framing begins anew
        self.accept(1000)

    def lasting(self, samples: int) -> int:
        return round(samples * SECOND / ARRAY.rate_hz)


def perform(script: Script) -> None:
    """The feed, rule by rule."""
    for _ in range(20):
        script.good(1000)
    script.good(1000, skip=500)  # gap
    for _ in range(30):
        script.good(700)
    script.good(700, overlap=300)  # overlap
    script.send(script.next - 5000, 1000, script.t - script.lasting(5000))  # wholly before
    script.dropped["repeat"] += 1
    script.good(1000)
    script.send(script.next + MINUTE + 1, 1000, script.t + 61 * SECOND)  # more than 60 s ahead
    script.dropped["jump"] += 1
    script.good(1000, skip=MINUTE)  # 60 s to the sample: a gap
    script.t += 9_000_000  # 9 ms is no step
    script.good(1000)
    script.t += 20_000_000  # 20 ms is one, once
    script.counts["clock_jumps"] += 1
    for _ in range(5):
        script.good(1000)
    for _ in range(10):
        script.good(1)  # blocks of one sample
    script.good(8000)  # and of a second
    script.restart(first=10**12, step=2 * SECOND, reason="jump")
    script.good(1500)
    script.restart(first=0, step=2 * SECOND, reason="repeat")
    script.good(1500)
    script.restart(first=script.next, step=-100 * SECOND, reason="time")
    script.good(3000)
    runs(script)


def runs(script: Script) -> None:
    """Another run, an end, and the same name again."""
    script.run, script.next, script.t = "b", 77, script.t + SECOND
    script.good(5000)
    script.send(5000, 1000, script.t, run="a")
    script.feeder.send(note(ARRAY, "end", run="a"))
    script.dropped["old_run"] += 2
    script.good(100)
    script.feeder.send(note(ARRAY, "navigation", t=script.t - 5 * SECOND, sound_speed_m_s=1500.0))
    script.counts["late"] += 1
    script.good(1100)
    script.feeder.send(note(ARRAY, "end", run="b"))
    script.feeder.send(note(ARRAY, "end", run="b"))
    script.dropped["old_run"] += 1
    script.kept.append(("end of b", 0, 0, 0))
    script.next, script.t = 0, script.t + SECOND
    script.good(4000)
    script.feeder.send(note(ARRAY, "end", run="b"))


@pytest.fixture(scope="module")
def outcome(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[Script, dict[str, Any], list[Message]]]:
    """The script, the status after it, the maps."""
    band = ARRAY.band(frame=FRAME, average_s=AVERAGE_S, shading=list(WEIGHTS))
    folder = tmp_path_factory.mktemp("rules")
    with Service(ARRAY.settings(band), folder) as service, service.listener() as listener, service.feeder() as feeder:
        script = Script(feeder)
        perform(script)
        listener.wait_count("map/main", len(expected_maps(script)[0]))
        status = listener.wait_status(
            "the last sample, and waiting",
            lambda s: s["samples"] >= script.counts["samples"] and s["state"] == "waiting",
        )
        yield script, status, listener.of("map/main")


def expected_maps(script: Script) -> tuple[list[Any], int]:
    return frame_maps(join_blocks(script.kept), FRAME, ARRAY.rate_hz)


Outcome = tuple[Script, dict[str, Any], list[Message]]


@pytest.mark.parametrize(
    "counter",
    ["blocks", "samples", "gaps", "lost_samples", "trimmed_samples", "restarts", "clock_jumps", "late"],
)  # fmt: skip
def test_counter_is_exact(outcome: Outcome, counter: str) -> None:
    script, status, _ = outcome
    assert script.counts[counter] > 0
    assert status[counter] == script.counts[counter]


def test_dropped_messages_are_counted_by_reason(outcome: Outcome) -> None:
    script, status, _ = outcome
    assert {reason: n for reason, n in status["dropped"].items() if n} == dict(script.dropped)


def test_samples_that_fill_no_frame_are_counted(outcome: Outcome) -> None:
    script, status, _ = outcome
    assert status["unused_samples"] == expected_maps(script)[1]


def test_maps_are_those_of_the_framing_rule(outcome: Outcome) -> None:
    script, _, maps = outcome
    expected, _ = expected_maps(script)
    assert [(m.header["run"], m.header["t"]) for m in maps] == [(m.run, m.t) for m in expected]


def test_end_of_a_map_never_goes_back_within_a_run_but_at_a_restart(outcome: Outcome) -> None:
    script, _, maps = outcome
    for earlier, later, model in zip(maps[:-1], maps[1:], expected_maps(script)[0][1:], strict=True):
        back = later.header["t_end"] <= earlier.header["t_end"]
        assert not back or model.number == 0, later.header


def test_gap_is_flagged_while_it_is_young(outcome: Outcome) -> None:
    """Flagged from the first map after it; no longer once it is three time constants (and a frame) old."""
    script, _, maps = outcome
    after_gap: dict[Any, bool] = {}
    for before, stretch in zip(join_blocks(script.kept)[:-1], join_blocks(script.kept)[1:], strict=True):
        after_gap[stretch] = before.run == stretch.run
    young, old = 0, 0
    for message, model in zip(maps, expected_maps(script)[0], strict=True):
        age_s = (model.first - model.stretch.first) / ARRAY.rate_hz
        flagged = message.header["limits"]["gap"]
        if not after_gap.get(model.stretch, False) or age_s > 3 * AVERAGE_S:
            old += 1
            assert flagged is False, f"{model}"
        elif age_s + FRAME / ARRAY.rate_hz < 3 * AVERAGE_S:
            young += 1
            assert flagged is True, f"{model}"
    assert young > 10
    assert old > 10


def test_average_goes_on_over_a_gap_and_begins_anew_with_a_run(outcome: Outcome) -> None:
    """Level of the beam nearest the wave against float64 beams averaged by the rule, every map."""
    script, _, maps = outcome
    models = expected_maps(script)[0]
    exact = ExactMap(SEA, ARRAY.positions_m[:, 0], WEIGHTS, ARRAY.rate_hz, ARRAY.sound_speed_m_s)
    beam = int(np.argmin(np.abs(maps[0].cosines - np.cos(np.radians(CONE)))))
    first_bin = round(maps[0].header["f0_hz"] / maps[0].header["df_hz"])
    bins = slice(first_bin + 10, first_bin + maps[0].header["shape"][1] - 10)
    for begin, end in unbroken_averages(script, models):
        starts = [m.first for m in models[begin:end]]
        own = exact.rolling_db(float(maps[0].cosines[beam]), starts, FRAME, AVERAGE_S)[:, bins]
        for message, level in zip(maps[begin:end], own, strict=True):
            measured = message.level_db[beam, 10 : message.header["shape"][1] - 10]
            assert np.max(np.abs(measured - level)[level > 80]) < 0.05, message.header


def unbroken_averages(script: Script, models: list[Any]) -> list[tuple[int, int]]:
    """Ranges of maps that share an average: a gap does not end one, an end, another run or a restart does."""
    group, groups = 0, {}
    stretches = join_blocks(script.kept)
    for i, stretch in enumerate(stretches):
        group += int(i > 0 and stretches[i - 1].run != stretch.run)
        groups[stretch] = group
    numbers = [groups[m.stretch] for m in models]
    edges = [i for i in range(len(numbers)) if i == 0 or numbers[i] != numbers[i - 1]]
    return list(zip(edges, [*edges[1:], len(numbers)], strict=True))
