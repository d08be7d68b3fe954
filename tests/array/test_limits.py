"""Limits of a line that the published tables do not cover; each is derived a second way."""

from dataclasses import replace
from math import acos, cos, degrees, log10, pi, radians

import numpy as np
import pytest

from soundrose.array.geometry import cos_grid, line_geometry
from soundrose.array.limits import Line, image_cosines, line_of, used_weights
from soundrose.array.shading import shading_weights
from soundrose.errors import UsageError
from soundrose.settings import parse_settings


def line(x, shading="uniform", speed=1500.0) -> Line:
    geometry = line_geometry(np.array([(float(v), 0.0, 0.0) for v in x]), range(len(x)))
    return Line(geometry.positions_m, shading_weights(shading, geometry), speed, geometry.spacing_m)


DEMO = line(-0.375 * np.arange(48), "hann")


def test_response_is_the_sum_of_shaded_phasors_of_the_contracts_plane_wave():
    f, beam, u = 2100.0, 0.31, -0.48
    recorded = [np.exp(2j * pi * f * x * u / 1500.0) for x in DEMO.positions_m[:, 0]]
    steered = sum(
        w * p * np.exp(-2j * pi * f * x * beam / 1500.0)
        for w, p, x in zip(DEMO.weights, recorded, DEMO.positions_m[:, 0], strict=True)
    )
    assert float(DEMO.response(f, beam, u)) == pytest.approx(abs(steered) ** 2, rel=1e-9)


def test_pattern_keeps_shape_and_its_blocks_make_no_seam(monkeypatch):
    v = np.linspace(0, 3, 60).reshape(3, 20)
    whole = DEMO.pattern(v)
    monkeypatch.setattr("soundrose.array.limits.PATTERN_BLOCK", 48 * 7)
    np.testing.assert_allclose(DEMO.pattern(v), whole, rtol=1e-12, atol=1e-20)
    assert whole.shape == (3, 20)


@pytest.mark.parametrize("beam_deg", [90, 47, 30])
def test_beam_is_at_half_power_at_both_ends_of_its_width(beam_deg):
    beam = cos(radians(beam_deg))
    half = DEMO.half_width_cos(2000.0)
    for edge in (beam - half, beam + half):
        assert float(DEMO.response(2000.0, beam, edge)) == pytest.approx(0.5, abs=1e-10)
    assert DEMO.beamwidth_deg(2000.0, beam) == pytest.approx(degrees(acos(beam - half) - acos(beam + half)))


def test_line_shorter_than_its_wavelength_has_no_width():
    assert DEMO.beamwidth_deg(20.0, 0.0) is None
    assert DEMO.half_width_cos(0.0) is None
    assert line([0.0, 0.0]).fall_v(0.5) is None
    assert line([0.0, 0.0]).side_lobe_db(1.0) is None


def test_one_weight_among_zeros_never_falls():
    one = replace(DEMO, weights=np.eye(48)[20])
    assert one.fall_v(0.5) is None
    assert one.beams_for(4000.0, 0.5) == 2


def test_wide_lobe_of_a_line_whose_ends_weigh_next_to_nothing_is_found():
    """Two hydrophones d apart in the middle of a long line: cos^2(pi v d) = 1/2 at v = 1/(4 d)."""
    weights = np.full(48, 1e-12)
    weights[23:25] = 0.5
    assert replace(DEMO, weights=weights).fall_v(0.5) == pytest.approx(1 / (4 * 0.375), rel=1e-6)


@pytest.mark.parametrize("power", [0.0, 1.0, -1.0, float("nan")])
def test_fall_to_no_power_is_refused(power):
    with pytest.raises(UsageError, match="power"):
        DEMO.fall_v(power)


def test_scalloping_is_the_worst_loss_over_all_directions():
    """Brute force: the loudest of the grid's beams for arrivals all over the cosine range."""
    f, beams = 4000.0, 145
    arrivals, grid = np.linspace(-1, 1, 20001), cos_grid(beams)
    nearest = np.abs(arrivals[:, None] - grid).argmin(axis=1)
    losses = -10 * np.log10(DEMO.pattern(f / 1500.0 * (arrivals - grid[nearest])))
    assert DEMO.scalloping_db(f, beams) == pytest.approx(float(losses.max()), abs=1e-3)


