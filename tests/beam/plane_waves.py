"""Exact plane waves on a line, and the settings and hops to send them to a band."""

from dataclasses import replace

import numpy as np

from soundrose.feed.hop import Hop
from soundrose.settings_types import (
    ArraySettings,
    BandSettings,
    CalibrationSettings,
    FeedSettings,
    Settings,
    WaterSettings,
)

C = 1500.0
RATE = 16000.0
T0 = 1_796_133_600_000_000_000  # an invented start, ns


def line(channels, spacing=0.375):
    """(channels, 3) a uniform line, the foremost hydrophone first, not yet about its mean."""
    return np.array([(-spacing * m, 0.0, 0.0) for m in range(channels)])


def settings_for(positions, *, rate=RATE, delay_s=0.0, c=C, **band):
    """Settings with one band 'main' on all hydrophones; keywords override the band's values."""
    count = len(positions)
    values = {
        "name": "main", "band_hz": (50.0, 4000.0), "frame": 4096, "beams": 145, "channels": tuple(range(count)),
        "shading": "hann", "average_s": 2.0,
    }  # fmt: skip
    values.update(band)
    skews = (delay_s,) * count if isinstance(delay_s, float) else tuple(delay_s)
    return Settings(
        array=ArraySettings("aft", tuple(tuple(float(v) for v in p) for p in positions)),
        feed=FeedSettings(rate_hz=rate),
        calibration=CalibrationSettings((-180.0,) * count, (20.0,) * count, (2.5,) * count, skews),
        water=WaterSettings(c),
        bands=(BandSettings(**values),),
    )


def with_band(settings, **changes):
    """The same settings with the first band changed."""
    return replace(settings, bands=(replace(settings.bands[0], **changes), *settings.bands[1:]))


def noise_spectrum(length, rate, low, high, seed=1):
    """(length/2 + 1,) complex128 spectrum of a periodic Gaussian signal between low and high, rms 1."""
    rng = np.random.default_rng(seed)
    f = np.fft.rfftfreq(length, 1 / rate)
    s = (rng.standard_normal(len(f)) + 1j * rng.standard_normal(len(f))) * ((f >= low) & (f <= high))
    s[0] = s[-1] = 0
    return s / np.sqrt(np.mean(np.fft.irfft(s, length) ** 2))


def advanced(spectrum, length, rate, seconds):
    """p(t + seconds) for each of `seconds`: (n, length) float64, exact for the periodic signal."""
    f = np.fft.rfftfreq(length, 1 / rate)
    return np.stack([np.fft.irfft(spectrum * np.exp(2j * np.pi * f * s), length) for s in np.atleast_1d(seconds)])


def on_line(spectrum, length, positions, cone_deg, *, rate=RATE, c=C, delay_s=0.0):
    """(channels, length) float64: what the hydrophones record of a plane wave, p(t) at the mean of all positions."""
    x = positions[:, 0] - positions[:, 0].mean()
    return advanced(spectrum, length, rate, x * np.cos(np.radians(cone_deg)) / c + delay_s)


def hop(samples, first=0, *, epoch=0, run="r", bad=None, clipped=None, t0=T0, rate=RATE, received_ns=0):
    """A hop of these samples, its one block's time being t0 at sample 0."""
    count = len(samples)
    return Hop(
        run=run, epoch=epoch, first=first,
        times=np.array([[first, t0 + round(first * 1e9 / rate)]], dtype=np.int64),
        samples=np.ascontiguousarray(samples, dtype=np.float32),
        bad=np.zeros(count, dtype=bool) if bad is None else np.asarray(bad, dtype=bool),
        clipped=np.zeros(count, dtype=np.int32) if clipped is None else np.asarray(clipped, dtype=np.int32),
        received_ns=received_ns,
    )  # fmt: skip


def hops(samples, lengths, first=0, **keywords):
    """Cut samples into hops whose lengths go round in `lengths`; the last may be shorter."""
    at, turn = 0, 0
    lengths = [lengths] if isinstance(lengths, int) else lengths
    while at < samples.shape[1]:
        n = lengths[turn % len(lengths)]
        yield hop(samples[:, at : at + n], first + at, **keywords)
        at, turn = at + n, turn + 1


def maps_of(stage, samples, lengths, **keywords):
    """Every map that a stage makes of these samples."""
    return [m for h in hops(samples, lengths, **keywords) for m in stage.push(h)]
