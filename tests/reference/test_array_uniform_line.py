"""A uniform line with uniform weights: figures printed in the textbooks, exact. Half a wavelength apart if not said."""

from math import acos, asin, cos, degrees, log10, pi, radians

import numpy as np
import pytest

from soundrose.array.geometry import delays_s, line_geometry
from soundrose.array.limits import Line, alias_onset_hz, image_cosines


def uniform(hydrophones: int, spacing: float = 0.5, sound_speed: float = 1.0) -> Line:
    """At 1 Hz and 1 m/s, distances are in wavelengths."""
    positions = np.zeros((hydrophones, 3))
    positions[:, 0] = -spacing * np.arange(hydrophones)
    geometry = line_geometry(positions, range(hydrophones))
    return Line(geometry.positions_m, np.full(hydrophones, 1 / hydrophones), sound_speed, geometry.spacing_m)


@pytest.mark.parametrize(
    ("hydrophones", "width_bins", "width_deg", "nulls_deg", "lobe_db", "lobe_bins", "gain_db"),
    [
        (4, 0.9107848519, 26.32295203, 60.0, -11.30333768, 1.464559054, 6.020599913),
        (8, 0.8919266924, 12.8025258, 28.95502437, -12.79734782, 1.437990002, 9.03089987),
        (10, 0.8897405482, 10.20917595, 23.07391807, -12.96616839, 1.435162746, 10.0),
        (16, 0.8873900396, 6.35872578, 14.36151156, -13.14683056, 1.432173806, 12.04119983),
        (32, 0.8862665145, 3.174114052, 7.166643397, -13.23288676, 1.430763162, 15.05149978),
        (48, 0.8860589163, 2.115429998, 4.776030927, -13.24876711, 1.430503764, 16.81241237),
        (64, 0.8859862909, 1.586403023, 3.581569319, -13.25432113, 1.430413108, 18.06179974),
        (128, 0.885916276, 0.7931198263, 1.790565973, -13.25967477, 1.430325756, 21.0720997),
        (1000, 0.8858933237, 0.1015159104, 0.2291832708, -13.26142965, 1.43029713, 30.0),
    ],
)
def test_broadside_beam_is_exact(hydrophones, width_bins, width_deg, nulls_deg, lobe_db, lobe_bins, gain_db):
    """Dirichlet kernel, exact figures; standing: recomputed; 1e-7 relative."""
    line = uniform(hydrophones)
    assert line.fall_v(0.5) * hydrophones == pytest.approx(width_bins, rel=1e-7)  # 2 v d N with d = 1/2
    assert line.beamwidth_deg(1.0, 0.0) == pytest.approx(width_deg, rel=1e-7)
    null = asin(2 / hydrophones)
    assert 2 * degrees(null) == pytest.approx(nulls_deg, rel=1e-7)
    assert float(line.response(1.0, 0.0, cos(pi / 2 - null))) < 1e-24
    assert line.side_lobe_db(1.0) == pytest.approx(lobe_db, rel=1e-7)
    at_lobe = float(line.pattern(2 * lobe_bins / hydrophones))
    assert 10 * log10(at_lobe) == pytest.approx(lobe_db, rel=1e-7)
    assert line.array_gain_db(1.0, 0.0) == pytest.approx(gain_db, abs=1e-7)


def test_long_line_has_the_rules_of_thumb():
    """0.8859 lambda/(N d) rad = 50.76 deg; first side lobe -13.26 dB: any textbook; standing: recomputed."""
    line = uniform(2000)
    assert 2000 * 0.5 * line.beamwidth_deg(1.0, 0.0) == pytest.approx(50.7579266414, rel=1e-6)
    assert line.side_lobe_db(1.0) == pytest.approx(-13.26145888, abs=1e-5)


