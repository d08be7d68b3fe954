"""What sources give off: levels, shapes, schedules, lots."""

import numpy as np
import pytest
from small_scene import level_db

from soundrose.scene.field import FieldNoise
from soundrose.scene.scene_types import Clicks, Events, Motor, Pulse, Schedule, Shot, Sweep
from soundrose.scene.waveforms import LOT, Timetable, WaveformBuffer, motor_density, shape_samples, waveform

RATE = 8000.0


def made(sound, lots, first=0):
    wave = waveform(sound, RATE, (5, 1))
    return np.concatenate([wave.make(first + i) for i in range(lots)]).astype(float)


def density(samples, rate, frame=2048):
    taper = np.hanning(frame + 1)[:-1]
    starts = range(0, len(samples) - frame, frame // 2)
    power = np.mean([np.abs(np.fft.rfft(samples[s : s + frame] * taper)) ** 2 for s in starts], axis=0)
    return power * 2 / (rate * (taper**2).sum()), np.arange(frame // 2 + 1) * rate / frame


def test_ship_noise_has_the_spectrum_asked_for_whatever_its_beat():
    for depth in (0.0, 0.7):
        motor = Motor(140.0, corner_hz=300.0, slope_db=20.0, blade_hz=6.0, modulation=depth)
        found, f = density(made(motor, 200), 2 * RATE)
        for low, high in ((100, 200), (900, 1100), (3000, 3500)):
            inside = (f > low) & (f < high)
            ratio = found[inside].mean() / motor_density(motor, f[inside]).mean()
            assert 10 * np.log10(ratio) == pytest.approx(0, abs=0.25)
    assert 10 * np.log10(motor_density(motor, np.array([1000.0]))[0]) == pytest.approx(140.0)


def test_nothing_is_given_off_above_half_the_arrays_rate():
    found, f = density(made(Motor(140.0, slope_db=0.0), 60), 2 * RATE)
    assert found[f > 0.51 * RATE].max() < 1e-8 * found[(f > 500) & (f < 3000)].mean()


def test_ship_noise_beats_at_the_blade_rate():
    samples = made(Motor(140.0, slope_db=0.0, blade_hz=6.0, modulation=0.7), 200)
    power = (samples**2).reshape(-1, 64).mean(axis=1)  # 4 ms
    spectrum = np.abs(np.fft.rfft(power - power.mean()))
    f = np.arange(len(spectrum)) * (2 * RATE / 64) / len(power)
    assert f[np.argmax(spectrum)] == pytest.approx(6.0, abs=0.05)


def test_tone_has_its_level_and_frequency():
    samples = made(Motor(-300.0, tones=((440.0, 150.0),)), 8)
    assert level_db(samples) == pytest.approx(150.0, abs=0.02)
    f = np.argmax(np.abs(np.fft.rfft(samples))) * 2 * RATE / len(samples)
    assert f == pytest.approx(440.0, abs=0.5)


@pytest.mark.parametrize("shape", [Sweep(150.0, 0.4, 800.0, 2400.0), Sweep(150.0, 0.02, 3000.0, 3000.0)])
def test_level_of_a_sweep_is_its_mean_square_over_its_length(shape):
    t = np.arange(0, shape.length_s, 1 / (2 * RATE))
    assert level_db(shape_samples(shape, t)) == pytest.approx(150.0, abs=0.1)


@pytest.mark.parametrize(
    "shape", [Pulse(150.0, 0.05, 1000.0), Clicks(150.0, 4, 0.03, 1500.0), Shot(150.0, 60.0, 0.1)], ids=str
)
def test_level_of_short_sounds_is_their_peak(shape):
    t = np.arange(0, shape.length_s, 1 / (64 * RATE))
    assert 20 * np.log10(np.abs(shape_samples(shape, t)).max()) == pytest.approx(150.0, abs=0.2)
    assert abs(shape_samples(shape, np.array([0.0]))[0]) < 0.02 * 10**7.5  # begins softly


def test_a_click_train_has_its_count_and_gaps():
    shape = Clicks(150.0, 4, 0.03, 1500.0)
    t = np.arange(0, shape.length_s, 1 / (16 * RATE))
    loud = np.flatnonzero(shape_samples(shape, t) > 0.95 * 10**7.5)
    starts = t[loud[np.insert(np.diff(loud) > 100, 0, True)]]
    assert len(starts) == 4
    assert np.diff(starts) == pytest.approx(0.03, abs=1e-4)


def test_a_sweep_goes_from_its_first_frequency_to_its_last():
    shape = Sweep(150.0, 1.0, 500.0, 1500.0)
    t = np.arange(0, 1, 1 / RATE)
    turns = np.unwrap(np.angle(_analytic(shape_samples(shape, t))))
    frequency = np.gradient(turns, t) / 2 / np.pi
    assert frequency[800] == pytest.approx(600.0, abs=5)
    assert frequency[7200] == pytest.approx(1400.0, abs=5)


def _analytic(x):
    spectrum = np.fft.fft(x)
    spectrum[len(x) // 2 :] = 0
    return np.fft.ifft(2 * spectrum)


def events_of(**schedule):
    return Events(Schedule(**schedule), (Sweep(150.0, 0.1, 500.0, 500.0),))


def test_schedule_keeps_its_intervals_and_its_silences():
    events = events_of(first_s=1.0, interval_s=(2.0, 3.0), bout_s=(30.0, 40.0), silence_s=(100.0, 120.0))
    starts = np.array([e.start_s for e in Timetable(events, (1, 2)).between(0.0, 3000.0)])
    gaps = np.diff(starts)
    short, long = gaps[gaps < 50], gaps[gaps > 50]
    assert starts[0] == 1.0
    assert short.min() >= 2.0
    assert short.max() <= 3.0
    assert len(long) > 10
    assert long.min() >= 102.0
    assert long.max() <= 123.0


def test_timetable_is_the_same_however_it_is_asked():
    events = events_of(first_s=0.0, interval_s=(0.2, 0.9))
    whole = [e.start_s for e in Timetable(events, (1, 2)).between(0.0, 60.0)]
    table = Timetable(events, (1, 2))
    parts = [e.start_s for k in range(60) for e in table.between(float(k), k + 1.0) if k <= e.start_s < k + 1]
    assert parts == whole
    assert len(table._known) < 10  # what is past is forgotten


def test_any_lot_can_be_made_by_itself():
    for sound in (Motor(140.0, modulation=0.5, tones=((100.0, 130.0),)), events_of(first_s=0.3, interval_s=(0.4, 0.5))):
        row = made(sound, 6)
        assert np.array_equal(waveform(sound, RATE, (5, 1)).make(4), row[4 * LOT : 5 * LOT].astype(np.float32))


def test_buffer_holds_what_is_in_use_and_no_more():
    buffer = WaveformBuffer(waveform(Motor(140.0), RATE, (1, 1)))
    for k in range(50):
        samples, first = buffer.hold(k * 3000 - 7000, k * 3000 + 2000)
        assert first <= k * 3000 - 7000
        assert first + len(samples) >= k * 3000 + 2000
        assert len(samples) <= 5 * LOT


def test_noise_of_a_field_has_no_seams():
    """In pieces as in one, and as loud beside a seam as between."""
    covariance = np.ones((65, 1, 1)) * 1e6
    whole = FieldNoise(covariance, RATE, np.zeros(1), (1, 0)).make(0, 4000)
    pieces = FieldNoise(covariance, RATE, np.zeros(1), (1, 0))
    parts = [pieces.make(k, 2) for k in range(0, 4000, 2)]
    assert np.array_equal(np.concatenate(parts, axis=1), whole)
    assert np.array_equal(FieldNoise(covariance, RATE, np.zeros(1), (1, 0)).make(1000, 2), parts[500])
    power = (whole.reshape(-1, 128).astype(float) ** 2).mean(axis=0).reshape(16, 8).mean(axis=1)
    assert 10 * np.log10(power / power.mean()) == pytest.approx(np.zeros(16), abs=0.25)  # 16000 values each: 0.05 dB
