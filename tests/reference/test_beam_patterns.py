"""Published figures of uniform and shaded lines, read off real maps: a tone through frames, steering and levels.

Standing of each value: found (printed in a source), recomputed (worked out again from the formula), memory.
"""

import numpy as np
import pytest
from plane_waves import hops, line, maps_of, settings_for

from soundrose.array.geometry import cos_grid
from soundrose.beam.series import BeamSeries
from soundrose.beam.stage import BandStage

C, RATE, FRAME = 1500.0, 16000.0, 4096
K = 256  #: the tone's bin: 1000 Hz, wavelength 1.5 m
TONE = K * RATE / FRAME


def tone(channels, spacing, cone_deg, *, bins=0.0, length=FRAME):
    """(channels, length) a tone of rms 1 uPa from cone_deg, `bins` above bin K."""
    t = np.arange(length) / RATE
    x = line(channels, spacing)[:, 0]
    x -= x.mean()
    f = (K + bins) * RATE / FRAME
    return np.sqrt(2) * np.cos(2 * np.pi * f * (t + x[:, None] * np.cos(np.radians(cone_deg)) / C))


def one_map(samples, spacing, beams, *, shading="uniform", half_width_hz=2.0, **band):
    settings = settings_for(
        line(len(samples), spacing), frame=FRAME, beams=beams, shading=shading, average_s=0.0,
        band_hz=(TONE - half_width_hz, TONE + half_width_hz), **band,
    )  # fmt: skip
    stage = BandStage(settings, settings.bands[0])
    return maps_of(stage, samples, FRAME)[0]


def pattern_db(channels, per_wavelength, cone_deg, beams, **keywords):
    """(beams,) dB re the largest, of the bin of the tone, against the grid of cosines."""
    spacing = per_wavelength * C / TONE
    levels = one_map(tone(channels, spacing, cone_deg), spacing, beams, **keywords).level_db[:, 0].astype(float)
    return levels - levels.max()


def half_power_width(cosines, levels):
    """In cosine, between the two points 3.0103 dB down beside the maximum, straight lines between beams."""
    peak, half = levels.argmax(), 10 * np.log10(0.5)
    left = peak - (levels[peak::-1] < half).argmax()
    right = peak + (levels[peak:] < half).argmax()
    ends = [np.interp(half, levels[[i, j]], cosines[[i, j]]) for i, j in ((left, left + 1), (right, right - 1))]
    return ends[0] - ends[1]


def side_lobes(levels):
    """Local maxima but the largest, dB."""
    inner = levels[1:-1]
    tops = inner[(inner > levels[:-2]) & (inner >= levels[2:])]
    return np.sort(tops)[:-1]


@pytest.mark.parametrize(
    ("channels", "width_bins", "side_lobe_db", "null_to_null_deg"),
    [
        (16, 0.8873900396, -13.14683056, 14.36151156), (32, 0.8862665145, -13.23288676, 7.166643397),
        (48, 0.8860589163, -13.24876711, 4.776030927),
    ],
)  # fmt: skip
def test_uniform_line_at_half_a_wavelength(channels, width_bins, side_lobe_db, null_to_null_deg):
    """Exact figures of |sin(N psi/2) / (N sin(psi/2))|, Van Trees 2002, Optimum Array Processing, ch. 2.

    Standing: recomputed. Width in 1/N of (d/lambda) cos: the grid of 2001 beams resolves it to 2e-3.
    """
    cosines = cos_grid(2001)
    levels = pattern_db(channels, 0.5, 90.0, 2001)
    assert half_power_width(cosines, levels) * 0.5 * channels == pytest.approx(width_bins, rel=2e-3)
    assert side_lobes(levels).max() == pytest.approx(side_lobe_db, abs=0.02)
    middle = slice(1000 - round(3.2 * 1000 / channels), 1001)
    null = np.degrees(np.arcsin(cosines[middle][levels[middle].argmin()]))
    assert 2 * null == pytest.approx(null_to_null_deg, abs=2 * np.degrees(1 / 1000))


