"""The tools of these tests, tested first: a wrong tool would blame, or clear, the wrong side."""

import tomllib

import numpy as np
import pytest
from rig import (
    ArrayModel,
    ExactMap,
    Wave,
    cut_blocks,
    encode_samples,
    frame_maps,
    half_power_width,
    join_blocks,
    peak_cosine,
    plane_wave,
    tapered_weights,
    toml_text,
)  # fmt: skip

ARRAY = ArrayModel()
PERIOD = 16384


@pytest.mark.parametrize("layout", ["channel", "sample"])
@pytest.mark.parametrize(("kind", "step"), [("i2", 2.0**-15), ("i3", 2.0**-23), ("i4", 2.0**-31), ("f4", 2.0**-24)])
def test_encoded_samples_read_back_within_half_a_step(kind: str, step: float, layout: str) -> None:
    values = np.random.default_rng(3).uniform(-0.99, 0.99, (5, 37))
    raw = encode_samples(values, kind, layout)
    if kind == "i3":
        wide = np.zeros((5 * 37, 4), np.uint8)
        wide[:, 1:] = np.frombuffer(raw, np.uint8).reshape(-1, 3)
        flat = wide.view("<i4").ravel() / 2.0**31
    else:
        flat = np.frombuffer(raw, "<" + kind) * (1.0 if kind == "f4" else 2.0 ** (1 - 8 * int(kind[1])))
    back = flat.reshape(5, 37) if layout == "channel" else flat.reshape(37, 5).T
    assert np.max(np.abs(back - values)) <= step / 2 * (1 + 1e-9)


def test_encoding_refuses_to_clip() -> None:
    with pytest.raises(ValueError, match="clip"):
        encode_samples(np.full((2, 3), 1.0), "i2", "channel")


def test_forward_hydrophone_hears_a_wave_from_forward_first() -> None:
    """Whole-sample spacing: c = 1500 m/s, 8 kHz, 0.1875 m is one sample, so endfire is a shift by one each."""
    x = np.array([[0.1875, 0, 0], [0.0, 0, 0], [-0.1875, 0, 0]])
    sea = plane_wave(Wave(0.0), x, PERIOD, 8000.0)
    assert np.allclose(sea[0][:-1], sea[1][1:], atol=1e-6 * np.max(sea))
    assert np.allclose(sea[1][:-1], sea[2][1:], atol=1e-6 * np.max(sea))


def test_wave_has_the_level_asked_for() -> None:
    """100 dB over 100 to 2000 Hz is 100 + 10 lg 1900 = 132.79 dB re 1 micropascal (Parseval)."""
    sea = plane_wave(Wave(40.0), ARRAY.positions_m, PERIOD, ARRAY.rate_hz)
    assert 10 * np.log10(np.mean(sea**2, axis=1)) == pytest.approx(np.full(32, 132.788), abs=0.01)


@pytest.mark.parametrize("cone_deg", [40.0, 64.0, 90.0, 133.0])
def test_own_beamformer_reads_a_wave_on_its_own_beam(cone_deg: float) -> None:
    sea = plane_wave(Wave(cone_deg), ARRAY.positions_m, PERIOD, ARRAY.rate_hz)
    x, u = ARRAY.positions_m[:, 0], float(np.cos(np.radians(cone_deg)))
    exact = ExactMap(sea, x, tapered_weights(32), ARRAY.rate_hz)
    assert exact.series(u) == pytest.approx(sea.mean(axis=0) * 0 + plane_wave(
        Wave(cone_deg), np.zeros((1, 3)), PERIOD, ARRAY.rate_hz)[0], abs=1e-6 * np.max(sea))  # fmt: skip
    levels = exact.rolling_db(u, range(0, 1024 * 60, 1024), 2048, 0.0)
    inside = slice(2048 * 200 // 8000, 2048 * 1900 // 8000)
    assert 10 * np.log10(np.mean(10 ** (levels[:, inside] / 10))) == pytest.approx(100.0, abs=0.1)


def test_parabola_finds_the_top_between_beams() -> None:
    u = np.linspace(1, -1, 21)
    assert peak_cosine(u, -((u - 0.233) ** 2)) == (8, pytest.approx(0.233))


def test_half_power_width_of_a_uniform_line() -> None:
    """0.886 wavelength / length for a long uniform line (Van Trees, Optimum Array Processing, 2002, eq. 2.100)."""
    x = (np.arange(64) - 31.5) * 0.5
    assert half_power_width(np.full(64, 1 / 64), x, 1200.0, 1500.0) == pytest.approx(0.886 * 1.25 / 32, rel=0.01)


def test_framing_of_a_hand_worked_feed() -> None:
    """Frame 8, rate 1 Hz: 20 samples hold frames at 0, 4, 8 and 12; 7 hold none; after a gap framing begins anew."""
    second = 1_000_000_000
    stretches = join_blocks([("a", 0, 12, 0), ("a", 12, 8, 12 * second), ("a", 25, 7, 25 * second), ("b", 0, 9, 0)])
    assert [(s.run, s.first, s.end) for s in stretches] == [("a", 0, 20), ("a", 25, 32), ("b", 0, 9)]
    maps, unused = frame_maps(stretches, 8, 1.0)
    assert [(m.run, m.first, m.t // second) for m in maps] == [
        ("a", 0, 0), ("a", 4, 4), ("a", 8, 8), ("a", 12, 12), ("b", 0, 0)]  # fmt: skip
    assert unused == 7 + 1


def test_blocks_carry_index_and_time() -> None:
    blocks = list(cut_blocks(np.zeros((2, 2500)), 1000, 8000.0, first=500, t=7))
    assert [(b.first, b.samples, b.t) for b in blocks] == [
        (500, 1000, 7), (1500, 1000, 125_000_007), (2500, 500, 250_000_007)]  # fmt: skip


def test_settings_text_reads_back() -> None:
    settings = ARRAY.settings(ARRAY.band(name="low", channels="0:32:2"), ARRAY.band(shading=[0.1, 0.2]))
    assert tomllib.loads(toml_text(settings)) == settings
