"""Beams against scipy: time series against convolution and exact delays, maps against its spectra of exact beams."""

import itertools

import numpy as np
import pytest
from plane_waves import RATE, C, advanced, hops, line, maps_of, noise_spectrum, on_line, settings_for
from scipy import signal

from soundrose.array.geometry import cos_grid, line_geometry
from soundrose.array.shading import shading_weights
from soundrose.beam.series import BeamSeries
from soundrose.beam.stage import BandStage
from soundrose.beam.steering import delay_filters

CHANNELS, SOURCE_DEG = 48, 60.0
FRAMES = 63  #: at least 60
X = line(CHANNELS)[:, 0] - line(CHANNELS)[:, 0].mean()


def db(ratio):
    return 20 * np.log10(ratio)


def rms(values, axis=None):
    return np.sqrt(np.mean(np.abs(values) ** 2, axis=axis))


def series_of(settings, cones, samples):
    series = BeamSeries(settings, settings.bands[0], cones)
    pieces = [piece for h in hops(samples, 2048) for piece in series.push(h)]
    assert all(a.first + a.samples.shape[1] == b.first for a, b in itertools.pairwise(pieces))
    return series, pieces[0].first, np.concatenate([piece.samples for piece in pieces], axis=1)


def test_beam_series_is_the_linear_convolution_with_the_same_filters():
    """scipy.signal.oaconvolve in double precision; within -120 dB of one hydrophone, rms (single precision alone)."""
    samples = on_line(noise_spectrum(1 << 15, RATE, 50, 7000), 1 << 15, line(CHANNELS), SOURCE_DEG).astype(np.float32)
    cones = [0.0, 37.0, 60.0, 90.0, 171.0]
    settings = settings_for(line(CHANNELS))
    series, first, beams = series_of(settings, cones, samples)
    weights = shading_weights("hann", line_geometry(line(CHANNELS), range(CHANNELS)))
    middle = (series.taps - 1) // 2
    for cone, beam in zip(cones, beams, strict=True):
        at, taps = delay_filters(X * np.cos(np.radians(cone)) / C * RATE)
        filters = np.zeros((CHANNELS, series.taps))
        np.put_along_axis(filters, np.clip(at + middle, 0, series.taps - 1), 0.0, axis=1)
        for m in range(CHANNELS):
            inside = taps[m] != 0
            filters[m, at[m, inside] + middle] = taps[m, inside]
        expected = (weights[:, None] * signal.oaconvolve(samples.astype(float), filters, axes=1)).sum(axis=0)
        expected = expected[middle + first : middle + first + len(beam)]
        assert db(rms(beam - expected) / rms(samples)) <= -120


@pytest.mark.parametrize(("top", "limit_db"), [(0.25, -90.0), (0.45, -75.0)])
@pytest.mark.parametrize("shading", ["uniform", "hann"])
def test_beam_series_is_within_the_filters_error_of_exact_delays(top, limit_db, shading):
    """Exact delays of a periodic signal by its Fourier series, at the array origin."""
    spectrum = noise_spectrum(1 << 15, RATE, 50, top * RATE)
    samples = on_line(spectrum, 1 << 15, line(CHANNELS), SOURCE_DEG)
    cones = [0.0, 25.0, 60.0, 90.0, 120.0, 180.0]
    settings = settings_for(line(CHANNELS), shading=shading)
    _, first, beams = series_of(settings, cones, samples)
    weights = shading_weights(shading, line_geometry(line(CHANNELS), range(CHANNELS)))
    for cone, beam in zip(cones, beams, strict=True):
        off = X * (np.cos(np.radians(SOURCE_DEG)) - np.cos(np.radians(cone))) / C
        exact = weights @ advanced(spectrum, 1 << 15, RATE, off)
        assert db(rms(beam - exact[first : first + len(beam)]) / rms(samples)) <= limit_db


