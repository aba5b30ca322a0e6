"""Luminosities in solar units, the way published bolometric corrections take them."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from embersift.constants import SOLAR_LUMINOSITY
from embersift.laws.declaration import Array, Check

__all__ = ["SHEET", "checks_at", "log_solar", "solar"]

SHEET = "check value of the coefficient sheet (CALC)"


def solar(x: float) -> float:
    """Luminosity [erg/s] whose log10 in solar units is x."""
    return float(SOLAR_LUMINOSITY * 10.0**x)


def log_solar(lbol: Array, low: float, high: float = math.inf) -> Array:
    """Return log10(L_bol / L_sun), held between `low` and `high`.

    Parameters
    ----------
    lbol : array
        Bolometric luminosity [erg/s]; zero and NaN are fine.
    low, high : float
        Where to hold, as log10 in solar units.
    """
    x = np.maximum(lbol, solar(low))
    if high < math.inf:
        x = np.minimum(x, solar(high))
    x /= SOLAR_LUMINOSITY  # not less its log: at 1 L_sun rounding must not make x negative
    return np.log10(x)


def checks_at(band: str, values: Mapping[float, float], source: str = SHEET) -> tuple[Check, ...]:
    """Check values of k in one band (``hard`` or ``soft``), by log10(L_bol / L_sun)."""
    return tuple(
        Check({"lbol": solar(x), "band": band}, "k", k, 1e-3, source) for x, k in values.items()
    )
