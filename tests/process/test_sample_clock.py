"""Drift and jumps of the sample clock, read from outside."""

from collections.abc import Iterator

import numpy as np
import pytest
from rig import ArrayModel, Block, Service, block_message, encode_samples

ARRAY = ArrayModel(channels=8, spacing_m=1.0, rate_hz=1000.0)
BAND = ARRAY.band(band_hz=[20.0, 400.0], frame=512, beams=9)
START = 1_796_133_600 * 10**9
BLOCK, MINUTES_10 = 50, 600


@pytest.fixture(scope="module")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Service]:
    with Service(ARRAY.settings(BAND), tmp_path_factory.mktemp("clock")) as service:
        yield service


def blocks(seconds: int, ppm: float, start: int, step_ms: float = 0.0) -> Iterator[Block]:
    """Samples that each take `ppm` millionths longer than they should, stamped with 1 ms of jitter; a step half way."""
    rng = np.random.default_rng(17)
    sea = 0.01 * rng.standard_normal((8, 4096))
    data = encode_samples(sea[:, :BLOCK], "i4", "channel")
    for first in range(0, int(seconds * ARRAY.rate_hz), BLOCK):
        seconds_s = first / ARRAY.rate_hz * (1 + ppm * 1e-6)
        moved_ms = step_ms if first >= seconds * ARRAY.rate_hz / 2 else 0.0
        t_ns = start + round(1e9 * seconds_s + 1e6 * (rng.standard_normal() + moved_ms))
        yield Block(first, BLOCK, t_ns, data)


@pytest.mark.parametrize(("run", "ppm"), [("slow", 20.0), ("fast", -20.0)])
def test_drift_of_20_ppm_is_read_within_1_ppm_in_ten_minutes(service: Service, run: str, ppm: float) -> None:
    """Positive: the samples take longer than the nominal rate says."""
    start = START + (run == "fast") * 1000 * 10**9
    with service.listener("status") as listener, service.feeder() as feeder:
        for block in blocks(MINUTES_10, ppm, start):
            feeder.send(block_message(ARRAY, block, run))
        told = listener.wait_status(
            "ten minutes judged", lambda s: s["run"] == run and s["next"] == MINUTES_10 * 1000, 30
        )["clock"]
    assert told["span_s"] > 590
    assert told["drift_ppm"] == pytest.approx(ppm, abs=1.0)
    assert 0 < told["sigma_ppm"] < 0.5
    assert told["t_sigma_ms"] == pytest.approx(1.0, rel=0.3)
    assert told["against"] == "t"


def test_step_of_the_times_is_a_jump_and_not_a_drift(service: Service) -> None:
    with service.listener("status") as listener, service.feeder() as feeder:
        before = listener.of("status")[-1].header["clock"]["jumps"]
        for block in blocks(120, 20.0, START + 3000 * 10**9, step_ms=40.0):
            feeder.send(block_message(ARRAY, block, "step"))
        told = listener.wait_status("both minutes", lambda s: s["run"] == "step" and s["next"] == 120_000, 30)["clock"]
    assert told["jumps"] == before + 1
    assert 50 < told["span_s"] < 62
    assert told["drift_ppm"] == pytest.approx(20.0, abs=15.0)