@pytest.mark.parametrize(
    ("hydrophones", "steer_deg", "width_deg"),
    [
        (16, 90, 6.35872578), (16, 75, 6.584063129), (16, 60, 7.348741881), (16, 45, 9.025435786),
        (16, 30, 12.99346393), (16, 20, 22.20035314), (16, 15, 48.8609105), (16, 10, 43.33384504),
        (16, 5, 39.65001908), (16, 0, 38.34359855), (32, 60, 3.665933506), (32, 30, 6.380500635),
        (32, 15, 13.76885282), (32, 10, 33.68219824), (32, 0, 27.03225536), (48, 75, 2.19009195),
        (48, 45, 2.9928614), (48, 30, 4.240311481), (48, 15, 8.515786113), (48, 10, 29.81242537),
        (48, 0, 22.05203401), (64, 60, 1.831917982), (64, 10, 10.86470084), (64, 5, 21.56088038), (64, 0, 19.08945065),
    ],
)  # fmt: skip
def test_steered_beamwidth_is_exact_and_counts_across_the_axis(hydrophones, steer_deg, width_deg):
    """acos(cos t0 - u3 lambda/d) - acos(cos t0 + u3 lambda/d), merged at endfire; standing: recomputed; 1e-7."""
    line = uniform(hydrophones)
    assert line.beamwidth_deg(1.0, cos(radians(steer_deg))) == pytest.approx(width_deg, rel=1e-7)
    assert line.beamwidth_deg(1.0, -cos(radians(steer_deg))) == pytest.approx(width_deg, rel=1e-7)


@pytest.mark.parametrize(
    ("hydrophones", "spacing", "width_deg"),
    [(16, 0.25, 54.48520637), (16, 0.45, 40.43891983), (32, 0.25, 38.31908854), (32, 0.45, 28.50188653),
     (48, 0.25, 31.23478994), (48, 0.45, 23.24888686), (48, 0.5, 22.05203401)],
)  # fmt: skip
def test_endfire_beamwidth_is_exact(hydrophones, spacing, width_deg):
    """2 acos(1 - u3 lambda/d); standing: recomputed; 1e-7 relative."""
    assert uniform(hydrophones, spacing).beamwidth_deg(1.0, 1.0) == pytest.approx(width_deg, rel=1e-7)


@pytest.mark.parametrize(
    ("spacing", "steer_deg", "images_deg"),
    [(0.75, 60.0, [146.4426902]), (0.75, 90.0, []), (1.0, 90.0, [0.0, 180.0]), (1.0, 60.0, [120.0]),
     (0.6, 30.0, [143.1913822]), (1.5, 75.0, [22.2582895, 114.0696973])],
)  # fmt: skip
def test_images_stand_where_the_textbook_puts_them(spacing, steer_deg, images_deg):
    """cos theta_g = cos theta0 + k lambda/d. Van Trees 2002; standing: recomputed; 1e-7 deg."""
    found = image_cosines(spacing, 1.0, 1.0, cos(radians(steer_deg)))
    assert [degrees(acos(u)) for u in found] == pytest.approx(images_deg, abs=1e-7)
    line = uniform(24, spacing)
    assert all(float(line.response(1.0, cos(radians(steer_deg)), u)) == pytest.approx(1.0) for u in found)


@pytest.mark.parametrize(
    ("spacing", "cone_deg"),
    [(0.6, 48.1896851), (0.75, 70.52877937), (0.9, 83.62062979), (1.0, 90.0)],
)
def test_alias_onset_is_where_the_first_image_enters(spacing, cone_deg):
    """d/lambda < 1/(1 + |cos theta0|): at these cone angles the onset is this very frequency (1 Hz, 1 m/s).

    Van Trees 2002; standing: recomputed; angles to 1e-8 deg.
    """
    beam = cos(radians(cone_deg))
    assert alias_onset_hz(spacing, 1.0, beam) == pytest.approx(1.0, abs=1e-9)
    assert image_cosines(spacing, 1.0, 0.9999, beam) == ()
    assert len(image_cosines(spacing, 1.0, 1.0001, beam)) >= 1


