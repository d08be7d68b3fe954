"""core: sound speed of sea water from temperature, salinity and depth."""

import gsw

__all__ = ["LATITUDE_DEG", "sound_speed_m_s"]

#: where pressure is taken from depth; from the equator to the pole it changes sound speed by under 0.1 m/s per km depth
LATITUDE_DEG = 45.0


def sound_speed_m_s(temperature_c: float, salinity: float, depth_m: float = 0.0) -> float:
    """Speed of sound, m/s.

    temperature_c : in place, degrees Celsius (ITS-90).  depth_m : metres below the surface, >= 0.
    salinity : practical salinity (what a conductivity cell reads), no unit; turned into absolute salinity by the
        reference composition, 35.16504/35 g/kg: the regional correction, up to 0.03 m/s, needs a position.

    References
    ----------
    IOC, SCOR and IAPSO 2010, TEOS-10; Roquet et al. 2015, 75-term equation, by the gsw library.
    """
    pressure = gsw.p_from_z(-depth_m, LATITUDE_DEG)
    absolute = gsw.SR_from_SP(salinity)
    return float(gsw.sound_speed(absolute, gsw.CT_from_t(absolute, temperature_c, pressure), pressure))
