"""Every sickness named from outside within ten seconds, in a sea from everywhere with a contact off broadside."""

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from rig import ArrayModel, Message, Service, block_message, cut_blocks
from rig.sea import far_contact, isotropic_sea

ARRAY = ArrayModel(channels=48, spacing_m=0.375, rate_hz=8000.0)
SECOND = 10**9
START = 1_796_133_600 * SECOND
LENGTH_S, SICK_FROM_S, TOLD_WITHIN_S = 26, 8, 10
SICK = {
    4: "dead", 9: "noisy", 15: "clipped", 21: "reversed", 26: "exchanged", 27: "exchanged", 33: "intermittent",
    36: "exchanged", 43: "exchanged",
}  # fmt: skip
EXCLUDED = 47
STAYS_IN_USE = {9, 15, 33}  # noisy by 10 dB, clipped, and one that comes and goes but is never torn


def sick_sea() -> np.ndarray:
    """(48, samples) float32; whole for 8 s, then nine hydrophones are not."""
    n, x_m = int(LENGTH_S * ARRAY.rate_hz), ARRAY.positions_m[:, 0]
    sea = isotropic_sea(x_m, n, ARRAY.rate_hz) + far_contact(x_m, 62.0, 84.0, n, ARRAY.rate_hz)
    sick, late = sea.copy(), slice(int(SICK_FROM_S * ARRAY.rate_hz), n)
    rng, t = np.random.default_rng(7), np.arange(n) / ARRAY.rate_hz
    sick[4, late] = 0.0
    sick[9, late] += 3 * sea[9].std() * rng.standard_normal(n, np.float32)[late]
    sick[15, late] = np.where(np.arange(n) % 400 == 0, ARRAY.full_scale_upa, sea[15])[late]
    sick[21, late] *= -1
    for a, b in ((26, 27), (36, 43)):
        sick[[a, b], late] = sea[[b, a], late]
    sick[33, late] = np.where(t % 1.7 < 0.35, 0.02 * sea[33], sea[33])[late]
    sick[EXCLUDED] = 0.0
    return sick


@pytest.fixture(scope="module")
def health(tmp_path_factory: pytest.TempPathFactory) -> Iterator[list[Message]]:
    settings = ARRAY.settings(ARRAY.band(frame=4096, beams=33))
    settings["array"]["exclude"] = [EXCLUDED]
    with Service(settings, tmp_path_factory.mktemp("sick")) as service, service.listener() as listener:
        with service.feeder() as feeder:
            for block in cut_blocks(sick_sea() / ARRAY.full_scale_upa, 1000, ARRAY.rate_hz, t=START, kind="f4"):
                feeder.send(block_message(ARRAY, block, "sick", type="f4"))
        yield listener.wait_count("health", LENGTH_S, 60)


def states(message: Message) -> dict[int, str]:
    return {c["i"]: c["state"] for c in message.header["channels"]}


def before(messages: list[Message], second: float) -> list[Message]:
    return [m for m in messages if m.header["t"] < START + second * SECOND]


def test_whole_hydrophones_are_good_and_the_excluded_one_is_left_out(health: list[Message]) -> None:
    early = before(health, SICK_FROM_S)
    assert len(early) == SICK_FROM_S
    for message in early:
        found = states(message)
        assert found.pop(EXCLUDED) == "excluded"
        assert set(found.values()) == {"good"}
        assert message.header["used"] == 47


def test_each_sickness_is_named_within_ten_seconds_and_nobody_else(health: list[Message]) -> None:
    late = health[len(before(health, SICK_FROM_S + TOLD_WITHIN_S)) :]
    assert len(late) >= 7
    for message in late:
        found = states(message)
        assert {i: state for i, state in found.items() if state not in ("good", "excluded")} == SICK
        assert message.header["used"] == 48 - 1 - len(SICK) + len(STAYS_IN_USE)


def test_nobody_is_accused_meanwhile_of_what_another_has(health: list[Message]) -> None:
    for message in health:
        wrong = {i: s for i, s in states(message).items() if i not in SICK and s not in ("good", "excluded")}
        assert not wrong


def test_reason_and_figure_are_in_words(health: list[Message]) -> None:
    why = {c["i"]: c["why"] for c in health[-1].header["channels"]}
    assert "above the median of its neighbours" in why[9]
    assert "dB" in why[9]
    assert "Hz" in why[9]
    assert "% of the samples at full scale" in why[15]
    assert "half a period" in why[21]
    assert "hydrophone 27" in why[26]
    assert "hydrophone 43" in why[36]
    assert "off its usual level in" in why[33]
    assert all(why[i] for i in SICK)


def test_short_form_of_the_long_watch_accuses_nobody(tmp_path: Path) -> None:
    """A ship passes, own shots come every ten seconds, the array turns."""
    from health_long import watch

    told = watch(48.0, tmp_path)
    assert told.seconds >= 47
    assert told.accused == {}