@pytest.mark.parametrize(
    ("channels", "shading", "shading_db", "width_bins", "side_lobe_db"),
    [
        (16, "hann", 30.0, 1.536690834, -31.498371), (32, "hann", 30.0, 1.487056628, -31.468899),
        (16, "hamming", 30.0, 1.358123058, -39.37009), (32, "hamming", 30.0, 1.330160858, -41.762265),
        (16, "chebyshev", 30.0, 1.113314321, -30.0), (16, "chebyshev", 40.0, 1.254290684, -40.0),
        (16, "taylor", 30.0, 1.125604174, -30.054603), (16, "taylor", 35.0, 1.184876359, -34.453261),
    ],
)  # fmt: skip
def test_shaded_lines(channels, shading, shading_db, width_bins, side_lobe_db):
    """Harris 1978 (hann, hamming), Dolph 1946 (chebyshev), Taylor 1955 with nbar 4. Standing: recomputed."""
    levels = pattern_db(channels, 0.5, 90.0, 2001, shading=shading, shading_db=shading_db)
    assert half_power_width(cos_grid(2001), levels) * 0.5 * channels == pytest.approx(width_bins, rel=2e-3)
    assert side_lobes(levels).max() == pytest.approx(side_lobe_db, abs=0.1)


PATTERN = [
    (16, 0.5, 90, 80, -13.22756939), (16, 0.5, 60, 75, -28.60088876), (32, 0.5, 45, 40, -24.40721054),
    (32, 0.4, 90, 92, -3.063075904), (48, 0.3, 120, 100, -25.07686249), (8, 0.5, 90, 30, -17.92337828),
]  # fmt: skip