def test_as_many_beams_as_told_keep_the_loss_and_one_fewer_does_not():
    beams = DEMO.beams_for(4000.0, 0.5)
    assert DEMO.scalloping_db(4000.0, beams) <= 0.5 + 1e-9 < DEMO.scalloping_db(4000.0, beams - 1)


def test_gain_in_isotropic_noise_is_the_pattern_averaged_over_the_sphere():
    """Isotropic noise is even in cosine: gain = 1 / mean of the pattern over u, for a straight line."""
    u = np.linspace(-1, 1, 40001)
    for f, beam in ((700.0, 0.0), (2600.0, cos(radians(30)))):
        mean = float(np.trapezoid(DEMO.response(f, beam, u), u)) / 2
        assert DEMO.array_gain_db(f, beam) == pytest.approx(-10 * log10(mean), abs=1e-4)


def test_far_field_of_the_demo_line_is_864_metres_at_4_khz():
    """(N d)^2 / lambda = 18^2 / 0.375."""
    assert DEMO.far_field_m(4000.0, 0.0) == pytest.approx(864.0)
    assert DEMO.far_field_m(4000.0, cos(radians(30))) == pytest.approx(216.0)
    assert DEMO.transit_s == pytest.approx(47 * 0.375 / 1500)


def test_focus_loss_is_that_of_fresnel_phases_and_vanishes_far_away():
    """At (L sin)^2/lambda the phase at the ends is pi/4 of a quadratic: uniform line, mean of exp(i pi x^2/(L^2))."""
    uniform = line(-0.375 * np.arange(48))
    x = uniform.positions_m[:, 0]
    far = uniform.far_field_m(4000.0, 0.0)
    fresnel = abs(np.mean(np.exp(1j * pi * x**2 / (0.375 * far))))
    assert uniform.focus_loss_db(4000.0, 0.0, far) == pytest.approx(-20 * log10(fresnel), abs=1e-3)
    assert uniform.focus_loss_db(4000.0, 0.3, 1e7) == pytest.approx(0.0, abs=1e-6)
    assert uniform.focus_loss_db(4000.0, 0.0, far / 4) > 4 * uniform.focus_loss_db(4000.0, 0.0, far)
    with pytest.raises(UsageError, match="distance_m"):
        uniform.focus_loss_db(4000.0, 0.0, 0.0)


def test_images_need_a_spacing_and_a_frequency():
    with pytest.raises(UsageError, match="above 0"):
        image_cosines(0.375, 1500.0, 0.0, 0.0)


def settings_with(**array):
    return parse_settings(
        {
            "array": {"id": "a", "hydrophones": 8, "spacing_m": 0.5} | array,
            "bands": [{"name": "b", "band_hz": [10, 1000], "shading": "uniform"}],
        }
    )


def test_hydrophones_left_out_weigh_nothing_and_the_rest_sum_to_one():
    settings = settings_with(exclude=[0, 3])
    assert used_weights(settings, settings.bands[0]).tolist() == pytest.approx([0, *[1 / 6] * 2, 0, *[1 / 6] * 4])
    whole, fewer = settings_with(), settings
    assert line_of(fewer, fewer.bands[0]).white_gain_db() == pytest.approx(10 * log10(6))
    assert line_of(whole, whole.bands[0]).white_gain_db() == pytest.approx(10 * log10(8))
    assert line_of(fewer, fewer.bands[0]).spacing_m == 0.5


def test_no_weight_left_is_refused():
    settings = settings_with()
    band = replace(settings.bands[0], shading=(1.0, *[0.0] * 7))
    with pytest.raises(UsageError, match="exclude fewer"):
        used_weights(replace(settings, array=replace(settings.array, exclude=(0,))), band)
