"""Nested apertures, new hydrophone positions and another sound speed: bearings are right again in the time promised."""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pytest
from rig import (
    ArrayModel,
    Feeder,
    Listener,
    Message,
    Service,
    Wave,
    block_message,
    cut_blocks,
    half_power_width,
    line_positions,
    note,
    peak_cosine,
    plane_wave,
)  # fmt: skip

ARRAY = ArrayModel()
AVERAGE_S = 0.5
LEG = 32000  # samples of one leg, 4 s
SECOND = 10**9
#: a long sparse line for low frequencies, its dense middle for high ones; a frame each
LOW = ARRAY.band(name="low", channels="0:32:2", band_hz=[100.0, 700.0], frame=2048, average_s=AVERAGE_S)
HIGH = ARRAY.band(name="high", channels="8:24", band_hz=[500.0, 2000.0], frame=1024, average_s=AVERAGE_S)
LINES = {"low": ARRAY.positions_m[0:32:2, 0], "high": ARRAY.positions_m[8:24, 0]}
LOOK_HZ = {"low": (550.0, 650.0), "high": (1150.0, 1250.0)}


@dataclass(frozen=True)
class Leg:
    """Four seconds of sea as it truly is: positions of the hydrophones, sound speed, and where the sound is from."""

    positions_m: np.ndarray
    sound_speed_m_s: float = 1500.0
    cone_deg: float = 40.0


STRETCHED = line_positions(32, 0.5 * 1.05)
REVERSED = ARRAY.positions_m[::-1].copy()
#: what changes, the sea of the leg, the message that tells of it (half a leg late, so that the map is wrong before)
LEGS = [
    ("as set up", Leg(ARRAY.positions_m), None),
    ("stretched", Leg(STRETCHED), ("positions", {"positions_m": STRETCHED.tolist()})),
    ("reversed", Leg(REVERSED), ("positions", {"positions_m": REVERSED.tolist()})),
    ("as at first", Leg(ARRAY.positions_m), ("positions", {"positions_m": ARRAY.positions_m.tolist()})),
    ("slow water", Leg(ARRAY.positions_m, 1425.0), ("navigation", {"sound_speed_m_s": 1425.0})),
    ("from aft", Leg(ARRAY.positions_m, 1425.0, 133.0), None),
]  # fmt: skip
START = 1_796_133_600 * SECOND


def leg_t(number: int) -> int:
    return START + number * LEG * SECOND // 8000


def feed_legs(feeder: Feeder) -> None:
    """All legs as one run; each message is sent ahead and acts from the middle of its leg on."""
    for number, (_, leg, told) in enumerate(LEGS):
        if told:
            kind, keys = told
            feeder.send(note(ARRAY, kind, t=leg_t(number) + 2 * SECOND, **keys))
        sea = plane_wave(Wave(leg.cone_deg, seed=number), leg.positions_m, LEG, ARRAY.rate_hz, leg.sound_speed_m_s)
        blocks = cut_blocks(
            sea / ARRAY.full_scale_upa, 1000, ARRAY.rate_hz, number * LEG, leg_t(number), "i3", "sample"
        )
        feeder.send_all(block_message(ARRAY, block, "legs", type="i3", layout="sample") for block in blocks)
    feeder.send(note(ARRAY, "end", run="legs"))


@pytest.fixture(scope="module")
def maps(tmp_path_factory: pytest.TempPathFactory) -> Iterator[dict[str, list[Message]]]:
    """Maps of both bands over all legs."""
    settings = ARRAY.settings(LOW, HIGH)
    folder = tmp_path_factory.mktemp("legs")
    with Service(settings, folder) as service, service.listener() as listener, service.feeder() as feeder:
        feed_legs(feeder)
        yield {band["name"]: all_maps(listener, band) for band in (LOW, HIGH)}


def all_maps(listener: Listener, band: dict) -> list[Message]:
    count = (len(LEGS) * LEG - band["frame"]) // (band["frame"] // 2) + 1
    maps = listener.wait_count(f"map/{band['name']}", count)
    assert len(maps) == count
    return maps


def error_cosine(message: Message, band: str, leg: Leg) -> float:
    """Cosine measured less that of the source, in half-power beamwidths of the band's line at the look frequency."""
    low, high = LOOK_HZ[band]
    x = LINES[band]
    shade = np.hanning(len(x) + 2)[1:-1]
    width = half_power_width(shade / shade.sum(), x, (low + high) / 2, leg.sound_speed_m_s)
    _, at = peak_cosine(message.cosines, message.band_db(low, high))
    return (at - np.cos(np.radians(leg.cone_deg))) / width


@pytest.mark.parametrize("band", [LOW, HIGH], ids=["low", "high"])
@pytest.mark.parametrize("number", range(len(LEGS)), ids=[leg[0] for leg in LEGS])
def test_bearing_is_right_within_three_time_constants_and_a_frame(
    maps: dict[str, list[Message]], band: dict, number: int
) -> None:
    """A twentieth of what is averaged is then still from before (e^-3), hence 0.1 and not 0.05 beamwidth."""
    _, leg, told = LEGS[number]
    settled = leg_t(number) + (2 * SECOND if told else 0) + round(3 * AVERAGE_S * SECOND)
    settled += round(band["frame"] / 8000 * SECOND)
    found = [m for m in maps[band["name"]] if settled < m.header["t_end"] <= leg_t(number + 1)]
    assert len(found) >= 2
    for message in found:
        assert abs(error_cosine(message, band["name"], leg)) < 0.1, message.header["t_end"]


@pytest.mark.parametrize("band", [LOW, HIGH], ids=["low", "high"])
@pytest.mark.parametrize("number", [i for i, leg in enumerate(LEGS) if leg[2]], ids=lambda i: LEGS[i][0])
def test_bearing_is_wrong_until_the_service_is_told(maps: dict[str, list[Message]], band: dict, number: int) -> None:
    """Or the test above would prove nothing: just before the message acts the map still follows the old array."""
    _, leg, _ = LEGS[number]
    told = leg_t(number) + 2 * SECOND
    before = [m for m in maps[band["name"]] if m.header["t_end"] <= told][-1]
    assert abs(error_cosine(before, band["name"], leg)) > 0.15


def test_a_message_acts_from_the_first_frame_that_begins_at_or_after_its_time(maps: dict[str, list[Message]]) -> None:
    """Each map's alias onset c/2d follows the line in force for its frame: 0.5 m and 0.525 m, then 1425 m/s."""
    turn = leg_t(1) + 2 * SECOND
    onset = {m.header["t"]: m.header["limits"]["alias_hz"] for m in maps["high"] if m.header["t"] < turn + 2 * SECOND}
    assert {hz for t, hz in onset.items() if t < turn} == {1500.0}
    after = [hz for t, hz in onset.items() if t >= turn]
    assert after == pytest.approx([1500 / 1.05] * len(after), rel=1e-6)
    last = maps["high"][-1].header["limits"]
    assert last["alias_hz"] == pytest.approx(1425.0, rel=1e-6)


def test_each_band_says_which_hydrophones_it_uses(maps: dict[str, list[Message]]) -> None:
    for band in ("low", "high"):
        assert {(m.header["limits"]["channels"], m.header["limits"]["channels_used"]) for m in maps[band]} == {(16, 16)}
