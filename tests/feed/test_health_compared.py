"""Hydrophones against their neighbours: each sickness named, hysteresis, restarts, and who is not accused."""

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
import pytest

from soundrose.feed.intake import Intake
from soundrose.feed.judge import STATES
from soundrose.feed.messages import encode_samples
from soundrose.product.messages import HealthProduct

RATE, CHANNELS, SPACING, C = 4000.0, 24, 0.5, 1500.0
X = (np.arange(CHANNELS)[::-1] - (CHANNELS - 1) / 2) * SPACING
T0 = 1_796_133_600 * 10**9


def sea(seconds, contact=0.0):
    """A copy of `made_sea`, to be spoiled."""
    return made_sea(seconds, contact).copy()


@lru_cache
def made_sea(seconds, contact, waves=48, own=0.02, seed=1):
    """(channels, samples) of waves from everywhere, rms 1 together, a contact from 60 degrees, own noise of each."""
    rng, n = np.random.default_rng(seed), int(seconds * RATE)
    f = np.fft.rfftfreq(n, 1 / RATE)
    cosines = np.linspace(-1, 1, waves, endpoint=False) + 1 / waves
    spectra = np.zeros((CHANNELS, len(f)), complex)
    parts = [(u, 1 / np.sqrt(waves)) for u in cosines] + [(0.5, contact)]
    for u, rms in parts:
        wave = rms * rng.standard_normal((len(f), 2)).view(complex)[:, 0] * np.sqrt(n / 2)
        spectra += wave * np.exp(2j * np.pi * np.outer(X * u / C, f))
    return np.fft.irfft(spectra, n) + own * rng.standard_normal((CHANNELS, n))


@dataclass
class Watch:
    """An intake that is fed seas of rms 1 = 30 micropascal; full scale is 1092 of it."""

    intake: Intake
    sent: int = 0

    def push(self, values):
        """The judgements that come of it."""
        out = []
        for at in range(0, values.shape[1], 400):
            part = np.asarray(values[:, at : at + 400] * 30 / 2**15, np.float32)
            t_ns = T0 + round(self.sent * 1e9 / RATE)
            out += self.intake.push(encode_samples("aft", "a", self.sent, t_ns, RATE, part, type="f4"))
            self.sent += part.shape[1]
        return [item.header for item in out if isinstance(item, HealthProduct)]


@pytest.fixture
def settings(settings_for):
    plain = settings_for(channels=CHANNELS, rate_hz=RATE, frames=(1024,))
    places = tuple((float(x), 0.0, 0.0) for x in X)
    return replace(plain, array=replace(plain.array, positions_m=places))


@pytest.fixture
def watch(settings):
    return Watch(Intake(settings))


def sick(header):
    return {c["i"]: c["state"] for c in header["channels"] if c["state"] != "good"}


def why(header, i):
    return header["channels"][i]["why"]


@pytest.mark.parametrize("contact", [0.0, 1.0, 30.0])
def test_whole_array_is_good_with_any_contact(watch, contact):
    for header in watch.push(sea(12, contact=contact)):
        assert sick(header) == {}
        assert header["used"] == CHANNELS


@pytest.mark.parametrize("contact", [0.0, 1.0, 30.0])
def test_reversed_is_told_and_out_of_use(watch, contact):
    values = sea(6, contact=contact)
    values[[0, 7, 8]] *= -1
    header = watch.push(values)[-1]
    assert sick(header) == {0: "reversed", 7: "reversed", 8: "reversed"}
    assert header["used"] == CHANNELS - 3
    assert "half a period" in why(header, 7)


@pytest.mark.parametrize("pair", [(11, 12), (3, 5), (0, 23), (2, 17)])
@pytest.mark.parametrize("contact", [0.0, 1.0, 30.0])
def test_exchanged_are_told_with_the_other(watch, contact, pair):
    a, b = pair
    values = sea(7, contact=contact)
    values[[a, b]] = values[[b, a]]
    header = watch.push(values)[-1]
    assert sick(header) == {a: "exchanged", b: "exchanged"}
    assert f"hydrophone {b}" in why(header, a)
    assert header["used"] == CHANNELS - 2


def test_noise_of_their_own_alone_leaves_phases_untold(watch):
    """Nothing ties the hydrophones together: turned or not cannot be told, and nobody is accused."""
    values = np.random.default_rng(4).standard_normal((CHANNELS, int(8 * RATE)))
    values[5] *= -1
    assert [sick(header) for header in watch.push(values)] == [{}] * 8


