"""Between conventions: initial mass functions, metallicity scales, growth and inflow.

A catalogue is converted to a law, never the law's coefficient to the catalogue.

========== ===================== ====================== ===============================
IMF        SFR / SFR(Salpeter)   M* / M*(Salpeter)      from
========== ===================== ====================== ===============================
salpeter   1                     1
kroupa     0.67 (MEM)            0.66 (MEM)             Madau & Dickinson 2014
chabrier   0.63 (V)              0.61 (MEM)             Madau & Dickinson 2014
========== ===================== ====================== ===============================

The same light means fewer solar masses under a Kroupa IMF than under a Salpeter one: a Salpeter
SFR is multiplied by 0.67 to give a Kroupa SFR.

=================== ==========================================================================
metallicity         12 + log(O/H)
=================== ==========================================================================
oh12                itself
zsun                solar + log10(Z / Zsun), Z / Zsun by number of oxygen atoms
mass_fraction       solar + log10(Z / Z_solar), Z the mass in metals; Z_solar must be stated:
                    0.0134 (Asplund et al. 2009), 0.0142 (protosolar), 0.02 (older work)
=================== ==========================================================================

Solar is 8.69 (Asplund et al. 2009, ARA&A, 47, 481) unless said otherwise. Oxygen is taken to
follow all metals.

Rates: what flows in is what the hole gains plus what it radiates, growth = (1 - eps) inflow.

Examples
--------
>>> imf_factor("sfr", "salpeter", "kroupa")
0.67
>>> round(1.0 * imf_factor("sfr", "chabrier", "kroupa"), 4)
1.0635
>>> import numpy as np
>>> oh12_from_zsun(np.array([1.0, 0.1])).round(3).tolist()
[8.69, 7.69]
>>> oh12_from_mass_fraction(np.array([0.02, 0.002]), 0.02).round(3).tolist()
[8.69, 7.69]
>>> inflow_from_growth(np.array([0.9]), 0.1).tolist()
[1.0]
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from embersift.arrays import Array
from embersift.errors import LawError, did_you_mean
from embersift.laws.declaration import Coefficient

__all__ = [
    "IMF_FACTORS",
    "SOLAR_OH12",
    "imf_factor",
    "inflow_from_growth",
    "oh12_from_mass_fraction",
    "oh12_from_zsun",
]

SOLAR_OH12 = 8.69
"""Solar 12 + log(O/H), Asplund et al. 2009."""

IMF_FACTORS: Mapping[str, Mapping[str, Coefficient]] = MappingProxyType(
    {
        "sfr": MappingProxyType(
            {
                "salpeter": Coefficient(1.0),
                "kroupa": Coefficient(0.67, status="MEM"),
                "chabrier": Coefficient(0.63, status="V"),
            }
        ),
        "mstar": MappingProxyType(
            {
                "salpeter": Coefficient(1.0),
                "kroupa": Coefficient(0.66, status="MEM"),
                "chabrier": Coefficient(0.61, status="MEM"),
            }
        ),
    }
)
"""What a Salpeter value is multiplied by (Madau & Dickinson 2014, ARA&A, 52, 415)."""


def imf_factor(quantity: Literal["sfr", "mstar"], from_: str, to: str) -> float:
    """Return what a value under one IMF is multiplied by to hold under another.

    Parameters
    ----------
    quantity : {"sfr", "mstar"}
        Star-formation rate or stellar mass.
    from_, to : {"salpeter", "kroupa", "chabrier"}
        The IMF of the value, and the IMF wanted.

    Raises
    ------
    LawError
        An IMF that is not known.

    Notes
    -----
    Madau & Dickinson 2014, ARA&A, 52, 415; the table and its status are in the module's docstring.
    """
    factors = IMF_FACTORS[quantity]
    for imf in (from_, to):
        if imf not in factors:
            raise LawError(f"There is no IMF {imf!r}. {did_you_mean(imf, factors)}")
    return factors[to].value / factors[from_].value


def oh12_from_zsun(z_over_zsun: ArrayLike, solar_oh12: float = SOLAR_OH12) -> Array:
    """Return 12 + log(O/H) of a metallicity relative to solar, by number.

    Parameters
    ----------
    z_over_zsun : array
        Metallicity over solar; what is not positive gives NaN.
    solar_oh12 : float
        12 + log(O/H) of the Sun on the catalogue's scale.
    """
    z = np.asarray(z_over_zsun, dtype=float)
    with np.errstate(invalid="ignore"):
        return np.asarray(solar_oh12 + np.log10(np.where(z > 0.0, z, np.nan)))


def oh12_from_mass_fraction(
    z: ArrayLike, solar_mass_fraction: float, solar_oh12: float = SOLAR_OH12
) -> Array:
    """Return 12 + log(O/H) of a mass fraction in metals.

    Parameters
    ----------
    z : array
        Mass in metals over all mass; what is not positive gives NaN.
    solar_mass_fraction : float
        The solar value on the same scale; there is no default, as three are in use.
    solar_oh12 : float
        12 + log(O/H) that goes with it.

    Raises
    ------
    LawError
        If the solar value is not positive.
    """
    if not solar_mass_fraction > 0.0:
        raise LawError(
            f"The solar mass fraction in metals is {solar_mass_fraction:g}, but it must be "
            "positive: 0.0134 (Asplund et al. 2009), 0.0142 (protosolar) and 0.02 are in use."
        )
    return oh12_from_zsun(np.asarray(z, dtype=float) / solar_mass_fraction, solar_oh12)


def inflow_from_growth(rate: ArrayLike, efficiency: float) -> Array:
    """Return the inflow of which a share `efficiency` is radiated and the rest is `rate`.

    Parameters
    ----------
    rate : array
        Growth of the black hole, in any unit.
    efficiency : float
        Radiated share of the rest energy that flows in, 0 to below 1.

    Raises
    ------
    LawError
        An efficiency outside that range.
    """
    if not 0.0 <= efficiency < 1.0:
        raise LawError(
            f"The radiative efficiency is {efficiency:g}, but it must lie between 0 and 1 for a "
            "rate of growth to be turned into inflow. Set agn.efficiency, usually 0.1."
        )
    return np.asarray(np.asarray(rate, dtype=float) / (1.0 - efficiency))
