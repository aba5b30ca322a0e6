"""Whole columns that cannot be what they claim: logs for masses, solar units for O/H, and so on.

A wrong unit moves every verdict by factors of thousands and looks like physics, so the run stops
and says what the column looks like. The limits are generous (common practice, no source); a
quantity named in ``catalogue.trusted`` is taken as it is.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from embersift.arrays import Array
from embersift.catalogue import Layout
from embersift.columns import INPUT
from embersift.constants import EDDINGTON_PER_MSUN, RATE_TO_LUMINOSITY
from embersift.errors import CatalogueError

__all__ = ["suspicion"]

_SAMPLE = 5_000

# units that simulations use for an accretion rate, in Msun / yr
_RATES: Mapping[str, float] = {
    "Msun / Gyr": 1e-9,
    "Msun / Myr": 1e-6,
    "g / s": 1.5870772e-26,
    "kg / s": 1.5870772e-23,
}


@dataclass(frozen=True)
class _Look:
    """Summary of one column's finite values, as they stand in the file and as converted."""

    raw: Array
    converted: Array
    log: bool

    @property
    def middle(self) -> float:
        positive = self.converted[self.converted > 0.0]
        return float(np.median(positive)) if positive.size else float("nan")

    @property
    def mostly_logs(self) -> bool:
        """Too many negative values to be slips in a column that cannot be negative."""
        negative = self.raw < 0.0
        return bool(negative.sum() >= 3 and negative.mean() > 0.3 and self.raw_within(-30.0, 20.0))

    def raw_within(self, low: float, high: float) -> bool:
        if not self.raw.size:
            return False
        telling = self.raw[(self.raw != 0.0) & (self.raw > -90.0)]  # 0 and -99 stand for none
        if not telling.size:
            return False
        a, b = np.percentile(telling, [5.0, 95.0])
        return bool(a >= low and b <= high)


def _mass(look: _Look, low: float, logs: tuple[float, float]) -> str:
    if look.log:
        if look.middle > 1e15:
            return 'is declared as log10, and its values look linear|unit = "Msun"'
        return ""
    if look.middle < low:
        if look.raw_within(*logs):
            return 'looks like log10 of a mass in Msun|unit = "dex(Msun)"'
        return 'looks like units of 1e10 Msun|unit = "1e10 Msun"'
    if look.middle > 1e20:
        return 'is far above any mass in Msun (grams?)|unit = "g"'
    return ""


def _mstar(look: _Look) -> str:
    return _mass(look, 1e3, (2.0, 14.0))


def _mbh(look: _Look) -> str:
    return _mass(look, 12.0, (1.5, 12.0))


def _sfr(look: _Look) -> str:
    if look.log and look.middle > 1e6:
        return 'is declared as log10, and its values look linear|unit = "Msun / yr"'
    if not look.log and look.mostly_logs:
        return 'looks like log10 of a rate (many values are negative)|unit = "dex(Msun / yr)"'
    if not look.log and look.middle > 1e6:
        return 'is far above any rate in Msun/yr (Msun/Gyr?)|unit = "Msun / Gyr"'
    return ""


def _oh12(look: _Look) -> str:
    if not look.raw.size or 3.0 <= np.median(look.raw) <= 12.0:
        return ""
    middle = float(np.median(look.raw))
    if middle < 0.0:
        return (
            "looks like log10 of a metallicity in solar units|map the column as metallicity with "
            'unit = "dex"'
        )
    if middle < 0.1:
        return (
            "looks like a metal mass fraction|map the column as metallicity and set "
            'catalogue.metallicity = "mass_fraction" and catalogue.solar_mass_fraction'
        )
    if middle < 3.0:
        return "looks like a metallicity in solar units|map the column as metallicity"
    return "is far above any 12+log(O/H)|check the column"


def _metallicity(scale: str) -> Callable[[_Look], str]:
    def check(look: _Look) -> str:
        if look.raw_within(6.0, 10.5) and not look.log:
            return "looks like 12+log(O/H)|map the column as oh12"
        if not look.log and look.mostly_logs:
            return 'looks like log10 (many values are negative)|unit = "dex"'
        if scale == "mass_fraction" and look.middle > 0.15:
            return 'looks like solar units|catalogue.metallicity = "zsun"'
        if scale == "zsun" and look.middle < 0.04:
            return (
                'looks like a metal mass fraction|catalogue.metallicity = "mass_fraction" with '
                "catalogue.solar_mass_fraction"
            )
        return ""

    return check