class Spectra:
    """Tapered complex spectra of every beam and frame, and the maps, of one plane wave."""

    def __init__(self, frame, shading):
        self.frame, self.shading = frame, shading
        self.length = (FRAMES + 1) * frame // 2
        self.spectrum = noise_spectrum(self.length, RATE, 50, 0.45 * RATE)
        self.samples = on_line(self.spectrum, self.length, line(CHANNELS), SOURCE_DEG).astype(np.float32)
        self.settings = settings_for(line(CHANNELS), frame=frame, shading=shading, average_s=20.0)
        stage = BandStage(self.settings, self.settings.bands[0])
        kernel = stage._kernel
        self.taps, self.bins = kernel.steering.taps, kernel.steering.bins
        self.map = maps_of(stage, self.samples, frame // 2)[-1]
        self.window = signal.get_window("hann", frame)
        self.hydrophone = self.stft(self.samples[0].astype(float))
        self.untapered = []
        content = kernel.start()
        for start in range(0, self.length - frame + 1, frame // 2):
            transform = np.fft.rfft(self.samples[:, start : start + frame], axis=1).astype(np.complex64)
            beams = np.empty(content.shape, dtype=np.complex64)
            kernel.step(transform, 1.0, 0.0, content, None, beams)
            ordered = np.empty((145, kernel.bins), dtype=np.complex64)
            kernel.in_order(beams, ordered)
            self.untapered.append(ordered)
        self.untapered = np.stack(self.untapered)  # (frames, beams, bins)

    def stft(self, series):
        """(frames, bins) Hann-tapered spectra by scipy, frames from sample 0 each half frame."""
        transform = signal.ShortTimeFFT(self.window, self.frame // 2, RATE, phase_shift=None)
        first = transform.lower_border_end[1]
        spectra = transform.stft(series, p0=first, p1=first + FRAMES).T
        return spectra[:, self.bins[0] : self.bins[1]]

    def exact(self, beam_i):
        """(frames, bins) of the exactly delayed and summed beam."""
        weights = shading_weights(self.shading, line_geometry(line(CHANNELS), range(CHANNELS)))
        off = X * (np.cos(np.radians(SOURCE_DEG)) - cos_grid(145)[beam_i]) / C
        f = np.fft.rfftfreq(self.length, 1 / RATE)
        gain = (weights[:, None] * np.exp(2j * np.pi * f * off[:, None])).sum(axis=0)
        return self.stft(np.fft.irfft(self.spectrum * gain, self.length))


@pytest.mark.parametrize(
    ("frame", "shading", "level_floor_db", "rms_limit_db", "bin_limit_db"),
    [
        (4096, "hann", -35.0, -92.0, -72.0), (4096, "uniform", -35.0, -82.0, -72.0),
        (2048, "hann", -30.0, -78.0, None), (2048, "uniform", -30.0, -68.0, None),
    ],
)  # fmt: skip
def test_map_agrees_with_scipys_spectra_of_exact_beams(frame, shading, level_floor_db, rms_limit_db, bin_limit_db):
    """scipy.signal.ShortTimeFFT (periodic Hann, half overlap, at least 60 frames) of exactly delayed beams.

    P/N is 0.062 at 4096 and 0.124 at 2048. Levels within 0.05 dB wherever the exact beam is above the floor re one
    hydrophone; complex error re one hydrophone, rms over bins, below the limit on every beam; no bin above the other.
    """
    spectra = Spectra(frame, shading)
    assert len(spectra.untapered) == FRAMES
    assert spectra.taps / frame == pytest.approx(0.062 if frame == 4096 else 0.124, abs=0.001)
    a = -np.expm1(-frame / 2 / RATE / 20.0)
    kept = a * (1 - a) ** np.arange(len(spectra.untapered))[::-1]
    kept /= kept.sum()
    one = rms(spectra.hydrophone)
    one_db = 10 * np.log10(kept @ np.abs(spectra.hydrophone) ** 2)
    density = 10 * np.log10(2 / (RATE * np.sum(spectra.window**2)))
    judged = 0
    for beam_i in range(0, 145, 4):
        exact = spectra.exact(beam_i)
        y = spectra.untapered[:, beam_i]
        tapered = y[:, 1:-1] / 2 - (y[:, 2:] + y[:, :-2]) / 4
        error = tapered - exact[:, 1:-1]
        assert db(rms(error) / one) <= rms_limit_db
        if bin_limit_db is not None:
            assert db(rms(error, axis=0).max() / one) <= bin_limit_db
        exact_db = 10 * np.log10(kept @ np.abs(exact) ** 2)
        off = np.abs(spectra.map.level_db[beam_i] - exact_db - density)[exact_db - one_db >= level_floor_db]
        judged += len(off)
        assert off.max(initial=0) <= 0.05
    assert judged > 1000


def reversed_fft2(samples, frame):
    """|fft2|^2 of one frame with the channel axis reversed: rows k_x (from 0 up, wrapped), columns f."""
    return np.abs(np.fft.fft2(samples[::-1, :frame] * signal.get_window("hann", frame))) ** 2


def test_plane_wave_is_a_point_of_fft2_and_the_map_reads_along_its_line():
    """numpy.fft.fft2 of a uniform line, channel axis reversed so that x rises: a wave from 40 deg has k_x > 0.

    The frequency is chosen so that k_x falls on a row: f cos(40)/c = n / (M d). There, fft2 of the uniformly
    weighted line IS the beam power at cos = k_x c / (2 pi f): read along that line it agrees with the map.
    """
    channels, spacing, frame, cone, row = 48, 0.375, 4096, 40.0, 8
    k = round(row / (channels * spacing) * C / np.cos(np.radians(cone)) / RATE * frame)
    f = k * RATE / frame  # on a bin; the sound speed is chosen so that k_x stays on its row
    c = f * np.cos(np.radians(cone)) * channels * spacing / row
    t = np.arange(2 * frame) / RATE
    x = X[:, None]
    samples = np.cos(2 * np.pi * f * (t + x * np.cos(np.radians(cone)) / c)).astype(np.float32)
    plane = reversed_fft2(samples, frame)[:, : frame // 2]
    assert np.unravel_index(plane.argmax(), plane.shape) == (row, k)

    settings = settings_for(line(channels), shading="uniform", average_s=0.0, c=c, beams=145)
    stage = BandStage(settings, settings.bands[0])
    product = maps_of(stage, samples, frame)[0]
    levels = product.level_db[:, k - stage._bins[0]]
    cosines = cos_grid(145)
    assert abs(cosines[levels.argmax()] - np.cos(np.radians(cone))) <= 1 / 144 + 1e-9
    # the transform is read between its rows by zero padding; further down, its taper before the delay shows
    padded = np.abs(np.fft.fft(np.fft.rfft(samples[::-1, :frame] * signal.get_window("hann", frame))[:, k], 1 << 16))
    judged = 0
    for beam_i in range(145):
        cycles_per_m = f * cosines[beam_i] / c
        read = padded[round(cycles_per_m * spacing * (1 << 16)) % (1 << 16)] / channels
        density = 10 * np.log10(2 * read**2 / (RATE * 3 * frame / 8))
        if density > levels.max() - 25:
            judged += 1
            assert levels[beam_i] == pytest.approx(density, abs=0.05)
    assert judged > 40


def test_reversed_channel_order_would_turn_the_bearing_round():
    """The check of the sign has teeth: the same wave with the channels reversed lies at 140 deg, not at 40."""
    samples = on_line(noise_spectrum(1 << 13, RATE, 200, 1500), 1 << 13, line(CHANNELS), 40.0).astype(np.float32)
    settings = settings_for(line(CHANNELS), average_s=0.0, band_hz=(200.0, 1500.0))
    for turned, cone in ((samples, 40.0), (samples[::-1], 140.0)):
        product = maps_of(BandStage(settings, settings.bands[0]), turned, 2048)[0]
        loudest = np.mean(10 ** (product.level_db / 10), axis=1).argmax()
        assert product.header["cone_deg"][loudest] == pytest.approx(cone, abs=1.0)


def test_tone_on_a_bin_and_white_noise_read_as_scipys_welch():
    """scipy.signal.welch (Hann, half overlap, density) of one hydrophone of a wave from broadside, its own beam.

    welch averages all frames alike: average_s is made so long that the weights differ by less than 1e-6.
    """
    frame, k = 4096, 300
    rng = np.random.default_rng(5)
    length = 40 * 2048
    pressure = rng.standard_normal(length) * 1e3 + 3e3 * np.sqrt(2) * np.cos(2 * np.pi * k / frame * np.arange(length))
    samples = np.tile(pressure, (CHANNELS, 1)).astype(np.float32)
    settings = settings_for(line(CHANNELS), average_s=1e7)
    stage = BandStage(settings, settings.bands[0])
    product = maps_of(stage, samples, 2048)[-1]
    f, density = signal.welch(pressure, RATE, "hann", frame, frame // 2, detrend=False)
    inside = slice(*stage._bins)
    assert product.header["f0_hz"] == pytest.approx(f[inside][0])
    assert product.header["df_hz"] == pytest.approx(f[1])
    np.testing.assert_allclose(product.level_db[72], 10 * np.log10(density[inside]), atol=2e-3)
    # the tone: rms 3e3 uPa in a noise bandwidth of 1.5 bins, and the noise: 1e6 uPa^2 over half the rate
    tone = 10 * np.log10(9e6 / (1.5 * RATE / frame) + 1e6 / (RATE / 2))
    assert product.level_db[72][k - stage._bins[0]] == pytest.approx(tone, abs=0.3)
    assert np.mean(10 ** (product.level_db[72] / 10)[400:]) == pytest.approx(1e6 / (RATE / 2), rel=0.02)