def test_field_that_does_not_travel_as_sound_accuses_nobody(watch):
    """Every pair of neighbours opposed, as strum can make them: no majority, so nobody is reversed."""
    values = sea(8) * 0.01
    values += np.random.default_rng(4).standard_normal(int(8 * RATE)) * (-1.0) ** np.arange(CHANNELS)[:, None]
    assert [sick(header) for header in watch.push(values)] == [{}] * 8


@pytest.mark.parametrize(
    ("gain_db", "state", "words", "out"),
    [(-9.0, "weak", "9 dB below", 0), (9.0, "noisy", "9 dB above", 0), (16.0, "noisy", "16 dB above", 1)],
)
def test_level_is_judged_with_its_figure_and_range(watch, gain_db, state, words, out):
    """Named from 6 dB on; left out only from 12 dB on, which a sound close by does not make at two neighbours."""
    values = sea(7)
    values[6] *= 10 ** (gain_db / 20)
    header = watch.push(values)[-1]
    assert sick(header) == {6: state}
    assert f"{words} the median of its neighbours" in why(header, 6)
    assert why(header, 6).endswith(" Hz")
    assert header["used"] == CHANNELS - out


@pytest.mark.parametrize("gain_db", [-4.0, 4.0])
def test_usual_spread_of_sensitivities_is_good(watch, gain_db):
    values = sea(7)
    values[6] *= 10 ** (gain_db / 20)
    assert sick(watch.push(values)[-1]) == {}


def test_noise_in_one_octave_is_told_with_its_range(watch):
    values, n = sea(7), int(7 * RATE)
    band = np.fft.rfft(np.random.default_rng(9).standard_normal(n))
    f = np.fft.rfftfreq(n, 1 / RATE)
    band[(f < 270) | (f > 480)] = 0
    values[6] += 8 * np.fft.irfft(band, n) * np.sqrt(2000 / 210) * 0.3
    header = watch.push(values)[-1]
    assert sick(header) == {6: "noisy"}
    assert "250-500 Hz" in why(header, 6)


def test_cable_without_its_hydrophone_is_dead(watch):
    values = sea(8)
    values[6] *= 0.01
    header = watch.push(values)[-1]
    assert sick(header) == {6: "dead"}
    assert "40 dB below" in why(header, 6)


def test_states_are_left_only_after_seconds_that_are_good(watch):
    values = sea(24)
    values[6, : int(8 * RATE)] *= 3
    told = [sick(header).get(6, "good") for header in watch.push(values)]
    begun, left = told.index("noisy"), 8 + told[8:].index("good")
    assert begun <= 4
    assert 12 <= left <= 16
    assert set(told[begun:left]) == {"noisy"}
    assert set(told[left:]) == {"good"}


def test_one_loud_second_on_one_hydrophone_changes_nothing(watch):
    values = sea(14)
    values[6, int(6 * RATE) : int(6.4 * RATE)] *= 30
    assert [sick(header) for header in watch.push(values)] == [{}] * 14


def test_hydrophone_that_comes_and_goes_is_intermittent(watch):
    """For its level alone nobody is left out: blows beside the line come and go as well."""
    values = sea(16)
    away = np.arange(values.shape[1]) / RATE % 2.0 < 0.4
    values[6, away] *= 0.01
    told = watch.push(values)
    assert sick(told[-1]) == {6: "intermittent"}
    assert told[-1]["used"] == CHANNELS
    assert "off its usual level in" in why(told[-1], 6)
    assert [sick(header).get(6, "good") for header in told].index("intermittent") <= 9


def test_torn_once_is_named_and_stays_in_use_and_torn_again_is_out(watch):
    values = sea(20)
    for second in (6.2, 9.2):
        values[6, int(second * RATE) : int((second + 0.3) * RATE)] = 0.0
    told = watch.push(values)
    assert sick(told[6]) == {6: "intermittent"}
    assert told[6]["used"] == CHANNELS
    assert sick(told[7]) == {}
    assert told[9]["used"] == CHANNELS - 1
    assert sick(told[13]) == {6: "intermittent"}
    assert sick(told[15]) == {}
    assert "whole again" in why(told[13], 6) or "torn in 2" in why(told[13], 6)


def test_clipping_is_called_so_and_not_noise(watch):
    values = sea(8)
    values[6, ::200] = 1100
    header = watch.push(values)[-1]
    assert sick(header) == {6: "clipped"}
    assert header["used"] == CHANNELS