@pytest.mark.parametrize(
    ("hydrophones", "spacing", "steer_deg", "gain_db"),
    [
        (16, 0.1, 90, 5.313327111), (16, 0.1, 60, 5.375642167), (16, 0.1, 30, 6.668151518), (16, 0.1, 0, 8.189722873),
        (16, 0.25, 90, 9.117833114), (16, 0.25, 30, 9.490326618), (16, 0.25, 0, 12.04119983),
        (16, 0.4, 60, 11.12046079), (16, 0.75, 90, 13.71688523), (16, 0.75, 60, 10.85266038),
        (16, 1.0, 30, 12.04119983), (32, 0.1, 30, 8.786133418), (32, 0.4, 0, 17.03244755),
        (32, 0.75, 30, 13.84034494), (48, 0.1, 90, 9.909174081), (48, 0.25, 60, 13.84298092),
        (48, 0.4, 90, 15.85299539), (48, 0.5, 30, 16.81241237), (48, 0.75, 90, 18.54463238),
        (64, 0.1, 0, 14.11176119), (64, 0.25, 30, 15.16137272), (64, 0.4, 60, 17.10389057), (64, 0.75, 0, 18.06179974),
    ],
)  # fmt: skip
def test_gain_in_isotropic_noise_is_the_directivity_index(hydrophones, spacing, steer_deg, gain_db):
    """Urick 1983; Van Trees 2002; standing: recomputed (matrix form, and the pattern integrated); 1e-7 dB."""
    line = uniform(hydrophones, spacing)
    assert line.array_gain_db(1.0, cos(radians(steer_deg))) == pytest.approx(gain_db, abs=1e-7)


@pytest.mark.parametrize(
    ("spacing", "coherence"),
    [(0.1, 0.935489283789), (0.25, 0.636619772368), (0.5, 0.0), (0.75, -0.212206590789), (1.0, 0.0)],
)
def test_two_hydrophones_see_the_coherence_of_isotropic_noise(spacing, coherence):
    """Cron and Sherman 1962, JASA 34, 1732-1736; standing: recomputed. Gain of a pair: 2/(1 + coherence)."""
    gain = 10 ** (uniform(2, spacing).array_gain_db(1.0, 0.0) / 10)
    assert 2 / gain - 1 == pytest.approx(coherence, abs=1e-10)


@pytest.mark.parametrize(
    ("hydrophones", "spacing", "steer_deg", "arrival_deg", "response_db"),
    [(16, 0.5, 90, 80, -13.22756939), (16, 0.5, 60, 75, -28.60088876), (32, 0.5, 45, 40, -24.40721054),
     (32, 0.4, 90, 92, -3.063075904), (48, 0.3, 120, 100, -25.07686249), (8, 0.5, 90, 30, -17.92337828)],
)  # fmt: skip
def test_pattern_samples(hydrophones, spacing, steer_deg, arrival_deg, response_db):
    """Dirichlet kernel; standing: recomputed; 1e-8 dB."""
    power = uniform(hydrophones, spacing).response(1.0, cos(radians(steer_deg)), cos(radians(arrival_deg)))
    assert 10 * log10(float(power)) == pytest.approx(response_db, abs=1e-8)


@pytest.mark.parametrize(
    ("steer_deg", "arrival_deg", "power"),
    [(90, 90, 1.0), (90, 85, 0.1887040625), (90, 80, 0.03757176385), (60, 75, 0.01417907245),
     (60, 65, 0.2297757267), (30, 40, 0.1487187302), (120, 100, 0.009194419732)],
)  # fmt: skip
def test_broadband_power_is_the_mean_over_frequency(steer_deg, arrival_deg, power):
    """32 hydrophones, 1.5 m, 1500 m/s, 100-500 Hz in 10 Hz: mean of the Dirichlet kernel; standing: recomputed."""
    line = uniform(32, 1.5, 1500.0)
    beam, arrival = cos(radians(steer_deg)), cos(radians(arrival_deg))
    found = np.mean([float(line.response(f, beam, arrival)) for f in range(100, 501, 10)])
    assert found == pytest.approx(power, abs=1e-8)


def test_forward_neighbour_hears_a_wave_from_forward_first():
    """d cos(theta)/c = 0.5 ms for 1.5 m, 1500 m/s, 60 deg: geometry; standing: recomputed; 1e-15 s."""
    (delays,) = delays_s(np.array([0.75, -0.75]), np.array([cos(radians(60))]), 1500.0)
    assert delays[0] - delays[1] == pytest.approx(0.0005, abs=1e-15)
    assert delays[0] > 0 > delays[1]
