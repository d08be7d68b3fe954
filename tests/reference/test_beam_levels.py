"""Levels through the whole band: from counts to decibels, and averages against Monte Carlo."""

import numpy as np
import pytest
from plane_waves import RATE, hop, line, maps_of, settings_for

from soundrose.beam.stage import BandStage


def test_from_counts_to_decibels():
    """-180 dB re 1 V/uPa, 20 dB gain, 2.5 V full scale, 24 bit: 33554.432 counts rms are 120 dB re 1 uPa.

    Worked from the definitions: 2.9802322387695e-05 Pa per count. Standing: recomputed. The band level is the sum of
    densities over the tone's bins: Hann spreads it over three, (1 + 1/4 + 1/4) / 1.5.
    """
    upa_per_count = 2.9802322387695e-05 * 1e6
    counts = np.round(33554.432 * np.sqrt(2) * np.cos(2 * np.pi * 300 / 4096 * np.arange(4096)))
    settings = settings_for(line(16), average_s=0.0)
    product = maps_of(BandStage(settings, settings.bands[0]), np.tile(counts * upa_per_count, (16, 1)), 4096)[0]
    beam = 10 ** (product.level_db[72].astype(float) / 10)
    assert 10 * np.log10(beam.sum() * product.header["df_hz"]) == pytest.approx(120.0, abs=1e-3)


@pytest.mark.parametrize(
    ("average_s", "parts"),
    [
        (0.02, [(0, 256 * 10)]),  # settled: 2.5 hops of time constant, 19 frames
        (0.2, [(0, 256 * 5)]),  # still filling: 9 frames
        (0.05, [(0, 256 * 3), (256 * 4 + 31, 256 * 3)]),  # a gap in the middle
        (0.0, [(0, 256 * 2)]),
    ],
)
def test_averages_are_what_monte_carlo_says(average_s, parts):
    """`averages` is mean^2 / variance of one bin's power in white Gaussian noise.

    400 runs of 80 bins on a beam; bins two apart are nearly independent, so 16000 and more samples: the relative
    variance is known to about 2 % (more for few frames: its own kurtosis), 6 % is asked for. Seeded, so it is steady.
    """
    settings = settings_for(
        line(2), frame=256, beams=3, shading="uniform", average_s=average_s, band_hz=(1000.0, 1000.0 + 79 * 62.5)
    )
    stage = BandStage(settings, settings.bands[0])
    rng = np.random.default_rng(11)
    powers, averages = [], set()
    for epoch in range(400):
        for first, length in parts:
            noise = rng.standard_normal((2, length))
            maps = stage.push(hop(noise, first, epoch=epoch, run=str(epoch)))
        powers.append(10 ** (maps[-1].level_db[1].astype(float) / 10))
        averages.add(round(maps[-1].header["averages"], 9))
    mean = 2 / RATE / 2  # two hydrophones of unit variance, averaged
    relative = np.mean((np.array(powers) - mean) ** 2) / mean**2
    assert np.mean(powers) == pytest.approx(mean, rel=0.02)
    assert len(averages) == 1
    assert averages.pop() == pytest.approx(1 / relative, rel=0.06)


def test_white_noise_of_independent_hydrophones_reads_lower_by_the_array_gain():
    """Uniform shading: 10 log10 M below one hydrophone; Hann of 16: by its 1 / sum w^2 = 16 / 1.6 (recomputed)."""
    rng = np.random.default_rng(3)
    noise = rng.standard_normal((16, 60 * 512)).astype(np.float32)
    for shading, hydrophones in (("uniform", 16.0), ("hann", 16 / 1.6)):
        settings = settings_for(line(16), frame=1024, beams=33, shading=shading, average_s=100.0)
        levels = maps_of(BandStage(settings, settings.bands[0]), noise, 512)[-1].level_db.astype(float)
        assert np.mean(10 ** (levels / 10)) == pytest.approx(2 / RATE / hydrophones, rel=0.03)
