"""`drop` at three times what fits: what comes is right, soon, and everything that did not come is counted."""

import threading
import time
from bisect import bisect_right
from dataclasses import dataclass, field
from pathlib import Path

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
    note,
    plane_wave,
    sensor_noise,
    tapered_weights,
)  # fmt: skip

ARRAY = ArrayModel(rate_hz=16_000.0, spacing_m=0.25)
FRAME, HOP, BEAMS, MAP_BEAMS, AVERAGE_S = 2048, 1024, 4033, 97, 0.5  # about as much as a core does in real time
WEIGHTS = tapered_weights(ARRAY.channels)
PERIOD, BLOCK = 32_768, 1024
SECOND = 10**9
START = 1_796_133_600 * SECOND
SEA = plane_wave(Wave(64.0, 100.0, (100.0, 7000.0)), ARRAY.positions_m, PERIOD, ARRAY.rate_hz)
SEA += sensor_noise(ARRAY.channels, PERIOD, ARRAY.rate_hz, 75.0)
DATA = [
    encode_samples(SEA[:, at : at + BLOCK] / ARRAY.full_scale_upa, "i2", "channel") for at in range(0, PERIOD, BLOCK)
]
HEAVY = ARRAY.band(band_hz=[50.0, 7200.0], frame=FRAME, beams=BEAMS, shading=list(WEIGHTS), average_s=AVERAGE_S,
                   map_beams=MAP_BEAMS)  # fmt: skip


@dataclass
class Sent:
    """What was sent up to when (monotonic seconds)."""

    when: list[float] = field(default_factory=list)
    end: list[int] = field(default_factory=list)

    def newest(self, moment: float) -> int:
        """Index just after the newest sample sent by then."""
        at = bisect_right(self.when, moment)
        return self.end[at - 1] if at else 0


def feed(feeder: Feeder, blocks: int, pace: float | None, sent: Sent) -> None:
    """That many blocks at `pace` times real time (None: as fast as taken), then `end`."""
    clock, begin = threading.Event(), time.monotonic()
    for i in range(blocks):
        if pace:
            clock.wait(max(0.0, begin + i * BLOCK / ARRAY.rate_hz / pace - time.monotonic()))
        block = Block(i * BLOCK, BLOCK, START + round(i * BLOCK * SECOND / ARRAY.rate_hz), DATA[i % len(DATA)])
        feeder.send(block_message(ARRAY, block, "load", type="i2"))
        sent.when.append(time.monotonic())
        sent.end.append((i + 1) * BLOCK)
    feeder.send(note(ARRAY, "end", run="load"))


def speed_that_fits(folder: Path) -> float:
    """Times real time that the band works at when it is waited for, from its own maps."""
    blocks = 80
    with Service(ARRAY.settings(HEAVY), folder) as service, service.listener() as listener, service.feeder() as feeder:
        feed(feeder, blocks, None, Sent())
        maps = listener.wait_count("map/main", blocks - 1, 60)
        steady = maps[20:]
        return (len(steady) - 1) * HOP / ARRAY.rate_hz / (steady[-1].came - steady[0].came)


@dataclass
class Outcome:
    pace: float  # times real time that the feed came at
    sent: Sent
    maps: list[Message]
    band: dict
    expected: int  # maps of an unhurried feed

    @property
    def taken(self) -> int:
        """Hops that the band took."""
        return self.expected + 1 - self.band["dropped_hops"]

    @property
    def overload(self) -> float:
        """Hops sent for each that was taken: how many times too much it was in the end."""
        return (self.expected + 1) / self.taken


def overload_run(folder: Path, pace: float) -> Outcome:
    """About eight seconds of host time at that pace, and never less than ten of feed time."""
    blocks = max(160, round(8 * pace * ARRAY.rate_hz / BLOCK))  # enough feed for some gaps, however slow the machine
    settings, sent = ARRAY.settings(HEAVY, overload="drop"), Sent()
    with Service(settings, folder) as service, service.listener() as listener, service.feeder() as feeder:
        feed(feeder, blocks, pace, sent)
        status = listener.wait_status(
            "waiting, all samples, and the band at rest",
            lambda s: s["samples"] == blocks * BLOCK and s["state"] == "waiting" and accounted(s, blocks),
            20,
        )
        maps = listener.wait_count("map/main", status["bands"]["main"]["maps"])
        return Outcome(pace, sent, maps, status["bands"]["main"], blocks - 1)


@pytest.fixture(scope="module")
def outcome(tmp_path_factory: pytest.TempPathFactory) -> Outcome:
    """At three times what fits. Where the machine was busy with other things while one of the two was measured, the
    run shows it by what was taken, and is done again at a pace corrected by that."""
    pace = 3 * speed_that_fits(tmp_path_factory.mktemp("fits"))
    for _ in range(4):
        outcome = overload_run(tmp_path_factory.mktemp("drop"), pace)
        if 2.6 <= outcome.overload <= 3.4:
            break
        pace *= 3 / outcome.overload
    return outcome


