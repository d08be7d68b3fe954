"""Noise fields of a scene against closed forms: coherence between hydrophones, level, convection."""

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import j0

from soundrose.scene.field import FieldNoise, ambient_covariance, coherence, flow_covariance
from soundrose.scene.scene_types import Ambient, Flow

SPEED, RATE, HOP = 1500.0, 8000.0, 512
LINE = np.stack([np.array([0.9, 0.3, 0.0, -0.45]), np.zeros(4), np.zeros(4)], axis=1)


def spectra_of(noise, hops=600):
    """Averaged cross spectra (bins, channels, channels), one-sided density, and their bin frequencies."""
    frame = 512
    made = noise.make(0, hops).astype(float)
    taper = np.hanning(frame + 1)[:-1]
    starts = range(0, made.shape[1] - frame, frame // 2)
    total = 0
    for start in starts:
        spectrum = np.fft.rfft(made[:, start : start + frame] * taper, axis=1)
        total = total + np.einsum("mf,nf->fmn", spectrum, spectrum.conj())
    return total / len(starts) * 2 / (RATE * (taper**2).sum()), np.arange(frame // 2 + 1) * RATE / frame


@pytest.mark.parametrize(
    ("wavelengths", "value"),
    [(0.1, 0.935489283789), (0.25, 0.636619772368), (0.5, 0.0), (0.75, -0.212206590789), (1.0, 0.0)],
)
def test_isotropic_coherence_of_two_hydrophones(wavelengths, value):
    """sin(kd)/(kd), Cron and Sherman 1962, JASA 34(11) 1732-1736 (standing: recomputed)."""
    places = np.array([[0.0, 0, 0], [0, 0, 2.0]])  # any direction
    found = coherence("isotropic", np.array([2 * np.pi * wavelengths / 2.0]), places)
    assert found[0, 0, 1] == pytest.approx(value, abs=1e-10)
    assert found[0, 0, 0] == 1


@pytest.mark.parametrize("kd", [0.0, 0.5, 2.0, 3.8317, 7.0])
def test_surface_coherence_is_the_integral_over_the_surface(kd):
    """2 J1(kd)/(kd) (Cron and Sherman 1962), derived a second way: vertical dipoles spread over the surface give the
    power cos(a) sin(a) da from the polar angle a, each ring a J0(kd sin a)."""
    total, _ = quad(lambda a: 2 * np.cos(a) * np.sin(a) * j0(kd * np.sin(a)), 0, np.pi / 2)
    places = np.array([[0.0, 0, 0], [1.0, 0, 0]])
    assert coherence("surface", np.array([kd]), places)[0, 0, 1] == pytest.approx(total, abs=1e-9)


@pytest.mark.parametrize("shape", ["isotropic", "surface"])
def test_noise_that_is_made_has_level_and_coherence(shape):
    """Against the closed forms above; 600 half-overlapping frames: 4.1 % standard error of each cross spectrum bin, so
    the mean over 16 bins is good to 0.011 or so and 0.04 is far outside chance."""
    ambient = Ambient(shape=shape, flat_db=60.0, electronic_db=40.0)
    frequency = np.arange(HOP + 1) * RATE / (2 * HOP)
    noise = FieldNoise(ambient_covariance(ambient, frequency, LINE, SPEED), RATE, np.zeros(4), (1, 0))
    found, f = spectra_of(noise)
    inside = (f > 200) & (f < 3400)
    for m in range(4):
        power = found[inside, m, m].real
        assert 10 * np.log10(power.mean()) == pytest.approx(10 * np.log10(1e6 + 1e4), abs=0.05)
        for n in range(m):
            true = coherence(shape, 2 * np.pi * f[inside] / SPEED, LINE)[:, m, n]
            error = found[inside, m, n] / 1e6 - true
            blocks = error[: len(error) // 16 * 16].reshape(-1, 16).mean(axis=1)
            assert np.abs(blocks).max() < 0.04


def test_flow_is_carried_aft_and_fades_as_it_goes():
    """Corcos 1963, JASA 35(2) 192-199 (standing: memory), loss 0.115 per radian: between hydrophones d apart the phase
    is w d / U and the coherence exp(-0.115 w d / U). With U = 80 m/s both are large enough to measure."""
    flow, speed = Flow(level_db=60.0, slope_db=0.0, convection=0.8), 100.0
    frequency = np.arange(HOP + 1) * RATE / (2 * HOP)
    noise = FieldNoise(flow_covariance(flow, speed, frequency, LINE[:, 0]), RATE, np.zeros(4), (1, 0))
    found, f = spectra_of(noise)
    for bin_i in (8, 16, 32):  # 125, 250, 500 Hz; 0 forward, 1 aft of it by 0.6 m
        phase = 2 * np.pi * f[bin_i] * 0.6 / 80.0
        assert np.abs(found[bin_i, 0, 1] / 1e6 - np.exp(-0.115 * phase + 1j * phase)) < 0.15
    assert 10 * np.log10(found[10:200, 2, 2].real.mean()) == pytest.approx(60.0, abs=0.1)


def test_electronic_noise_is_white_in_space():
    ambient = Ambient(enabled=False, electronic_db=40.0)
    frequency = np.arange(HOP + 1) * RATE / (2 * HOP)
    found, f = spectra_of(FieldNoise(ambient_covariance(ambient, frequency, LINE, SPEED), RATE, np.zeros(4), (1, 0)))
    inside = (f > 200) & (f < 3400)
    assert np.abs(found[inside, 0, 1].mean()) / 1e4 < 0.02
    assert 10 * np.log10(found[inside, 0, 0].real.mean()) == pytest.approx(40.0, abs=0.05)