@pytest.mark.parametrize(("channels", "per_wavelength", "steer", "arrival", "expected_db"), PATTERN)
def test_samples_of_the_pattern(channels, per_wavelength, steer, arrival, expected_db):
    """Response of a uniform beam steered to one angle, wave from another; standing: recomputed. By the time series of
    that beam and, where a grid of cosines holds the angle, by the map. Filters err by -90 dB here: 0.01 dB at -29 dB.
    """
    spacing = per_wavelength * C / TONE
    samples = tone(channels, spacing, arrival, length=2 * FRAME)
    settings = settings_for(line(channels, spacing), frame=FRAME, shading="uniform")
    series = BeamSeries(settings, settings.bands[0], [float(steer)])
    pieces = [p.samples for h in hops(samples, FRAME // 2) for p in series.push(h)]
    assert 10 * np.log10(np.mean(np.concatenate(pieces, axis=1) ** 2)) == pytest.approx(expected_db, abs=0.02)
    if steer in (60, 90, 120):
        beam_i = {60: 1, 90: 2, 120: 3}[steer]
        off_axis, on_axis = (
            one_map(tone(channels, spacing, cone), spacing, 5).level_db[beam_i, 0] for cone in (arrival, steer)
        )
        assert off_axis - on_axis == pytest.approx(expected_db, abs=0.03)


@pytest.mark.parametrize(
    ("per_wavelength", "source_deg", "image_deg"),
    [
        (0.75, 60.0, [146.4426902]), (0.75, 90.0, []), (1.0, 90.0, [180.0, 0.0]), (1.0, 60.0, [120.0]),
        (0.6, 30.0, [143.1913822]), (1.5, 75.0, [114.0696973, 22.2582895]),
    ],
)  # fmt: skip
def test_images_lie_where_the_grating_lobes_of_the_source_are(per_wavelength, source_deg, image_deg):
    """cos image = cos source + k lambda/d. Standing: recomputed. In the map, within half a beam of the grid."""
    cosines = cos_grid(2001)
    levels = pattern_db(32, per_wavelength, source_deg, 2001)
    tops = np.flatnonzero(levels > -0.05)
    lobes = [group.mean() for group in np.split(cosines[tops], np.flatnonzero(np.diff(tops) > 1) + 1)]
    expected = np.sort(np.cos(np.radians([source_deg, *image_deg])))[::-1]
    assert len(lobes) == len(expected)
    np.testing.assert_allclose(lobes, expected, atol=3e-3)  # a lobe cut off at endfire: half its top is seen


@pytest.mark.parametrize(
    ("per_wavelength", "clear_down_to_deg"), [(0.6, 48.1896851), (0.75, 70.52877937), (0.9, 83.62062979)]
)
def test_onset_of_images_by_steering(per_wavelength, clear_down_to_deg):
    """d/lambda < 1 / (1 + |cos|): a source at the limit has its image at the far endfire. Standing: recomputed."""
    far = [pattern_db(64, per_wavelength, clear_down_to_deg + off, 801)[-1] for off in (-0.01, 5.0)]
    assert far[0] == pytest.approx(0.0, abs=0.01)
    assert far[1] < -10


@pytest.mark.parametrize(
    ("steer", "arrival", "relative"),
    [
        (90, 90, 1.0), (90, 85, 0.1887040625), (90, 80, 0.03757176385), (60, 75, 0.01417907245),
        (60, 65, 0.2297757267), (120, 100, 0.009194419732),
    ],
)  # fmt: skip
def test_broadband_beam_of_a_flat_wave(steer, arrival, relative):
    """32 hydrophones 1.5 m apart, 100 to 500 Hz in 41 equal tones, incoherent sum. Standing: recomputed.

    1 % at 0.009: -40 dB of the wave, what is left of the wrap with uniform shading at P/N 0.05.
    """
    rate, frame = 4000.0, 4000
    x = line(32, 1.5)[:, 0] - line(32, 1.5)[:, 0].mean()
    t = np.arange(frame) / rate
    f = np.arange(100.0, 501.0, 10.0)
    phase = np.random.default_rng(0).uniform(0, 2 * np.pi, len(f))
    u = np.cos(np.radians(arrival))
    samples = sum(np.cos(2 * np.pi * a * (t + x[:, None] * u / C) + p) for a, p in zip(f, phase, strict=True))
    settings = settings_for(
        line(32, 1.5), rate=rate, frame=frame, beams=5, shading="uniform", average_s=0.0, band_hz=(100.0, 500.0)
    )
    levels = maps_of(BandStage(settings, settings.bands[0]), samples, frame, rate=rate)[0].level_db
    power = (10 ** (levels[{60: 1, 90: 2, 120: 3}[steer], ::10].astype(float) / 10)).mean()
    alone = 0.5 / (1.5 * rate / frame)  # density of a tone of amplitude 1, its own bin
    assert power / alone == pytest.approx(relative, rel=0.01)


def test_tone_between_bins_loses_the_tapers_scalloping():
    """Hann: 1.423622808 dB half a bin off, in the limit of a long window. Harris 1978, Table I; recomputed."""
    on, off = (one_map(tone(16, 0.375, 90.0, bins=b), 0.375, 3).level_db[1, 0] for b in (0.0, 0.5))
    assert on - off == pytest.approx(1.423622808, abs=2e-3)


def test_highest_side_lobe_of_the_taper():
    """Hann: -31.46730784 dB, 2.36 bins away. Harris 1978, Table I; recomputed. Read at bin K, tone 2.3 to 2.45 off."""
    on = one_map(tone(16, 0.375, 90.0), 0.375, 3).level_db[1, 0]
    side = [one_map(tone(16, 0.375, 90.0, bins=b), 0.375, 3).level_db[1, 0] for b in np.arange(2.3, 2.46, 0.02)]
    assert max(side) - on == pytest.approx(-31.46730784, abs=0.02)


def test_tone_reads_its_power_over_the_noise_bandwidth():
    """Hann: exactly 1.5 bins. Harris 1978; recomputed. Rms 1 uPa on a bin: 10 log10(1 / 1.5 df)."""
    level = one_map(tone(16, 0.375, 90.0), 0.375, 3).level_db[1, 0]
    assert level == pytest.approx(-10 * np.log10(1.5 * RATE / FRAME), abs=1e-4)


def test_sound_speed_taken_wrong_shifts_the_bearing():
    """cos estimated = cos true * used / true: 45 deg, 1500 for 1520 m/s, reads 45.7490173554. Recomputed."""
    samples = tone(48, 0.75, 45.0)
    slow = settings_for(
        line(48, 0.75), frame=FRAME, beams=2001, shading="uniform", average_s=0.0, c=C * 1500 / 1520,
        band_hz=(TONE - 2, TONE + 2),
    )  # fmt: skip
    levels = maps_of(BandStage(slow, slow.bands[0]), samples, FRAME)[0].level_db[:, 0]
    found = np.degrees(np.arccos(cos_grid(2001)[levels.argmax()]))
    assert found == pytest.approx(45.7490173554, abs=0.03)