def accounted(status: dict, blocks: int) -> bool:
    band = status["bands"]["main"]
    return band["maps"] + band["dropped_hops"] + band["gaps"] == blocks - 1


def test_feed_was_truly_too_much(outcome: Outcome) -> None:
    took = outcome.sent.when[-1] - outcome.sent.when[0]
    assert outcome.sent.end[-1] / ARRAY.rate_hz / took > 0.8 * outcome.pace, "the source was held back"
    assert outcome.overload > 2.5, f"{outcome.overload:.2f} times what fits, at {outcome.pace:.2f} times real time"


def test_maps_missing_are_dropped_hops_and_gaps(outcome: Outcome) -> None:
    missing = outcome.expected - len(outcome.maps)
    assert missing == outcome.band["dropped_hops"] + outcome.band["gaps"]
    assert len(outcome.maps) == outcome.band["maps"]


def test_at_least_a_quarter_of_the_maps_come(outcome: Outcome) -> None:
    """At three times what fits a third of the hops can be taken; three quarters of these must end a whole frame.

    Judged by the hops that were taken, so that a machine busy with other things during this test does not decide.
    """
    told = f"{len(outcome.maps)} maps of {outcome.taken} hops taken, {outcome.expected} sent"
    assert len(outcome.maps) >= 0.75 * outcome.taken, told


def test_maps_are_of_whole_frames_in_the_hops_that_came(outcome: Outcome) -> None:
    """Hop = half frame: every frame begins at a hop, in order, none twice; breaks are at most the band's gaps."""
    firsts = first_samples(outcome)
    assert all(first % HOP == 0 for first in firsts)
    steps = np.diff(firsts)
    assert (steps > 0).all()
    assert np.sum(steps > HOP) <= outcome.band["gaps"]
    assert all(m.header["t_end"] - m.header["t"] == FRAME * SECOND // 16_000 for m in outcome.maps)


def first_samples(outcome: Outcome) -> list[int]:
    return [round((m.header["t"] - START) * ARRAY.rate_hz / SECOND) for m in outcome.maps]


def test_each_map_is_near_the_newest_sample(outcome: Outcome) -> None:
    """Nearly all within 1 s and a frame of feed time; every one within 1 s of host time, which is `pace` as much."""
    ages = [(outcome.sent.newest(m.came) - first - FRAME) / ARRAY.rate_hz
            for m, first in zip(outcome.maps, first_samples(outcome), strict=True)]  # fmt: skip
    told = f"oldest {max(ages):.2f} s, median {np.median(ages):.2f} s"
    assert np.quantile(ages, 0.95) <= 1.0 + FRAME / ARRAY.rate_hz, told
    assert max(ages) <= max(1.0, outcome.pace) + FRAME / ARRAY.rate_hz, told


def test_maps_that_come_hold_what_their_hops_hold(outcome: Outcome) -> None:
    """Levels against float64 beams: content aged over what was missed, flagged as a gap while that is young."""
    firsts = first_samples(outcome)[:120]
    exact = ExactMap(SEA, ARRAY.positions_m[:, 0], WEIGHTS, ARRAY.rate_hz, ARRAY.sound_speed_m_s)
    header = outcome.maps[0].header
    share = -(-BEAMS // MAP_BEAMS)
    grid = np.linspace(1, -1, BEAMS)
    group = int(np.argmin(np.abs(np.cos(np.radians(header["cone_deg"])) - np.cos(np.radians(64.0)))))
    members = grid[group * share : (group + 1) * share]
    assert np.cos(np.radians(header["cone_deg"][group])) == pytest.approx(members.mean(), abs=1e-9)
    powers = [10 ** (exact.rolling_db(u, firsts, FRAME, AVERAGE_S) / 10) for u in members]
    own = 10 * np.log10(np.mean(powers, axis=0))
    begin = round(header["f0_hz"] / header["df_hz"])
    for message, level in zip(outcome.maps, own, strict=False):
        measured = message.level_db[group]
        wanted = level[begin : begin + len(measured)]
        assert np.max(np.abs(measured - wanted)[wanted > 75]) < 0.1, message.header["t"]


def test_a_map_after_missed_hops_says_gap(outcome: Outcome) -> None:
    firsts = first_samples(outcome)
    after = [m for m, step in zip(outcome.maps[1:], np.diff(firsts), strict=True) if step > HOP]
    assert len(after) > 3
    assert all(m.header["limits"]["gap"] for m in after)
    assert outcome.maps[0].header["limits"]["gap"] is False
