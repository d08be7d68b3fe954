"""Plane waves: delay, level, repetition; each against a second way of getting it."""

import numpy as np
import pytest
import scipy.signal

from soundrose.errors import UsageError
from soundrose.scene.plane import Noise, PlaneWaves, Tone, to_counts

RATE, SPEED = 8000.0, 1500.0
METRE = SPEED / RATE  # one sample of travel
BAND = (200.0, 3000.0)


def line(*samples: float) -> np.ndarray:
    """Hydrophones so many samples of travel forward of the origin (their mean must be 0)."""
    assert abs(sum(samples)) < 1e-12
    return np.array([[s * METRE, 0.0, 0.0] for s in samples])


def waves(positions, *arrivals, **keys):
    return PlaneWaves(positions, RATE, SPEED, arrivals, **keys)


def test_forward_hydrophone_hears_a_forward_sound_first():
    """Three samples of travel forward: the same samples, three earlier."""
    made = waves(line(3.0, -3.0), Noise(0.0, 60.0, BAND), seed=2).block(0, 400)
    assert made[0, :-6] == pytest.approx(made[1, 6:], abs=1e-9 * np.abs(made).max())


def test_sound_from_aft_and_from_broadside():
    aft = waves(line(3.0, -3.0), Noise(180.0, 60.0, BAND)).block(0, 400)
    assert aft[1, :-6] == pytest.approx(aft[0, 6:], abs=1e-9 * np.abs(aft).max())
    broadside = waves(line(3.0, -3.0), Noise(90.0, 60.0, BAND)).block(0, 400)
    assert broadside[0] == pytest.approx(broadside[1], abs=1e-9 * np.abs(broadside).max())


def test_fractional_delay_agrees_with_the_shift_theorem():
    """Over a whole period the transform turns by exp(j 2 pi f delay): the textbook way, exact for what is periodic."""
    period, delay = 4000, 2.37
    made = waves(line(delay, -delay), Noise(0.0, 80.0, BAND), period=period).block(0, period)
    turn = np.exp(2j * np.pi * np.fft.rfftfreq(period) * 2 * delay)
    turned = np.fft.irfft(np.fft.rfft(made[1]) * turn, period)
    error = np.sqrt(np.mean((turned - made[0]) ** 2) / np.mean(made[0] ** 2))
    assert 20 * np.log10(error) < -95  # the kernel is 100 dB down out of the band, where the two ways differ


def test_noise_has_its_level_in_the_band_and_nothing_beside_it():
    made = waves(line(0.0), Noise(50.0, 70.0, (1000.0, 2000.0)), seed=3).block(0, 400_000)
    frequency, density = scipy.signal.welch(made[0], RATE, "hann", 1000, detrend=False)
    inside = (frequency > 1100) & (frequency < 1900)
    level = 10 * np.log10(density[inside].mean())
    assert level == pytest.approx(70.0, abs=0.1)  # 800 averages x 100 bins: 0.02 dB sigma
    outside = (frequency < 850) | (frequency > 2150)
    assert 10 * np.log10(density[outside].max()) < 70 - 85  # Hann's own side lobes end there


def test_tone_has_its_mean_square_level_and_phase():
    made = waves(line(1.0, -1.0), Tone(60.0, 100.0, 1000.0, phase=0.3)).block(0, 8000)
    assert 10 * np.log10(np.mean(made**2, axis=1)) == pytest.approx([100.0, 100.0], abs=1e-9)
    wanted = np.sqrt(2) * 1e5 * np.cos(2 * np.pi / 8 * 0.5 + 0.3)  # half a sample early at cos 60 deg
    assert made[0, 0] == pytest.approx(wanted, rel=1e-12)


def test_sensor_noise_is_white_and_independent():
    made = waves(line(1.0, -1.0), sensor_db=50.0, seed=4).block(0, 200_000)
    level = 10 * np.log10(np.mean(made**2, axis=1) / (RATE / 2))
    assert level == pytest.approx([50.0, 50.0], abs=0.1)
    assert abs(np.corrcoef(made)[0, 1]) < 0.01


def sea(**keys):
    return waves(line(4.5, 0.25, -4.75), Noise(40, 60, BAND), Tone(110, 80, 500.0), sensor_db=30, **keys)


def test_cutting_the_blocks_changes_no_bit():
    whole = sea(seed=5).block(0, 30_000)
    source = sea(seed=5)
    pieces = [source.block(first, length) for first, length in ((0, 1), (1, 8200), (8201, 21_799))]
    assert np.concatenate(pieces, axis=1).tobytes() == whole.tobytes()
    assert np.concatenate(list(source.blocks(30_000, 7000)), axis=1).tobytes() == whole.tobytes()
    assert source.block(12_345, 10).tobytes() == whole[:, 12_345:12_355].tobytes()


def test_seed_decides():
    assert not np.array_equal(sea(seed=1).block(0, 100), sea(seed=2).block(0, 100))


@pytest.mark.parametrize("period", [4000, 20_000, 16_384])
def test_period_repeats_without_a_seam(period):
    made = sea(seed=6, period=period).block(0, 2 * period + 500)
    scale = np.abs(made).max()
    assert made[:, period:] == pytest.approx(made[:, : period + 500], abs=1e-9 * scale)
    assert not np.allclose(made[:, : period // 2], made[:, period // 2 : period], atol=0.1 * scale)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: PlaneWaves(np.zeros((3, 2)), RATE, SPEED, []), r"\(channels, 3\)"),
        (lambda: waves(line(0.0), Noise(181.0, 0.0, BAND)), "0 to 180"),
        (lambda: waves(line(0.0), Noise(0.0, 0.0, (300.0, 200.0))), "must rise"),
        (lambda: waves(line(0.0), Noise(0.0, 0.0, (0.0, 3999.0))), "at most"),
        (lambda: waves(line(0.0), Tone(0.0, 0.0, 0.0)), "above 0"),
        (lambda: waves(line(0.0), Tone(0.0, 0.0, 3.0), period=8000 // 2), "multiple of 2"),
        (lambda: waves(line(0.0)).block(-1, 5), "at least 0 and 1"),
    ],
)
def test_impossible_seas_are_refused(call, words):
    with pytest.raises(UsageError, match=words):
        call()


def test_counts_of_a_worked_chain():
    """1e8 µPa (160 dB) at -180 dB re 1 V/µPa and 20 dB gain is 1 V; of 2.5 V full scale in 16 bit 13107.2 counts."""
    counts = to_counts(np.array([[1e8, -1e8, 0.0]]), -180.0, 20.0, 2.5, 16)
    assert counts.tolist() == [[13107, -13107, 0]]
    assert to_counts(np.array([[1e8]]), -180.0, 20.0, 2.5, 24).tolist() == [[3355443]]  # 0.4 * 2**23 = 3355443.2


def test_counts_over_full_scale_are_refused():
    with pytest.raises(UsageError, match=r"6\.0 dB over full scale \(2\.5 V\)"):
        to_counts(np.array([[5e8]]), -180.0, 20.0, 2.5, 16)
