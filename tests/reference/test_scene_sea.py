"""The sea of a scene against published values: absorption and ambient noise. Each names its source and standing."""

import numpy as np
import pytest

from soundrose.scene.sea import ainslie_mccolm, ambient_db, francois_garrison, wenz_parts_db

#: temperature, salinity, depth, pH, kHz, Francois-Garrison, Ainslie-McColm, dB/km. Both formulas recomputed in float
#: and with many digits from their printed coefficients (standing: recomputed); Francois and Garrison 1982, JASA 72(3)
#: 896-907 and 72(6) 1879-1890; Ainslie and McColm 1998, JASA 103(3) 1671-1672
ABSORPTION = [
    (10, 35, 0, 8, 0.1, 0.001007027638, 0.001006202732),
    (10, 35, 0, 8, 1, 0.06012606339, 0.06132347521),
    (10, 35, 0, 8, 10, 0.9626372918, 0.9865722856),
    (10, 35, 0, 8, 40, 11.02629428, 11.25784864),
    (4, 35, 1000, 8, 0.5, 0.02443835137, 0.02473446689),
    (4, 35, 1000, 8, 5, 0.3240952191, 0.3276506494),
    (4, 35, 1000, 8, 40, 9.995618595, 9.98049988),
    (20, 35, 0, 8, 2, 0.122006026, 0.1277484485),
    (20, 35, 0, 8, 20, 2.444629418, 2.460836694),
    (25, 36, 50, 8.1, 1, 0.05458466703, 0.05443002738),
    (25, 36, 50, 8.1, 40, 7.715727746, 7.578389102),
    (0, 30, 0, 8, 10, 1.118701093, 1.129441542),
    (10, 35, 5000, 7.7, 1, 0.03240413873, 0.03466731787),
    (10, 35, 5000, 7.7, 40, 5.105879721, 5.079057922),
]

#: shipping, wind m/s, kHz, turbulence, shipping, wind, thermal, total, dB re 1 µPa²/Hz: the fit of Coates 1990 to the
#: curves of Wenz 1962, JASA 34(12) 1936-1956, recomputed (standing: recomputed); the fit itself holds to several dB
AMBIENT = [
    (0, 0, 0.01, 77.0, 61.87640052, 25.48864573, -55.0, 77.13150202),
    (0, 0, 1, 17.0, 29.22976652, 44.15487857, -15.0, 44.30050131),
    (0, 0, 40, -31.06179974, -24.48957563, 17.78594522, 17.04119983, 20.43998726),
    (0.5, 5, 0.05, 56.03089987, 71.98782089, 54.62140937, -41.02059991, 72.17360917),
    (0.5, 5, 0.5, 26.03089987, 48.71666794, 62.58020954, -21.02059991, 62.75597993),
    (0.5, 5, 5, -3.96910013, 16.07914101, 51.45415953, -1.020599913, 51.4554561),
    (1, 10, 0.1, 47.0, 77.16339886, 65.75828228, -35.0, 77.47069664),
    (1, 10, 10, -13.0, 15.92194402, 53.03574888, 5.0, 53.03666225),
    (0.5, 15, 1, 17.0, 39.22976652, 73.20225367, -15.0, 73.20400368),
    (0.5, 15, 40, -31.06179974, -14.48957563, 46.83332032, 17.04119983, 46.83787708),
]


@pytest.mark.parametrize("row", ABSORPTION)
def test_absorption_is_that_of_both_formulas(row):
    temperature, salinity, depth, ph, khz, francois, ainslie = row
    assert francois_garrison(1000 * khz, temperature, salinity, depth, ph) == pytest.approx(francois, rel=1e-8)
    assert ainslie_mccolm(1000 * khz, temperature, salinity, depth, ph) == pytest.approx(ainslie, rel=1e-8)


def test_absorption_agrees_with_a_printed_example():
    """13.96602 dB/km at 50 kHz, 0 °C, S 35, surface, pH 6: printed in a public manual (standing: found). It adds 273.15
    for the kelvin where the paper adds 273: that is worth 0.15 %, and 0.2 % is allowed."""
    assert francois_garrison(50_000, 0, 35, 0, 6) == pytest.approx(13.96602, rel=2e-3)


def test_boric_acid_relaxes_at_its_published_frequency():
    """1.116515471 kHz at 10 °C, S 35 (Francois and Garrison 1982; standing: recomputed). Only the boric part knows pH,
    so a change of pH shows it alone: at its own frequency it has half of what it has far above."""
    f = np.array([1116.515471, 1e7])
    boric = francois_garrison(f, 10, 35, 0, 8.3) - francois_garrison(f, 10, 35, 0, 8.0)
    assert boric[0] / boric[1] == pytest.approx(0.5, rel=1e-5)


@pytest.mark.parametrize("row", AMBIENT)
def test_ambient_noise_is_the_fit_to_the_published_curves(row):
    shipping, wind, khz, *parts, total = row
    assert [float(part) for part in wenz_parts_db(1000 * khz, shipping, wind)] == pytest.approx(parts, abs=1e-7)
    assert float(ambient_db(1000 * khz, shipping, wind)) == pytest.approx(total, abs=1e-7)


def test_thermal_noise_at_100_khz():
    """25 dB re 1 µPa²/Hz, Mellen 1952, JASA 24(5) 478-480 (standing: recomputed)."""
    assert float(wenz_parts_db(100_000, 0.5, 5)[3]) == pytest.approx(25.0, abs=0.5)


def test_wind_noise_falls_as_observed():
    """-5 dB per octave from some kHz on (Knudsen, Alford and Emling 1948; standing: memory): the fit's slope at 10 kHz
    is -17 to -19 dB per decade."""
    low, high = wenz_parts_db(np.array([5000.0, 15000.0]), 0, 10)[2]
    assert -20.5 < (high - low) / np.log10(3) < -16
