"""Shadings of a uniform line against the tables. Standing of each set of values is named beside it."""

import numpy as np
import pytest

from soundrose.array.geometry import line_geometry
from soundrose.array.limits import Line
from soundrose.array.shading import shading_weights, taylor_nbar

#: Dolph 1946, Proc. IRE 34, 335-348; Taylor 1955, IRE Trans. AP-3, 16-28 (nbar 4); Harris 1978. Standing: recomputed
#: (two ways: library windows, and polynomial formulas in multiple precision). Columns: hydrophones, shading, dB,
#: noise bandwidth, half-power width in 1/N, highest side lobe in dB over the whole pattern.
TABLE = [
    (16, "uniform", 30, 1.0, 0.8873900396, -13.146831),
    (16, "hann", 30, 1.6, 1.536690834, -31.498371),
    (16, "hamming", 30, 1.426916386, 1.358123058, -39.37009),
    (16, "chebyshev", 30, 1.160596417, 1.113314321, -30.0),
    (16, "chebyshev", 40, 1.308604723, 1.254290684, -40.0),
    (16, "taylor", 35, 1.234265069, 1.184876359, -34.453261),
    (16, "taylor", 30, 1.171802849, 1.125604174, -30.054603),
    (32, "uniform", 30, 1.0, 0.8862665145, -13.232887),
    (32, "hann", 30, 1.548387097, 1.487056628, -31.468899),
    (32, "hamming", 30, 1.394161585, 1.330160858, -41.762265),
    (32, "chebyshev", 30, 1.142133812, 1.087744661, -30.0),
    (32, "chebyshev", 40, 1.286873248, 1.232658718, -40.0),
    (32, "taylor", 35, 1.234265069, 1.184341266, -35.123793),
    (32, "taylor", 30, 1.171802849, 1.124922484, -30.243023),
    (48, "uniform", 30, 1.0, 0.8860589163, -13.248767),
    (48, "hann", 30, 1.531914894, 1.471233954, -31.467606),
    (48, "hamming", 30, 1.383563022, 1.321016991, -42.266183),
    (48, "chebyshev", 30, 1.140022196, 1.077977317, -30.0),
    (48, "chebyshev", 40, 1.277470884, 1.222872913, -40.0),
    (48, "taylor", 35, 1.234265069, 1.184238317, -35.147846),
    (48, "taylor", 30, 1.171802849, 1.124793273, -30.278669),
    (64, "uniform", 30, 1.0, 0.8859862909, -13.254321),
    (64, "hann", 30, 1.523809524, 1.46344918, -31.4674),
    (64, "hamming", 30, 1.378321824, 1.316476801, -42.445481),
    (64, "chebyshev", 30, 1.142754519, 1.072889145, -30.0),
    (64, "chebyshev", 40, 1.272711144, 1.217540598, -40.0),
    (64, "taylor", 35, 1.234265069, 1.184202005, -35.156284),
    (64, "taylor", 30, 1.171802849, 1.124747833, -30.291198),
]


def shaded(hydrophones: int, shading: str, shading_db: float, spacing: float = 0.5) -> Line:
    positions = np.zeros((hydrophones, 3))
    positions[:, 0] = -spacing * np.arange(hydrophones)
    geometry = line_geometry(positions, range(hydrophones))
    weights = shading_weights(shading, geometry, shading_db)
    return Line(geometry.positions_m, weights, 1.0, geometry.spacing_m)


@pytest.mark.parametrize(("hydrophones", "shading", "shading_db", "noise", "width", "side_lobe_db"), TABLE)
def test_shading_has_the_tables_noise_bandwidth_width_and_side_lobe(
    hydrophones, shading, shading_db, noise, width, side_lobe_db
):
    """Tolerances of the table: 1e-6 relative, 0.01 dB."""
    line = shaded(hydrophones, shading, shading_db)
    assert hydrophones * float(line.weights @ line.weights) == pytest.approx(noise, rel=1e-6)
    assert line.white_gain_db() == pytest.approx(10 * np.log10(hydrophones / noise), abs=1e-5)
    # u = d/lambda (cos - cos0) in units of 1/N: width = 2 v d N
    assert 2 * line.fall_v(0.5) * 0.5 * hydrophones == pytest.approx(width, rel=1e-6)
    assert line.side_lobe_db(1.0) == pytest.approx(side_lobe_db, abs=0.01)


@pytest.mark.parametrize(
    ("shading", "shading_db", "half"),
    [
        ("chebyshev", 30, [0.290988871258, 0.31729619154, 0.455688938632, 0.601756006455, 0.742386845755,
                           0.86365969672, 0.952789152817, 1.0]),
        ("chebyshev", 40, [0.113760445813, 0.196365436753, 0.331946427054, 0.492603476661, 0.661310243961,
                           0.816336354133, 0.935340747825, 1.0]),
        ("taylor", 35, [0.177836934268, 0.253676680703, 0.384585717071, 0.540825559675, 0.696440222109,
                        0.833138182544, 0.936410824113, 0.992708688377]),
    ],
)  # fmt: skip
def test_sixteen_weights_are_the_published_ones(shading, shading_db, half):
    """Weights of 16 hydrophones, sources as for the table; standing: recomputed; 1e-9."""
    published = np.array(half + half[::-1])
    np.testing.assert_allclose(shaded(16, shading, shading_db).weights, published / published.sum(), atol=1e-9, rtol=0)


def test_taylor_shading_has_the_papers_coefficients():
    """nbar 4, 35 dB: F1..F3 = 0.3418972567, -0.01499647766, 0.003729060268. Taylor 1955; standing: recomputed; 1e-9.

    F_m are the cosine coefficients of the aperture distribution 1 + 2 sum F_m cos(2 pi m x).
    """
    weights = shaded(64, "taylor", 35).weights
    place = (31.5 - np.arange(64)) / 64
    found = [float(weights @ np.cos(2 * np.pi * m * place)) for m in (1, 2, 3)]
    assert taylor_nbar(35, 64) == 4
    assert found == pytest.approx([0.3418972567, -0.01499647766, 0.003729060268], abs=1e-9)


@pytest.mark.parametrize(
    ("shading", "noise", "width", "side_lobe_db"),
    [("uniform", 1.0, 0.8858929414, -13.26145888), ("hann", 1.5, 1.44058258, -31.46730784),
     ("hamming", 1.362825789, 1.302982081, -42.67503104)],
)  # fmt: skip
def test_long_line_comes_to_the_windows_limits(shading, noise, width, side_lobe_db):
    """Continuous limits: Harris 1978, Table I definitions; standing: recomputed.

    Symmetric windows of N samples come to the limit as 1/N (Hann's noise bandwidth is exactly 1.5 N/(N-1)).
    """
    line = shaded(1000, shading, 30)
    assert 1000 * float(line.weights @ line.weights) == pytest.approx(noise, rel=1.2e-3)
    assert 2 * line.fall_v(0.5) * 0.5 * 1000 == pytest.approx(width, rel=1.2e-3)
    assert line.side_lobe_db(1.0) == pytest.approx(side_lobe_db, abs=0.01)
