"""Physical constants in cgs, from astropy's CODATA set; every module takes them from here."""

from __future__ import annotations

import math

from astropy import constants, units

__all__ = [
    "EDDINGTON_PER_MSUN",
    "JULIAN_YEAR",
    "MPC",
    "RATE_TO_LUMINOSITY",
    "SOLAR_LUMINOSITY",
    "SPEED_OF_LIGHT_KM",
]

SOLAR_LUMINOSITY = 3.828e33  # erg/s, nominal (IAU 2015 resolution B3)
JULIAN_YEAR = 365.25 * 86400.0  # s
MPC: float = units.Mpc.to(units.cm)  # cm
SPEED_OF_LIGHT_KM: float = constants.c.to_value("km/s")

_msun: float = constants.M_sun.cgs.value
_c: float = constants.c.cgs.value

EDDINGTON_PER_MSUN: float = (
    4.0 * math.pi * constants.G.cgs.value * _msun * constants.m_p.cgs.value * _c
) / constants.sigma_T.cgs.value
"""4 pi G M m_p c / sigma_T for one solar mass of black hole [erg/s]: pure ionised hydrogen."""

RATE_TO_LUMINOSITY: float = _msun / JULIAN_YEAR * _c**2
"""Rest energy carried by 1 Msun per Julian year [erg/s]."""
