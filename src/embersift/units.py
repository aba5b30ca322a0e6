"""Unit strings to plain factors: the one place where a column's numbers change scale.

Strings follow FITS and VOUnit as astropy reads them. Three notations matter here:

==========================  ==============================================================
``1e10 Msun``               a scaled unit
``1e10 Msun / littleh``     with the Hubble parameter in it; the recipe must state its value
``dex(Msun)``               the column holds log10 of the value in that unit
==========================  ==============================================================
"""

from __future__ import annotations

import re
import warnings
from dataclasses import dataclass
from typing import Any

import numpy as np

from embersift.arrays import Array
from embersift.errors import CatalogueError

__all__ = ["Conversion", "conversion"]


@dataclass(frozen=True)
class Conversion:
    """``value * factor``, or ``10**value * factor`` for a column of logarithms."""

    factor: float = 1.0
    log: bool = False

    def __call__(self, values: Array) -> Array:
        if self.log:
            with np.errstate(over="ignore"):
                values = np.power(10.0, values)
        return values if self.factor == 1.0 else values * self.factor


def conversion(unit: str, wanted: str, h: float | None, where: str) -> Conversion:
    """The conversion from `unit` to `wanted`.

    Parameters
    ----------
    unit, wanted : str
        Unit strings; an empty `unit` means the values are already in `wanted`.
    h : float or None
        Value of ``littleh``.
    where : str
        How to name the column in an error.

    Raises
    ------
    CatalogueError
        The unit is not understood, does not convert, or has ``littleh`` without a value.

    Examples
    --------
    >>> f'{conversion("1e10 Msun / littleh", "Msun", 0.5, "mstar").factor:.6g}'
    '2e+10'
    >>> conversion("dex(Msun)", "Msun", None, "mstar").log
    True
    """
    if not unit.strip() or unit.strip() == wanted:
        return Conversion()
    from astropy import units as u

    if "littleh" in unit and h is None:
        raise CatalogueError(
            f"{where}: the unit {unit!r} contains littleh, and the recipe does not say its value. "
            "Set catalogue.h, for example h = 0.7."
        )
    littleh = u.def_unit("littleh", u.dimensionless_unscaled * (h or 1.0))
    try:
        with warnings.catch_warnings(), u.add_enabled_units([littleh]):
            warnings.simplefilter("ignore", u.UnitsWarning)
            given: Any = u.Unit(unit)
        log = isinstance(given, u.DexUnit) or given == u.dex
        if isinstance(given, u.function.logarithmic.LogUnit) and not log:
            raise ValueError("magnitudes and decibels are not used for this quantity")
        physical = given.physical_unit if isinstance(given, u.DexUnit) else given
        if given == u.dex:
            physical = u.dimensionless_unscaled
        target = u.Unit(wanted) if wanted else u.dimensionless_unscaled
        factor = float(physical.to(target))
    except (ValueError, TypeError, u.UnitConversionError) as error:
        hint = ""
        if re.search(r"/\s*h\b|\bh\s*\^?-1|\bh\*\*", unit):
            hint = " In unit strings h is the hour: write littleh for the Hubble parameter."
        target_words = wanted or "a plain number"
        reason = (
            f"does not convert to {target_words}"
            if isinstance(error, u.UnitConversionError)
            else f"is not a unit ({target_words} is expected)"
        )
        log_words = f"dex({wanted})" if wanted else "dex"
        linear_words = f'unit = "{wanted}" or, for' if wanted else "no unit or, for"
        raise CatalogueError(
            f"{where}: the unit {unit!r} {reason}.{hint} Declare it in the recipe, "
            f'such as {linear_words} a column of logarithms, unit = "{log_words}".'
        ) from None
    return Conversion(factor, log)
