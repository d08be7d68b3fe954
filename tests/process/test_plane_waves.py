"""Plane waves from known directions, in every sample type and layout: bearings, levels, times, headers of the maps."""

import re
from collections.abc import Iterator
from itertools import product

import numpy as np
import pytest
from rig import (
    ArrayModel,
    ExactMap,
    Message,
    Service,
    Wave,
    block_message,
    cut_blocks,
    frame_maps,
    half_power_width,
    join_blocks,
    note,
    pattern_db,
    peak_cosine,
    plane_wave,
    tapered_weights,
)  # fmt: skip

ARRAY = ArrayModel()
FRAME, BEAMS, AVERAGE_S = 2048, 97, 2.0
WEIGHTS = tapered_weights(ARRAY.channels)
PERIOD = 32000  # 4 s
BAND = (100.0, 2000.0)
CONES = (40.0, 64.0, 90.0, 133.0)
TYPES, LAYOUTS = ("i2", "i3", "i4", "f4"), ("channel", "sample")
RUNS = [f"{cone:g} {kind} {layout}" for cone, kind, layout in product(CONES, TYPES, LAYOUTS)]
GRID = np.linspace(1, -1, BEAMS)


def run_blocks(run: str) -> Iterator[list[bytes]]:
    """Messages of a run, blocks of 1000 samples; every run starts a whole hour after the one before."""
    cone, kind, layout = run.split()
    sea = plane_wave(Wave(float(cone), 100.0, BAND), ARRAY.positions_m, PERIOD, ARRAY.rate_hz)
    for block in cut_blocks(sea / ARRAY.full_scale_upa, 1000, ARRAY.rate_hz, 0, run_start(run), kind, layout):
        yield block_message(ARRAY, block, run, type=kind, layout=layout)


def run_start(run: str) -> int:
    return 1_796_133_600_000_000_000 + RUNS.index(run) * 3600 * 10**9


