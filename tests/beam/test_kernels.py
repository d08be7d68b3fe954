"""Both kernels against a plain double-precision sum, against each other, and against what must not matter."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from plane_waves import line

from soundrose.array.geometry import cos_grid, line_geometry
from soundrose.array.shading import shading_weights
from soundrose.beam.kernels import CHUNK, GeneralKernel, PairKernel, make_kernel
from soundrose.beam.steering import Steering, delay_transforms
from soundrose.errors import UsageError

FRAME = 1024


def steering(channels=9, beams=11, bins=(3, 300), *, shading="hamming", delay=None, positions=None, frame=FRAME):
    where = line(channels) if positions is None else positions
    geometry = line_geometry(where, range(len(where)))
    skew = np.zeros(len(where)) if delay is None else delay
    weights = shading_weights(shading, geometry)
    return Steering.about_middle(geometry, weights, skew, cos_grid(beams), 1500.0, 16000.0, frame, bins)


def spectra(channels, seed=0, frame=FRAME):
    rng = np.random.default_rng(seed)
    return np.fft.rfft(rng.standard_normal((channels, frame))).astype(np.complex64)


def plain(steer, transform):
    """Double precision, no pairs, no pieces: tapered and untapered spectra of every beam, (beams, bins)."""
    first, stop = steer.bins
    n = steer.frame_length
    beams = np.empty((len(steer.cos), n), dtype=complex)
    for beam_i in range(len(steer.cos)):
        weights = delay_transforms(steer.samples(slice(beam_i, beam_i + 1), slice(None))[0], n, (0, n // 2 + 1))
        half = (steer.weights[:, None] * weights * transform).sum(axis=0)
        beams[beam_i] = np.concatenate([half, half[-2:0:-1].conj()])
    tapered = beams / 2 - (np.roll(beams, 1, axis=1) + np.roll(beams, -1, axis=1)) / 4
    return beams[:, first:stop], tapered[:, first:stop]


def power_of(kernel, transform, gain=1.0):
    content = kernel.start()
    kernel.step(transform, gain, 0.0, content)
    out = np.empty((kernel.beams, kernel.bins), dtype=np.float32)
    kernel.in_order(content, out)
    return out * np.float32(kernel.scale)


@pytest.mark.parametrize("kind", [PairKernel, GeneralKernel])
@pytest.mark.parametrize(("channels", "beams"), [(8, 10), (8, 11), (9, 10), (9, 11), (1, 2), (2, 3)])
@pytest.mark.parametrize("bins", [(0, 5), (1, CHUNK + 1), (3, CHUNK + 4), (7, 2 * CHUNK + 50)])
def test_power_is_that_of_the_plain_sum(kind, channels, beams, bins):
    """1e-5 relative: of the largest power of that bin, since a null of the pattern has no relative accuracy."""
    steer = steering(channels, beams, bins, shading=(1.0,) * channels if channels < 3 else "hamming")
    transform = spectra(channels)
    expected = np.abs(plain(steer, transform)[1]) ** 2
    error = np.abs(power_of(kind(steer), transform) - expected).max(axis=0)
    assert np.all(error <= 1e-5 * expected.max(axis=0))


@settings(max_examples=20, deadline=None)
@given(channels=st.integers(2, 12), beams=st.integers(2, 15), seed=st.integers(0, 99))
def test_kernels_agree_within_1e_5_in_power(channels, beams, seed):
    steer = steering(channels, beams, (3, 60), shading="uniform")
    transform = spectra(channels, seed)
    pairs, general = (power_of(kind(steer), transform) for kind in (PairKernel, GeneralKernel))
    assert np.all(np.abs(pairs - general) <= 1e-5 * general.max(axis=0))


def test_channels_in_any_order_pair_by_place():
    order = np.array([4, 0, 7, 2, 1, 6, 3, 5])
    positions = line(8)
    transform = spectra(8)
    expected = power_of(make_kernel(steering(8)), transform)
    shuffled = make_kernel(steering(positions=positions[order]))
    assert shuffled.name == "pairs"
    np.testing.assert_allclose(power_of(shuffled, transform[order]), expected, rtol=1e-4, atol=1e-6 * expected.max())


@pytest.mark.parametrize("kind", [PairKernel, GeneralKernel])
def test_a_mirrored_cone_would_show(kind):
    """Energy in one beam lies at its own place, not at its mirror image, and the grid runs from forward to aft."""
    steer = steering(16, 33, (100, 140), shading="uniform")
    tau = steer.samples(slice(4, 5), slice(None))[0]
    f = np.arange(FRAME // 2 + 1) / FRAME
    wave = np.exp(2j * np.pi * f * tau[:, None]).astype(np.complex64)
    wave[:, 1::2] *= -1  # in the middle of the frame
    loud = power_of(kind(steer), wave).sum(axis=1)
    assert loud.argmax() == 4
    assert loud[4] > 30 * loud[28]


@pytest.mark.parametrize("kind", [PairKernel, GeneralKernel])
def test_beam_spectra_before_the_taper_come_out_in_order(kind):
    steer = steering(9, 11, (3, 3 + CHUNK + 20))
    transform, kernel = spectra(9), kind(steer)
    beams = np.empty(kernel.start().shape, dtype=np.complex64)
    kernel.step(transform, 4.0, 0.0, kernel.start(), None, beams)
    out = np.empty((11, kernel.bins), dtype=np.complex64)
    kernel.in_order(beams, out)
    np.testing.assert_allclose(out / 2, plain(steer, transform)[0], atol=1e-4)


@pytest.mark.parametrize("kind", [PairKernel, GeneralKernel])
def test_content_decays_and_gains_and_power_is_the_gain_alone(kind):
    kernel, transform = kind(steering()), spectra(9)
    alone, content, power = kernel.start(), kernel.start(), kernel.start()
    kernel.step(transform, 1.0, 0.0, alone)
    content[:] = 7.0
    kernel.step(transform, 0.25, 0.5, content, power)
    np.testing.assert_allclose(power, alone / 4, rtol=1e-5)
    np.testing.assert_allclose(content, 3.5 + alone / 4, rtol=1e-5)


@pytest.mark.parametrize("kind", [PairKernel, GeneralKernel])
@pytest.mark.parametrize("beams", [10, 11])
def test_order_of_beams_goes_there_and_back(kind, beams):
    kernel = kind(steering(9, beams))
    values = np.random.default_rng(1).random((beams, kernel.bins)).astype(np.float32)
    back = np.empty_like(values)
    kernel.in_order(kernel.from_order(values), back)
    np.testing.assert_array_equal(back, values)


@pytest.mark.parametrize("kind", [PairKernel, GeneralKernel])
def test_the_same_frame_gives_the_same_bits(kind):
    kernel, transform = kind(steering()), spectra(9)
    first = power_of(kernel, transform)
    power_of(kernel, spectra(9, seed=3))
    np.testing.assert_array_equal(power_of(kernel, transform), first)
    np.testing.assert_array_equal(power_of(kind(steering()), transform), first)


def test_kernel_is_chosen_by_geometry_and_settings():
    assert make_kernel(steering()).name == "pairs"
    assert make_kernel(steering(), "general").name == "general"
    assert make_kernel(steering(), "pairs").name == "pairs"
    assert make_kernel(steering(delay=1e-5 * np.arange(9))).name == "general"
    bent = line(9)
    bent[3, 0] += 0.01
    assert make_kernel(steering(positions=bent)).name == "general"


def test_pairs_are_refused_on_a_line_that_is_not_symmetric():
    with pytest.raises(UsageError, match="not: use kernel 'auto' or 'general'"):
        make_kernel(steering(delay=1e-5 * np.arange(9)), "pairs")


@pytest.mark.parametrize("choice", ["pairs", "general"])
def test_filters_that_do_not_fit_the_frame_are_refused(choice):
    with pytest.raises(UsageError, match="use a frame of at least"):
        make_kernel(steering(48, 11, (3, 30), frame=256), choice)


@pytest.mark.parametrize("kind", [PairKernel, GeneralKernel])
def test_a_step_keeps_single_precision_and_its_buffers(kind):
    kernel, transform = kind(steering()), spectra(9)
    content = kernel.start()
    kernel.step(transform, 1.0, 0.5, content)
    before = {name: id(value) for name, value in vars(kernel).items() if isinstance(value, np.ndarray)}
    kernel.step(transform, 1.0, 0.5, content)
    after = {name: id(value) for name, value in vars(kernel).items() if isinstance(value, np.ndarray)}
    assert after == before
    assert {value.dtype for value in vars(kernel).values() if isinstance(value, np.ndarray)} <= {
        np.dtype(np.float32), np.dtype(np.complex64), np.dtype(np.intp),
    }  # fmt: skip
