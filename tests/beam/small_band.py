"""A small band to try things on, and what to read off its maps."""

import numpy as np
from plane_waves import RATE, line, noise_spectrum, on_line, settings_for

from soundrose.array.geometry import cos_grid
from soundrose.beam.stage import BandStage

FRAME, CHANNELS = 1024, 16
LINE = line(CHANNELS)
LENGTH = 1 << 14
SETTINGS = settings_for(LINE, frame=FRAME, beams=33, band_hz=(500.0, 1900.0), average_s=0.5)
#: dB re 1 uPa^2/Hz of noise with rms 1 uPa between 400 and 2000 Hz
DENSITY_DB = -10 * np.log10(1600.0)


def stage(settings=SETTINGS, **keywords):
    return BandStage(settings, settings.bands[0], **keywords)


def wave(cone_deg, *, positions=LINE, length=LENGTH, seed=1, **keywords):
    spectrum = noise_spectrum(length, RATE, 400, 2000, seed)
    return on_line(spectrum, length, positions, cone_deg, **keywords).astype(np.float32)


def beam_levels(product):
    """(beams,) dB, mean power over bins."""
    return 10 * np.log10(np.mean(power_of(product), axis=1))


def power_of(product):
    return 10 ** (product.level_db.astype(float) / 10)


def loudest_deg(product):
    return product.header["cone_deg"][int(beam_levels(product).argmax())]


def nearest_deg(cone_deg, beams=33):
    cosines = cos_grid(beams)
    return np.degrees(np.arccos(cosines[np.abs(cosines - np.cos(np.radians(cone_deg))).argmin()]))


def same_maps(ones, others):
    assert len(ones) == len(others)
    for one, other in zip(ones, others, strict=True):
        np.testing.assert_array_equal(one.level_db, other.level_db)
        assert one.header == other.header
