"""core: what sea water does to sound and how loud the sea itself is, from published formulas."""

from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Absorption", "ainslie_mccolm", "ambient_db", "francois_garrison", "wenz_parts_db"]

Absorption = Literal["francois-garrison", "ainslie-mccolm", "none"]
Floats = NDArray[np.float64]

LEAST_KHZ = 1e-4  # the fits of noise have no value at 0 Hz


def francois_garrison(
    frequency_hz: ArrayLike, temperature_c: float, salinity: float, depth_m: float, ph: float = 8.0
) -> Floats:
    """Absorption of sea water, dB/km: boric acid, magnesium sulphate, pure water.

    References
    ----------
    Francois and Garrison 1982, JASA 72(3) 896-907 and 72(6) 1879-1890; 273 is added to the temperature as there.
    """
    f = np.asarray(frequency_hz, np.float64) / 1000
    t, kelvin = temperature_c, temperature_c + 273
    speed = 1412 + 3.21 * t + 1.19 * salinity + 0.0167 * depth_m
    f1 = 2.8 * np.sqrt(salinity / 35) * 10 ** (4 - 1245 / kelvin)
    f2 = 8.17 * 10 ** (8 - 1990 / kelvin) / (1 + 0.0018 * (salinity - 35))
    boric = 8.86 / speed * 10 ** (0.78 * ph - 5) * f1 * f**2 / (f1**2 + f**2)
    p2 = 1 - 1.37e-4 * depth_m + 6.2e-9 * depth_m**2
    sulphate = 21.44 * salinity / speed * (1 + 0.025 * t) * p2 * f2 * f**2 / (f2**2 + f**2)
    if t <= 20:
        a3 = 4.937e-4 - 2.59e-5 * t + 9.11e-7 * t**2 - 1.50e-8 * t**3
    else:
        a3 = 3.964e-4 - 1.146e-5 * t + 1.45e-7 * t**2 - 6.5e-10 * t**3
    water = a3 * (1 - 3.83e-5 * depth_m + 4.9e-10 * depth_m**2) * f**2
    return np.asarray(boric + sulphate + water)


def ainslie_mccolm(
    frequency_hz: ArrayLike, temperature_c: float, salinity: float, depth_m: float, ph: float = 8.0
) -> Floats:
    """Absorption of sea water, dB/km. Ainslie and McColm 1998, JASA 103(3) 1671-1672."""
    f, z, t = np.asarray(frequency_hz, np.float64) / 1000, depth_m / 1000, temperature_c
    f1, f2 = 0.78 * np.sqrt(salinity / 35) * np.exp(t / 26), 42 * np.exp(t / 17)
    boric = 0.106 * f1 * f**2 / (f1**2 + f**2) * np.exp((ph - 8) / 0.56)
    sulphate = 0.52 * (1 + t / 43) * salinity / 35 * f2 * f**2 / (f2**2 + f**2) * np.exp(-z / 6)
    return np.asarray(boric + sulphate + 0.00049 * f**2 * np.exp(-(t / 27 + z / 17)))


def wenz_parts_db(frequency_hz: ArrayLike, shipping: float, wind_m_s: float) -> tuple[Floats, Floats, Floats, Floats]:
    """Turbulence, shipping, wind and thermal noise, each dB re 1 µPa²/Hz.

    shipping : 0 (none near) to 1 (heavy).  wind_m_s : >= 0.

    References
    ----------
    The usual fit to the curves of Wenz 1962, JASA 34(12) 1936-1956, as in Coates 1990, Underwater Acoustic Systems;
    thermal noise after Mellen 1952, JASA 24(5) 478-480. The curves themselves hold to several dB.
    """
    f = np.maximum(np.asarray(frequency_hz, np.float64) / 1000, LEAST_KHZ)
    log = np.log10(f)
    turbulence = 17 - 30 * log
    ships = 40 + 20 * (shipping - 0.5) + 26 * log - 60 * np.log10(f + 0.03)
    wind = 50 + 7.5 * np.sqrt(wind_m_s) + 20 * log - 40 * np.log10(f + 0.4)
    return np.asarray(turbulence), np.asarray(ships), np.asarray(wind), np.asarray(-15 + 20 * log)


def ambient_db(frequency_hz: ArrayLike, shipping: float, wind_m_s: float) -> Floats:
    """Ambient noise, dB re 1 µPa²/Hz: the sum of the four parts' powers."""
    total = sum(10 ** (part / 10) for part in wenz_parts_db(frequency_hz, shipping, wind_m_s))
    return np.asarray(10 * np.log10(total))
