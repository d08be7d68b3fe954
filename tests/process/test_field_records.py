"""Hammer shots on a line of 24 geophones, real records: sign and slowness of the arrival through the whole service."""

import numpy as np
import pytest
from field_line import AVERAGE_SLOWNESS_MS_M, SHOTS, STEERING_M_S, shares, shot_maps
from rig import Message
from rig.field_records import read_record, read_seg2


@pytest.fixture(scope="module")
def maps(tmp_path_factory: pytest.TempPathFactory) -> dict[int, Message]:
    return shot_maps(tmp_path_factory.mktemp("line"))


@pytest.mark.parametrize(("number", "source_m"), [(2002, -4.0), (2003, 46.0), (2004, 96.0), (2005, 112.0)])
def test_records_are_what_their_headers_say(number: int, source_m: float) -> None:
    record = read_record(number)
    assert record.samples.shape == (24, 16_000)
    assert record.rate_hz == pytest.approx(8000.0)
    assert record.receivers_m == pytest.approx(4.0 * np.arange(24))
    assert record.source_m == source_m


def test_a_file_that_is_no_seg2_is_refused() -> None:
    with pytest.raises(ValueError, match="55 3A"):
        read_seg2(b"RIFF" + bytes(100))
    with pytest.raises(ValueError, match="0x4422"):
        read_seg2(b"\x55\x3a\x01\x00\x04\x00\x01\x00" + bytes(24) + b"\x24\x00\x00\x00" + bytes(32))


def test_a_shot_gives_one_finite_map(maps: dict[int, Message]) -> None:
    for number in SHOTS:
        header = maps[number].header
        assert np.isfinite(maps[number].level_db).all()
        assert (header["t_end"] - header["t"], header["shape"][0]) == (1_600_000_000, 141)
        assert header["limits"]["channels_used"] == 24


@pytest.mark.parametrize("number", list(AVERAGE_SLOWNESS_MS_M))
def test_arrival_has_the_right_sign_and_slowness(maps: dict[int, Message], number: int) -> None:
    """Within a tenth: the wave is dispersive, and the source as near as a single spacing."""
    message = maps[number]
    slowness = 1000 * message.cosines[np.argmax(shares(message))] / STEERING_M_S
    assert np.sign(slowness) == np.sign(AVERAGE_SLOWNESS_MS_M[number])
    assert slowness == pytest.approx(AVERAGE_SLOWNESS_MS_M[number], rel=0.1)


def both_ways_db(message: Message) -> float:
    """Best beam forward of broadside over best beam aft, dB."""
    share, u = shares(message), message.cosines
    return float(10 * np.log10(share[u > 0.1].max() / share[u < -0.1].max()))


def test_a_shot_beyond_an_end_comes_from_that_end_alone(maps: dict[int, Message]) -> None:
    assert both_ways_db(maps[2002]) > 6
    assert both_ways_db(maps[2004]) < -6
    assert both_ways_db(maps[2005]) < -6


def test_a_shot_in_the_middle_goes_both_ways(maps: dict[int, Message]) -> None:
    assert abs(both_ways_db(maps[2003])) < 2