def test_excluded_wins_and_counts_for_nobody(settings):
    watch = Watch(Intake(replace(settings, array=replace(settings.array, exclude=(5, 6, 7)))))
    values = sea(6)
    values[5] *= -1
    values[6] *= 100
    values[7] = 0
    header = watch.push(values)[-1]
    assert sick(header) == {5: "excluded", 6: "excluded", 7: "excluded"}


def test_sound_that_all_hear_accuses_nobody_however_sudden(watch):
    """Bursts 60 dB over the sea, from one direction, once a second at the edge of a part."""
    values = sea(14)
    rng = np.random.default_rng(11)
    n = values.shape[1]
    burst = np.zeros(n)
    for second in range(1, 14):
        at = int((second + 0.063) * RATE)
        burst[at : at + 300] = 1000 * rng.standard_normal(300) * np.exp(-np.arange(300) / 60)
    spectrum, f = np.fft.rfft(burst), np.fft.rfftfreq(n, 1 / RATE)
    values += np.fft.irfft(spectrum * np.exp(2j * np.pi * np.outer(X * 0.97 / C, f)), n)
    assert [sick(header) for header in watch.push(values / 100)] == [{}] * 14


def test_states_go_on_after_a_restart_until_judged_again(settings):
    values = sea(14)
    values[3], values[8], values[9] = 0, -values[8], 5 * np.random.default_rng(1).standard_normal(values.shape[1])
    values[[14, 15]] = values[[15, 14]]
    half = int(7 * RATE)
    watch = Watch(Intake(settings))
    named = {3: "dead", 8: "reversed", 9: "noisy", 14: "exchanged", 15: "exchanged"}
    assert sick(watch.push(values[:, :half])[-1]) == named
    again = Watch(Intake(settings, watch.intake.snapshot()), half)
    told = again.push(values[:, half:])
    assert [sick(header) for header in told] == [named] * 7
    assert [header["used"] for header in told] == [CHANNELS - 5] * 7
    assert "restart" in why(told[0], 14)
    assert "hydrophone 15" in why(told[-1], 14)


def test_cable_without_its_hydrophone_stays_dead_over_a_restart(settings):
    values = sea(14)
    values[6] *= 0.01
    half = int(7 * RATE)
    watch = Watch(Intake(settings))
    watch.push(values[:, :half])
    again = Watch(Intake(settings, watch.intake.snapshot()), half)
    assert [sick(header) for header in again.push(values[:, half:])] == [{6: "dead"}] * 7


@pytest.mark.parametrize("channels", [1, 2, 5])
def test_few_hydrophones_are_judged_by_their_own_samples(settings_for, channels):
    plain = settings_for(channels=channels, rate_hz=RATE, frames=(1024,))
    values = sea(6)[:channels]
    values[0] *= -0.01
    values[-1] *= 1 if channels > 1 else 100
    header = Watch(Intake(plain)).push(values)[-1]
    assert sick(header) == ({0: "dead"} if channels == 5 else {})


@pytest.mark.parametrize("places", ["far apart", "ring", "one point"])
def test_other_shapes_accuse_nobody_and_tell_what_they_can(settings_for, places):
    """25 m apart no bin is low enough; on a ring polarity is told; on one point too."""
    plain = settings_for(channels=CHANNELS, rate_hz=RATE, frames=(1024,))
    turn = 2 * np.pi * np.arange(CHANNELS) / CHANNELS
    size = {"far apart": 100.0, "ring": 2.0, "one point": 0.0}[places]
    xy = size * np.stack([np.cos(turn), np.sin(turn)], axis=1)
    rng, n = np.random.default_rng(3), int(7 * RATE)
    f = np.fft.rfftfreq(n, 1 / RATE)
    values = 0.02 * rng.standard_normal((CHANNELS, n))
    for way in 2 * np.pi * np.arange(48) / 48:
        wave = rng.standard_normal((len(f), 2)).view(complex)[:, 0] * np.sqrt(n / 96)
        ahead_s = xy @ [np.cos(way), np.sin(way)] / C
        values += np.fft.irfft(wave * np.exp(2j * np.pi * np.outer(ahead_s, f)), n)
    values[6] *= -1
    settings = replace(plain, array=replace(plain.array, positions_m=tuple((x, y, 0.0) for x, y in xy.tolist())))
    header = Watch(Intake(settings)).push(values)[-1]
    assert sick(header) == ({} if places == "far apart" else {6: "reversed"})


def test_states_are_those_of_the_contract_in_its_order():
    order = ("excluded", "dead", "clipped", "exchanged", "reversed", "noisy", "intermittent", "weak", "good")
    assert STATES[:-1] == order
    assert STATES[-1] == "not judged"
