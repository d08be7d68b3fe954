"""Binary frames: layout, reduction, the two encodings, and sharing."""

import struct

import msgpack
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from live_rig import levels, map_message, parse_map

from soundrose.errors import UsageError
from soundrose.serve.live_frames import MapFrames, map_frame, quantised
from soundrose.serve.live_request import Reduction


@given(
    st.dictionaries(
        st.text(max_size=12).filter(lambda k: k not in ("skipped", "pad")), st.integers(0, 99), max_size=40
    ),
    st.binary(max_size=64),
    st.integers(0, 2**40),
)
def test_frame_is_a_length_a_map_and_data_on_a_boundary_of_eight(header, data, skipped):
    frame = map_frame(header, data, skipped)
    (length,) = struct.unpack_from("<I", frame)
    assert (4 + length) % 8 == 0
    assert frame[4 + length :] == data
    read = msgpack.unpackb(frame[4 : 4 + length])
    assert set(read.pop("pad")) <= {" "}
    assert read == {**header, "skipped": skipped}


@given(hnp.arrays(np.float32, (3, 7), elements=st.floats(-300, 250, width=32)))
def test_quantised_levels_agree_within_half_a_step_between_floor_and_top(level_db):
    floor_db, step_db, data = quantised(level_db)
    exact, read = level_db.astype(np.float64), floor_db + step_db * data.astype(np.float64)
    assert step_db in (0.25, 0.5)
    assert exact.max() <= floor_db + 255 * step_db
    inside = exact >= floor_db
    assert np.abs(read - exact)[inside].max() <= step_db / 2 + 1e-4
    assert (data[~inside] == 0).all()
    if exact.max() - exact.min() <= 127:
        assert inside.all()


def test_floor_is_a_whole_step_so_that_a_steady_level_keeps_its_value():
    quiet = levels(1)
    louder = quiet.copy()
    louder[6] += 7.3
    for level_db in (quiet, louder):
        floor_db, step_db, data = quantised(level_db)
        assert floor_db % step_db == 0
        value = floor_db + step_db * data[0].astype(float)
        assert value == pytest.approx(np.rint(quiet[0].astype(float) / step_db) * step_db, abs=1e-9)


def reduced_by_hand(level_db, f0, df, bins, beams, f_min, f_max):
    """CONTRACT 4 in float64 with plain loops: groups from the first on, mean of the power."""
    frequency = f0 + df * np.arange(level_db.shape[1])
    power = 10 ** (level_db.astype(np.float64)[:, (frequency >= f_min) & (frequency <= f_max)] / 10)
    by_bin, by_beam = -(-power.shape[1] // bins), -(-power.shape[0] // beams)
    rows = [power[i : i + by_beam] for i in range(0, power.shape[0], by_beam)]
    cells = [[row[:, k : k + by_bin].mean() for k in range(0, power.shape[1], by_bin)] for row in rows]
    return 10 * np.log10(np.array(cells))


@pytest.mark.parametrize(("bins", "beams"), [(32, 19), (125, 19), (7, 4), (1, 1), (124, 18)])
def test_both_encodings_agree_with_a_reduction_by_hand(bins, beams):
    message, frames = map_message(3), MapFrames()
    expected = reduced_by_hand(levels(3), 62.5, 15.625, bins, beams, 100, 1500)
    for encoding in ("f4", "u1"):
        frame = frames.frame(message, Reduction(bins, beams, 100, 1500, encoding=encoding), 0)
        header, values = parse_map(frame)
        assert header["shape"] == list(values.shape) == list(expected.shape)
        assert len(header["cone_deg"]) == expected.shape[0]
        if encoding == "f4":
            assert values == pytest.approx(expected, abs=0.01)
        else:
            read = header["floor_db"] + header["step_db"] * values.astype(float)
            assert read == pytest.approx(expected, abs=header["step_db"] / 2 + 1e-4)


def test_axes_are_those_of_the_groups():
    header, _ = parse_map(MapFrames().frame(map_message(0), Reduction(bins=50, beams=10, f_min=100), 0))
    first = 62.5 + 3 * 15.625  # the first bin not below 100 Hz; 122 bins are left, in groups of 3
    assert (header["f0_hz"], header["df_hz"]) == (first + 15.625, 3 * 15.625)
    assert header["cone_deg"][0] == pytest.approx(np.degrees(np.arccos((1 + 8 / 9) / 2)))
    assert (header["seq"], header["band"], header["limits"]["channels_used"]) == (0, "main", 48)


def test_pick_max_shows_the_largest_of_each_group():
    _, values = parse_map(MapFrames().frame(map_message(0), Reduction(bins=1, beams=1, pick="max"), 0))
    assert values == levels(0).max()


def test_same_reduction_of_the_same_map_is_the_same_bytes_object():
    frames, message = MapFrames(), map_message(0)
    first = frames.frame(message, Reduction(bins=10), 0)
    assert frames.frame(message, Reduction(bins=10), 0) is first
    other = frames.frame(message, Reduction(bins=10), 1)
    assert (parse_map(other)[0]["skipped"], parse_map(first)[0]["skipped"]) == (1, 0)
    assert frames.frame(map_message(0), Reduction(bins=10), 0) is not first


def test_many_different_reductions_are_answered_right_and_kept_within_bounds():
    frames, message = MapFrames(), map_message(0)
    for bins in range(1, 60):
        header, values = parse_map(frames.frame(message, Reduction(bins=bins), bins))
        assert (header["skipped"], header["shape"][1] <= bins) == (bins, True)
        assert len(values) == 19
    assert len(frames._encoded) == 16


def test_range_between_two_bins_is_refused():
    with pytest.raises(UsageError, match="no bin"):
        MapFrames().frame(map_message(0), Reduction(f_min=63, f_max=64), 0)
