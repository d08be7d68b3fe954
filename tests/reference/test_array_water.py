"""Sound speed of sea water against tabled points."""

import pytest

from soundrose.array.water import sound_speed_m_s


@pytest.mark.parametrize(
    ("salinity", "temperature_c", "depth_m", "speed"),
    [(35.0, 10.0, 0.0, 1489.818359), (35.0, 15.0, 50.0, 1507.481125), (34.7, 5.0, 1000.0, 1486.737232),
     (30.0, 2.0, 10.0, 1451.605559)],
)  # fmt: skip
def test_speed_is_that_of_teos10(salinity, temperature_c, depth_m, speed):
    """IOC, SCOR and IAPSO 2010, TEOS-10, 75-term equation at known positions; standing: recomputed.

    Without a position the regional part of salinity and the latitude in pressure are left out: 0.03 m/s.
    """
    assert sound_speed_m_s(temperature_c, salinity, depth_m) == pytest.approx(speed, abs=0.03)


def test_speed_agrees_with_an_older_equation():
    """Mackenzie 1981 at 10 degC, 35, surface: 1489.8034 m/s; standing: recomputed.

    Here the equations differ by under 0.1 m/s.
    """
    assert sound_speed_m_s(10.0, 35.0) == pytest.approx(1489.8034, abs=0.1)
