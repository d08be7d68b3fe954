"""Envelopes of narrow bands: exact for what is periodic in the frame, continuous, at their own rate."""

import numpy as np
import pytest
from plane_waves import RATE, T0, hops, line, settings_for

from soundrose.array.geometry import cos_grid
from soundrose.beam.envelopes import EnvelopeBank, EnvelopeFrame
from soundrose.beam.powers import PowerFrame, PowerReducer
from soundrose.beam.stage import BandStage, Sink
from soundrose.errors import UsageError

FRAME, BEAM = 1024, 4
BANDS = [(1000.0, 1230.0), (1500.0, 1800.0)]
SETTINGS = settings_for(line(16), frame=FRAME, beams=17, band_hz=(500.0, 3000.0))
BINS = (32, 193)
U = cos_grid(17)[BEAM]


def taken(samples, sink_of):
    found = []
    stage = BandStage(SETTINGS, SETTINGS.bands[0], sink=sink_of(found.append))
    maps = [m for h in hops(samples, 512) for m in stage.push(h)]
    return found, maps


def envelopes(samples, bands=BANDS):
    return taken(samples, lambda deliver: Sink(deliver, envelopes=EnvelopeBank(bands, FRAME, RATE, BINS)))[0]


def tones(frequencies, length=8 * FRAME):
    """Unit tones of phase 0 at sample 0 at the band's middle, from the direction of the beam."""
    t = np.arange(length) / RATE
    x = line(16)[:, 0] - line(16)[:, 0].mean()
    return sum(np.cos(2 * np.pi * f * (t + x[:, None] * U / 1500.0)) for f in frequencies)


def test_a_tone_on_a_bin_has_a_steady_envelope_of_its_amplitude_and_phase():
    k = 70
    f = k * RATE / FRAME
    frames = envelopes(tones([f]))
    bank = EnvelopeBank(BANDS, FRAME, RATE, BINS).bands[0]
    z = np.concatenate([frame.envelopes[0][BEAM] for frame in frames])
    step = FRAME / bank.length
    t = (FRAME / 4 + np.arange(len(z)) * step) / RATE
    expected = np.exp(2j * np.pi * (f - bank.carrier_hz) * t)
    assert np.abs(z - expected).max() < 2e-3
    assert max(np.abs(frame.envelopes[1][BEAM]).max() for frame in frames) < 2e-3


def test_tones_of_one_band_add_and_others_stay_out():
    f = [66 * RATE / FRAME, 75 * RATE / FRAME, 100 * RATE / FRAME]
    frames = envelopes(tones(f))
    z = np.concatenate([frame.envelopes[0][BEAM] for frame in frames])
    assert np.mean(np.abs(z) ** 2) == pytest.approx(2.0, rel=0.02)
    z = np.concatenate([frame.envelopes[1][BEAM] for frame in frames])
    assert np.mean(np.abs(z) ** 2) == pytest.approx(1.0, rel=0.02)


def test_a_short_call_shows_at_its_time():
    """20 ms of a tone: the envelope peaks within it, at the call's amplitude; the frames' middle halves join."""
    samples = tones([1650.0])
    start, stop = 3000, 3320
    samples[:, :start] = samples[:, stop:] = 0
    frames = envelopes(samples)
    bank = EnvelopeBank(BANDS, FRAME, RATE, BINS).bands[1]
    z = np.abs(np.concatenate([frame.envelopes[1][BEAM] for frame in frames]))
    t = FRAME / 4 + np.arange(len(z)) * FRAME / bank.length
    inside = (t > start) & (t < stop)
    assert inside[z.argmax()]
    assert z.max() == pytest.approx(1.0, abs=0.2)
    assert z[(t < start - 160) | (t > stop + 160)].max() < 0.15


def test_frames_carry_their_times():
    frames = envelopes(tones([1100.0], 3 * FRAME))
    assert [type(frame) for frame in frames] == [EnvelopeFrame] * 5
    assert [frame.t_ns for frame in frames] == [T0 + (512 * k + 256) * 62500 for k in range(5)]
    assert [frame.first for frame in frames] == [512 * k for k in range(5)]
    for frame in frames:
        for z, band in zip(frame.envelopes, EnvelopeBank(BANDS, FRAME, RATE, BINS).bands, strict=True):
            assert z.shape == (17, band.length // 2)
            assert z.dtype == np.complex64
            assert z.flags.c_contiguous


def test_band_has_the_shortest_fast_length_that_holds_its_bins():
    for band in EnvelopeBank(BANDS, FRAME, RATE, BINS).bands:
        assert band.stop - band.first <= band.length <= 1.5 * (band.stop - band.first) + 4
        assert band.length % 4 == 0
        assert band.rate_hz == pytest.approx(band.length * RATE / FRAME)


@pytest.mark.parametrize("edges", [(100.0, 600.0), (2900.0, 3100.0), (1001.0, 1002.0)])
def test_a_detection_band_must_lie_in_the_band(edges):
    with pytest.raises(UsageError, match="it must have at least one"):
        EnvelopeBank([edges], FRAME, RATE, BINS)


def test_zero_hertz_has_no_envelope():
    with pytest.raises(UsageError, match="bins 1 to"):
        EnvelopeBank([(0.0, 100.0)], FRAME, RATE, (0, 193))


def test_powers_are_reduced_by_the_mean_and_carry_their_frame():
    rng = np.random.default_rng(0)
    samples = rng.standard_normal((16, 4 * FRAME))
    cones = [float(v) for v in np.degrees(np.arccos(cos_grid(17)))]
    full, _ = taken(samples, lambda deliver: Sink(deliver, powers=PowerReducer(cones, 500.0, RATE / FRAME, 17, 161)))
    small, _ = taken(samples, lambda deliver: Sink(deliver, powers=PowerReducer(cones, 500.0, RATE / FRAME, 9, 40)))
    assert len(full) == len(small) == 7
    assert all(type(frame) is PowerFrame for frame in small)
    assert small[0].power.shape == (9, 33)  # groups of 2 beams and 5 bins
    np.testing.assert_allclose(small[3].power[1, 2], full[3].power[2:4, 10:15].mean(), rtol=1e-5)
    assert (small[3].first, small[3].t_ns, small[3].adjacent, small[3].since_gap) == (1536, T0 + 96000000, True, None)
    assert (small[3].f0_hz, small[3].df_hz) == (500.0 + 2 * 15.625, 5 * 15.625)


def test_both_go_to_one_sink_powers_first():
    cones = [float(v) for v in np.degrees(np.arccos(cos_grid(17)))]
    found, maps = taken(
        tones([1100.0], 2 * FRAME),
        lambda deliver: Sink(
            deliver, PowerReducer(cones, 500.0, RATE / FRAME), EnvelopeBank(BANDS, FRAME, RATE, BINS)
        ),
    )  # fmt: skip
    assert [type(frame) for frame in found] == [PowerFrame, EnvelopeFrame] * len(maps)