def _redshift(look: _Look) -> str:
    if look.middle > 50.0:
        return "looks like a velocity in km/s|divide it by 299792.458 km/s first"
    return ""


def _nh(look: _Look) -> str:
    if look.log:
        return 'is declared as log10, and looks linear|unit = "cm-2"' if look.middle > 1e30 else ""
    if look.raw_within(15.0, 28.0):
        return 'looks like log10 of a column in cm-2|unit = "dex(cm-2)"'
    if look.middle < 1e10:
        return 'looks like units of 1e22 cm-2|unit = "1e22 cm-2"'
    return ""


def _mdot(look: _Look, mbh: Array | None) -> str:
    if not look.log and look.mostly_logs:
        return 'looks like log10 of a rate (many values are negative)|unit = "dex(Msun / yr)"'
    if look.log and look.middle > 1e6:
        return 'is declared as log10, and its values look linear|unit = "Msun / yr"'
    if mbh is None:
        return ""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = 0.1 * RATE_TO_LUMINOSITY * look.converted / (EDDINGTON_PER_MSUN * mbh)
    ratio = ratio[(ratio > 0.0) & np.isfinite(ratio)]
    if not ratio.size:
        return ""
    middle = float(np.median(ratio))
    if middle < 1e3:
        return ""
    text = f"gives a median of {middle:.2g} times the Eddington limit"
    fitting = [name for name, factor in _RATES.items() if 1e-7 < middle * factor < 3.0]
    if fitting:
        return f'{text}; it looks like a rate in {" or ".join(fitting)}|unit = "{fitting[0]}"'
    return f"{text}|check its unit and that of mbh"


def suspicion(layout: Layout, table: object) -> None:
    """Stop when a column cannot be what it claims.

    Parameters
    ----------
    layout : Layout
        How the table is read.
    table : DataFrame or Table
        The whole catalogue, or the first block of it; a sample of its rows is looked at.

    Raises
    ------
    CatalogueError
        Names the file, the column, what it looks like and how to declare it.
    """
    checks: dict[str, Callable[[_Look], str]] = {
        "mstar": _mstar,
        "sfr": _sfr,
        "mbh": _mbh,
        "oh12": _oh12,
        "metallicity": _metallicity(layout.choices.metallicity),
        "redshift": _redshift,
        "nh": _nh,
    }
    # a few thousand rows, spread evenly, say what a column is
    columns = layout.raw_columns(table)
    sample = columns.part(slice(None, None, max(1, len(columns) // _SAMPLE)))
    mbh = layout.read(sample, "mbh")
    checks["mdot"] = lambda look: _mdot(look, mbh_of_rows)
    for quantity, check in checks.items():
        got = layout.read(sample, quantity)
        if got is None or quantity in layout.choices.trusted:
            continue
        column = layout.columns[quantity]
        finite = np.isfinite(got.values)
        mbh_of_rows = mbh.values[finite] if mbh is not None else None
        converted = got.values[finite]
        with np.errstate(divide="ignore", invalid="ignore"):
            raw = np.log10(converted) if column.convert.log else converted / column.convert.factor
        if column.convert.log and np.isinf(got.values).mean() > 0.5:
            converted = np.append(converted, np.full(got.values.size, 1e300))
        looks = check(_Look(raw[np.isfinite(raw)], converted, column.convert.log))
        if looks:
            what, _, cure = looks.partition("|")
            declared = INPUT[quantity].unit
            if cure.startswith("unit"):
                cure = f'catalogue.columns.{quantity} = {{ column = "{column.column}", {cure} }}'
            raise CatalogueError(
                f"{layout.origin}: column {column.column!r} is taken as {quantity}"
                f"{f' [{column.unit or declared}]' if declared else ''}, and {what} "
                f"(5th to 95th percentile in the file: {_span(raw)}). "
                f"If so, declare it: {cure}. If it is right as it is: "
                f'catalogue.trusted = ["{quantity}"].'
            )


def _span(raw: Array) -> str:
    finite = raw[np.isfinite(raw)]
    if not finite.size:
        return "none finite"
    a, b = np.percentile(finite, [5.0, 95.0])
    return f"{a:.4g} to {b:.4g}"
