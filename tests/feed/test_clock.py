"""The sample clock against message times and the host: drift, spread, jumps, and what survives a restart."""

import numpy as np
import pytest

from soundrose.feed.clock import SampleClock
from soundrose.feed.intake import Intake, snapshot_facts

RATE, BLOCK, T0 = 16_000.0, 1000, 1_796_133_600 * 10**9


def fed(seconds, ppm=0.0, jitter_ms=1.0, seed=1, host=None, steps=(), clock=None, epoch=0):
    """A clock that took blocks with Gaussian jitter; steps : (at second, milliseconds)."""
    rng = np.random.default_rng(seed)
    clock = clock or SampleClock(RATE)
    for first in range(0, int(seconds * RATE), BLOCK):
        true_s = first / RATE * (1 + ppm * 1e-6)
        moved_ms = sum(ms for at, ms in steps if first / RATE >= at)
        t_ns = T0 + round(1e9 * true_s + 1e6 * (moved_ms + jitter_ms * rng.standard_normal()))
        clock.push(epoch, first, t_ns, host(true_s, rng) if host else 0)
    return clock


@pytest.mark.parametrize(("ppm", "seed"), [(20.0, 1), (-20.0, 2), (0.0, 3), (150.0, 4)])
def test_drift_is_read_within_1_ppm_in_10_minutes(ppm, seed):
    """Jitter of 1 ms in every block's time, as a source that stamps in software has."""
    facts = fed(600, ppm, seed=seed).facts()
    assert facts["drift_ppm"] == pytest.approx(ppm, abs=1.0)
    assert facts["span_s"] == pytest.approx(598, abs=2)
    assert facts["t_sigma_ms"] == pytest.approx(1.0, rel=0.15)
    assert facts["jumps"] == 0


def test_stated_spread_is_that_of_repeated_runs():
    """Sixty runs of one minute: the drifts scatter as much as each says, within the 30 % that sixty runs can tell."""
    facts = [fed(60, 20.0, seed=100 + run).facts() for run in range(60)]
    scatter = np.std([one["drift_ppm"] for one in facts])
    assert np.median([one["sigma_ppm"] for one in facts]) == pytest.approx(scatter, rel=0.3)


def test_a_tenth_of_wild_times_moves_the_drift_little():
    clock, rng = SampleClock(RATE), np.random.default_rng(5)
    for second in range(300):
        wild = 3_000_000 if second % 10 == 0 else 0
        for part in range(10):
            first = (10 * second + part) * 1600
            t_ns = T0 + round(first / RATE * (1 + 20e-6) * 1e9 + 1e5 * rng.standard_normal()) + wild
            clock.push(0, first, t_ns, 0)
    assert clock.facts()["drift_ppm"] == pytest.approx(20.0, abs=1.0)


def test_one_second_of_times_off_is_no_jump_but_a_step_that_stays_is():
    passing = fed(60, steps=((30.0, 40.0), (31.0, -40.0))).facts()
    assert (passing["jumps"], passing["span_s"]) == (0, pytest.approx(58, abs=2))
    stays = fed(60, 20.0, steps=((30.0, 40.0),)).facts()
    assert stays["jumps"] == 1
    assert stays["span_s"] == pytest.approx(28, abs=2)
    assert stays["drift_ppm"] == pytest.approx(20.0, abs=6 * stays["sigma_ppm"] + 1)


def test_nothing_is_said_in_the_first_seconds():
    facts = fed(8).facts()
    assert (facts["drift_ppm"], facts["sigma_ppm"], facts["t_sigma_ms"], facts["host"]) == (None,) * 4


def test_new_run_begins_anew_and_keeps_the_jumps():
    clock = fed(60, steps=((30.0, 40.0),))
    fed(5, clock=clock, epoch=1)
    assert clock.facts()["drift_ppm"] is None
    assert clock.facts()["jumps"] == 1


def late(true_s, rng):
    """Receipt up to 20 ms late, seldom at once; the host's clock gains 5 ppm."""
    return 10**12 + round(1e9 * true_s * (1 + 5e-6) + 1e6 * 20 * rng.random() ** 0.5)


def test_host_is_judged_by_the_least_late_receipts():
    facts = fed(600, 20.0, host=late).facts()["host"]
    assert facts["drift_ppm"] == pytest.approx(25.0, abs=3.0)


def test_recording_played_fast_has_no_drift_against_the_host():
    facts = fed(60, 20.0, host=lambda true_s, rng: 10**12 + round(1e8 * true_s)).facts()
    assert facts["host"] is None
    assert facts["drift_ppm"] is not None


def send_seconds(source, seconds, ppm, begin=0):
    rate = source.settings.feed.rate_hz
    for first in range(int(begin * rate), int((begin + seconds) * rate), 100):
        source.block(first, 100, t=source.t(first) + round(first / rate * ppm * 1e3))


def test_clock_stands_in_the_snapshot_and_jumps_survive_a_restart(source_for):
    source = source_for()
    assert snapshot_facts(b"")["clock"] == source.intake.clock.facts()
    send_seconds(source, 20, 20.0)
    send_seconds(source, 20, 2020.0, begin=20)
    facts = snapshot_facts(source.intake.snapshot())["clock"]
    assert facts["jumps"] == 1
    again = Intake(source.settings, source.intake.snapshot())
    facts = snapshot_facts(again.snapshot())["clock"]
    assert (facts["jumps"], facts["drift_ppm"]) == (1, None)


def test_drift_of_a_feed_without_jitter_is_exact(source_for):
    source = source_for()
    send_seconds(source, 30, 20.0)
    assert snapshot_facts(source.intake.snapshot())["clock"]["drift_ppm"] == pytest.approx(20.0, abs=0.01)


def test_receipt_changes_nothing_downstream(source_for):
    """The same blocks received at other moments: the same hops but for the stamp, the same judgements."""
    outs = []
    for stretch in (0, 7):
        source, out = source_for(), []
        for first in range(0, 3000, 100):
            parts = source_for_block(source, first)
            out += source.intake.push(parts, received_ns=1 + first * (1000 + stretch))
        outs.append([getattr(item, "header", None) or item.samples.tobytes() for item in out])
    assert outs[0] == outs[1]


def source_for_block(source, first):
    from soundrose.feed.messages import encode_samples

    return encode_samples("aft", "a", first, source.t(first), 1000.0, source.signal(first, 100), type="i2")
