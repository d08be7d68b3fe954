"""What the bench compares does the same job, and the command prints what it measured."""

import json
from io import StringIO

import numpy as np
import pytest
from rich.console import Console

import soundrose.bench as bench
from soundrose.beam.workload import LOADS, BareArithmetic, Load, PlainScript, StageLoop, load_settings_of

SMALL = Load(channels=9, rate_hz=16000.0, frame=1024, beams=21, bins=150)


def samples(load):
    return np.random.default_rng(0).standard_normal((load.channels, 4 * load.frame), dtype=np.float32)


def test_loads_are_those_of_the_brief():
    assert [(load.channels, load.frame, load.beams) for load in LOADS] == [
        (48, 4096, 145), (64, 8192, 181), (128, 8192, 361),
    ]  # fmt: skip
    for load in LOADS:
        assert load_settings_of(load).bands[0].band_hz[1] <= 0.45 * load.rate_hz


def test_every_call_of_the_stage_makes_one_map_of_the_stated_size():
    ticks = iter(range(10**6))
    loop = StageLoop(load_settings_of(SMALL), samples(SMALL), lambda: next(ticks))
    assert [loop() for _ in range(20)] == [1] * 20
    assert loop.stage._content.shape == (2, 150, 11)
    assert set(loop.stage.timings) == {"transform", "beams", "levels"}


def test_layouts_of_the_bare_product_are_the_same_product():
    bare = BareArithmetic(SMALL, samples(SMALL))
    bare._turned[..., 5:] = 0
    bare._turned[..., :5] = bare._pairs_inside
    outs = []
    for product, out in zip(bare.products, (bare._rows_out, bare._rows_out, bare._columns_out), strict=True):
        product()
        outs.append(out[:22].copy())  # the last piece, second table
    np.testing.assert_allclose(outs[0], outs[1], atol=1e-5)
    np.testing.assert_allclose(outs[0], outs[2].swapaxes(1, 2), atol=1e-5)


def test_plain_script_finds_what_the_stage_finds():
    """One frame of a broadside wave, band power of each loud beam (the script tapers before it delays)."""
    settings = load_settings_of(SMALL)
    noise = np.tile(samples(SMALL)[0], (9, 1))
    plain = PlainScript(settings, noise)
    plain()
    loop = StageLoop(settings, noise, lambda: 0)
    loop()
    ours = np.empty((21, 150), dtype=np.float32)
    loop.stage._kernel.in_order(loop.stage._content, ours)
    ours *= loop.stage._kernel.scale / loop.stage._weights.total
    theirs = plain._average.T / 0.06
    ours, theirs = ours.sum(axis=1), theirs.sum(axis=1)
    loud = theirs > 0.25 * theirs.max()
    assert 3 <= loud.sum() < 21
    assert np.abs(10 * np.log10(ours[loud] / theirs[loud])).max() < 0.2


@pytest.mark.parametrize("as_json", [True, False])
def test_command_prints_every_load(monkeypatch, as_json):
    monkeypatch.setattr(bench, "LOADS", (SMALL, SMALL))
    monkeypatch.setattr(bench, "ROUNDS", 3)
    out = StringIO()
    assert bench.run_bench(as_json, Console(file=out, width=200)) == 0
    text = out.getvalue()
    if not as_json:
        assert "times faster than plain" in text
        assert "9 x 21 x 150" in text
        return
    found = json.loads(text)
    assert found["machine"]["cpu"]
    assert all(pool["num_threads"] == 1 for pool in found["machine"]["blas"])
    assert len(found["loads"]) == 2
    for load in found["loads"]:
        assert load["kernel"] == "pairs"
        assert load["hop_duration_ms"] == 32.0
        assert load["hop_ms"] >= load["transform_ms"] > 0
        assert min(load["ratio_to_bare"], load["faster_than_plain"], load["bare_ms"], load["load"]) > 0
