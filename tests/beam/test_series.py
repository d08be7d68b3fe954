"""Beam time series: stretches that join, times at the array origin, gaps, channels out of use."""

import numpy as np
import pytest
from plane_waves import RATE, T0, hop, hops, line, noise_spectrum, on_line, settings_for

from soundrose.beam.series import BeamSeries
from soundrose.errors import UsageError

LINE, LENGTH = line(16), 1 << 13
SPECTRUM = noise_spectrum(LENGTH, RATE, 100, 3000)
PRESSURE = np.fft.irfft(SPECTRUM, LENGTH)


def series(cones=(50.0,), **keywords):
    settings = settings_for(keywords.pop("positions", LINE), frame=1024, **keywords)
    return BeamSeries(settings, settings.bands[0], cones)


def joined(made, parts):
    pieces = [piece for part in parts for piece in made.push(part)]
    return pieces, np.concatenate([piece.samples for piece in pieces], axis=1)


def off_db(got, expected):
    return 20 * np.log10(np.sqrt(np.mean((got - expected) ** 2) / np.mean(expected**2)))


def test_beam_towards_the_source_is_the_pressure_at_the_origin():
    pieces, beam = joined(series(), hops(on_line(SPECTRUM, LENGTH, LINE, 50.0), 700))
    first = pieces[0].first
    assert first == 256
    assert pieces[0].t_ns == T0 + 256 * 62500
    assert beam.shape[1] == (LENGTH - 1024) // 512 * 512 + 512
    assert off_db(beam[0], PRESSURE[first : first + beam.shape[1]]) < -85


def test_origin_is_that_of_the_array_and_not_of_the_band():
    positions = line(48)
    made = series(positions=positions, channels=tuple(range(16)))
    pieces, beam = joined(made, hops(on_line(SPECTRUM, LENGTH, positions, 50.0), 512))
    first = pieces[0].first
    assert off_db(beam[0], PRESSURE[first : first + beam.shape[1]]) < -85


def test_frame_grows_where_filters_about_the_origin_need_it():
    positions = line(256)
    made = series(positions=positions, channels=tuple(range(16)))
    assert made.frame_length >= 2 * (made.taps - 1) > 1024


def test_sampling_skew_is_taken_out_of_the_time_too():
    skew = np.full(16, 3.4 / RATE)
    made = series(delay_s=tuple(skew))
    pieces, beam = joined(made, hops(on_line(SPECTRUM, LENGTH, LINE, 50.0, delay_s=skew), 512))
    first = pieces[0].first
    assert off_db(beam[0], PRESSURE[first : first + beam.shape[1]]) < -85


def test_hop_lengths_do_not_matter():
    samples = on_line(SPECTRUM, LENGTH, LINE, 50.0)
    _, one = joined(series((50.0, 120.0)), hops(samples, 512))
    _, other = joined(series((50.0, 120.0)), hops(samples, [33, 1500, 400]))
    np.testing.assert_array_equal(one, other)


def test_stretches_end_at_a_gap_and_begin_a_quarter_frame_after_it():
    samples = on_line(SPECTRUM, LENGTH, LINE, 50.0)
    pieces, _ = joined(series(), [hop(samples[:, :2048]), hop(samples[:, 3000:6000], 3000)])
    assert [piece.first for piece in pieces] == [256, 768, 1280, *(3256 + 512 * k for k in range(4))]


def test_a_channel_out_of_use_leaves_the_level_as_it_is():
    bad = np.zeros(16, dtype=bool)
    bad[3] = True
    samples = on_line(SPECTRUM, LENGTH, LINE, 50.0)
    samples[3] = 1e5
    pieces, beam = joined(series(), hops(samples, 512, bad=bad))
    first = pieces[0].first
    assert off_db(beam[0], PRESSURE[first : first + beam.shape[1]]) < -85
    _, silent = joined(series(), hops(samples, 512, bad=np.ones(16, dtype=bool)))
    assert not silent.any()


@pytest.mark.parametrize("cones", [(), (181.0,), (-1.0, 90.0)])
def test_directions_must_be_cone_angles(cones):
    with pytest.raises(UsageError, match="0 to 180"):
        series(cones)