@pytest.fixture(scope="module")
def maps(tmp_path_factory: pytest.TempPathFactory) -> Iterator[dict[str, list[Message]]]:
    """All maps of all runs, by run; the service has counted every sample before they are handed out."""
    band = ARRAY.band(band_hz=list(BAND), frame=FRAME, beams=BEAMS, shading=list(WEIGHTS), average_s=AVERAGE_S)
    with Service(ARRAY.settings(band), tmp_path_factory.mktemp("waves")) as service, service.listener() as listener:
        expected = len(RUNS) * ((PERIOD - FRAME) // (FRAME // 2) + 1)
        with service.feeder() as feeder:
            for run in RUNS:
                feeder.send_all(run_blocks(run))
            feeder.send(note(ARRAY, "end", run=RUNS[-1]))
            listener.wait_count("map/main", expected, 60)
            listener.wait_status(
                "all samples and maps",
                lambda s: s["samples"] == len(RUNS) * PERIOD and s["bands"]["main"]["maps"] == expected,
            )
        found: dict[str, list[Message]] = {run: [] for run in RUNS}
        for message in listener.of("map/main"):
            found[message.header["run"]].append(message)
        yield found


@pytest.mark.parametrize("run", RUNS)
def test_loudest_beam_is_the_grid_beam_nearest_in_cosine(maps: dict[str, list[Message]], run: str) -> None:
    source = np.cos(np.radians(float(run.split()[0])))
    width = half_power_width(WEIGHTS, ARRAY.positions_m[:, 0], 1200.0, ARRAY.sound_speed_m_s)
    last = maps[run][-1]
    assert last.cosines == pytest.approx(GRID, abs=1e-9)
    top, at = peak_cosine(GRID, last.band_db(1150, 1250))
    assert top == int(np.argmin(np.abs(GRID - source)))
    assert abs(at - source) <= 0.05 * width, f"{at:.4f} for {source:.4f}, beamwidth {width:.4f}"


@pytest.mark.parametrize("run", RUNS)
def test_level_is_that_of_the_wave_after_scalloping(maps: dict[str, list[Message]], run: str) -> None:
    """100 dB re 1 micropascal^2/Hz; the tolerance is five times the scatter of about 5000 independent averages."""
    source = np.cos(np.radians(float(run.split()[0])))
    nearest = int(np.argmin(np.abs(GRID - source)))
    last = maps[run][-1]
    f = last.frequencies_hz
    inside = (f > 300) & (f < 1900)
    x, c = ARRAY.positions_m[:, 0], ARRAY.sound_speed_m_s
    loss = np.array([pattern_db(WEIGHTS, x, v, GRID[nearest], source, c)[0] for v in f[inside]])
    level = last.level_db[nearest, inside] - loss
    assert 10 * np.log10(np.mean(10 ** (level.astype(float) / 10))) == pytest.approx(100.0, abs=0.3)


@pytest.mark.parametrize("cone_deg", CONES)
def test_levels_are_those_of_an_exact_beamformer(maps: dict[str, list[Message]], cone_deg: float) -> None:
    """Every map, three beams about the peak and one on a side lobe, against float64 delays in the Fourier domain."""
    sea = plane_wave(Wave(cone_deg, 100.0, BAND), ARRAY.positions_m, PERIOD, ARRAY.rate_hz)
    exact = ExactMap(sea, ARRAY.positions_m[:, 0], WEIGHTS, ARRAY.rate_hz, ARRAY.sound_speed_m_s)
    top = int(np.argmin(np.abs(GRID - np.cos(np.radians(cone_deg)))))
    found = maps[f"{cone_deg:g} f4 channel"]
    starts = [k * FRAME // 2 for k in range(len(found))]
    for beam in (top - 1, top, top + 1, top + 9):
        rolling = exact.rolling_db(GRID[beam], starts, FRAME, AVERAGE_S)
        for k, message in enumerate(found):
            first = round(message.header["f0_hz"] / message.header["df_hz"])
            own = rolling[k, first : first + message.header["shape"][1]]
            loud = own > 70  # 30 dB under one hydrophone
            assert np.max(np.abs(message.level_db[beam] - own)[loud]) < 0.05, f"map {k}, beam {beam}"


@pytest.mark.parametrize("run", RUNS)
def test_one_map_for_each_half_frame_with_exact_times(maps: dict[str, list[Message]], run: str) -> None:
    expected, _ = frame_maps(join_blocks([(run, 0, PERIOD, run_start(run))]), FRAME, ARRAY.rate_hz)
    assert len(expected) == 30
    assert [(m.header["t"], m.header["t_end"]) for m in maps[run]] == [
        (m.t, m.t + round(FRAME * 1e9 / ARRAY.rate_hz)) for m in expected]  # fmt: skip


def test_the_samples_decide_and_not_type_or_layout(maps: dict[str, list[Message]]) -> None:
    """Both layouts of one type carry the same numbers: the same bits. Types differ by their rounding alone."""
    for cone in CONES:
        wide = maps[f"{cone:g} i4 channel"][-1].level_db
        top = wide > wide.max() - 20  # the coarsest, 16 bits, is 70 dB under the wave
        for kind in TYPES:
            by_channel, by_sample = (maps[f"{cone:g} {kind} {layout}"] for layout in LAYOUTS)
            assert [m.data for m in by_channel] == [m.data for m in by_sample], f"{cone} {kind}"
            assert np.max(np.abs(by_channel[-1].level_db - wide)[top]) < 0.05


def test_sequence_is_unbroken_from_one_start(maps: dict[str, list[Message]]) -> None:
    everything = [m.header for run in RUNS for m in maps[run]]
    assert [h["seq"] for h in everything] == list(range(len(everything)))
    assert len({h["start"] for h in everything}) == 1
    assert re.fullmatch("[0-9a-f]{16}", everything[0]["start"])


def test_map_header_is_complete_and_typed(maps: dict[str, list[Message]]) -> None:
    kinds = {
        "v": int, "kind": str, "array": str, "seq": int, "start": str, "band": str, "run": str, "t": int,
        "t_end": int, "span_s": float, "averages": float, "shape": list, "cone_deg": list, "f0_hz": float,
        "df_hz": float, "quantity": str, "unit": str, "limits": dict, "latency_ms": float,
    }  # fmt: skip
    limits = {"channels_used": int, "channels": int, "gap": bool, "clipped": float, "alias_hz": float, "masked": float}
    for message in (m for run in RUNS for m in maps[run]):
        header = message.header
        assert {key: type(header.get(key)) for key in kinds} == kinds
        assert {key: type(header["limits"].get(key)) for key in limits} == limits
        assert (header["v"], header["kind"], header["array"], header["band"]) == (1, "map", "aft", "main")
        assert header["quantity"] == "spectral density level"
        assert header["unit"] == "dB re 1 \u00b5Pa\u00b2/Hz"
        assert header["span_s"] == AVERAGE_S
        assert header["shape"] == [BEAMS, len(message.data) // 4 // BEAMS]
        assert header["cone_deg"] == sorted(header["cone_deg"])
        assert np.isfinite(message.level_db).all()
        assert header["latency_ms"] >= 0
        known = {"channels_used": 32, "channels": 32, "gap": False, "clipped": 0.0, "alias_hz": 1500.0, "masked": 0.0}
        assert header["limits"] | known == header["limits"]


def test_bins_cover_the_band(maps: dict[str, list[Message]]) -> None:
    header = maps[RUNS[0]][0].header
    assert header["df_hz"] == pytest.approx(ARRAY.rate_hz / FRAME)
    last = header["f0_hz"] + (header["shape"][1] - 1) * header["df_hz"]
    assert abs(header["f0_hz"] - BAND[0]) <= header["df_hz"]
    assert abs(last - BAND[1]) <= header["df_hz"]


def test_averages_count_weights_and_overlap(maps: dict[str, list[Message]]) -> None:
    """Variance of a weighted mean: (sum w)^2 / sum_ij w_i w_j r(i-j), r = 1/36 for half-overlapped Hann frames.

    r is the square of the taper's correlation at half overlap, 1/6 (Welch 1967, IEEE Trans. Audio Electroacoust.
    15(2) 70-73, with the taper's own sum worked out).
    """
    kept = np.exp(-FRAME / 2 / ARRAY.rate_hz / AVERAGE_S)
    for k, message in enumerate(maps[RUNS[0]]):
        w = kept ** np.arange(k + 1)
        spread = np.sum(w**2) + 2 * np.sum(w[1:] * w[:-1]) / 36
        assert message.header["averages"] == pytest.approx(np.sum(w) ** 2 / spread, rel=0.01)
