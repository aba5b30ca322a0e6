"""The instrument's effective area, and the counts it makes of a power law's flux.

File layout: OGIP CAL/GEN/92-002, extension SPECRESP with columns ENERG_LO, ENERG_HI and SPECRESP.
The spread of energies by the detector is not followed: photons count at their true energy.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np

from embersift.arrays import Array
from embersift.bands import Band
from embersift.errors import RecipeError, did_you_mean

__all__ = [
    "EffectiveArea",
    "Transmission",
    "counts_per_flux",
    "mean_area",
    "photons_per_energy",
    "read_effective_area",
]

Transmission = Callable[[Array], Array]
"""Share of the photons of given energies [keV] that arrive."""

_UNITS = {"ENERG_LO": "keV", "ENERG_HI": "keV", "SPECRESP": "cm2"}
_EXTENSION = "SPECRESP"
_SEAM = 0.01  # share of a bin by which neighbours may miss each other: files round their energies
_FINEST = 1e-3  # widest step in ln E where the transmission, with its edges, is sampled
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(4)


@dataclass(frozen=True)
class EffectiveArea:
    """Effective area in bins of energy that follow one another without gaps.

    Parameters
    ----------
    energy_low, energy_high : arrays
        Edges of the bins [keV], rising.
    area : array
        Mean area in each bin [cm2], 0 or more.
    origin : str
        Named in errors: the file that was read.

    Raises
    ------
    RecipeError
        If the columns differ in length or hold no bins, an energy or area is missing or
        negative, a bin is empty, or bins overlap or leave a gap. Names the first rows.
    """

    energy_low: Array
    energy_high: Array
    area: Array
    origin: str = "the effective area"

    def __post_init__(self) -> None:
        low, high, area = (np.asarray(v, dtype=float) for v in self._columns)
        if low.ndim != 1 or not low.shape == high.shape == area.shape or low.size == 0:
            raise RecipeError(
                f"{self.origin}: expected three columns of one length with one number a row, "
                f"found shapes {low.shape}, {high.shape}, {area.shape}."
            )
        for name, values in zip(_UNITS, (low, high, area), strict=True):
            self._refuse(~np.isfinite(values), f"{name} is missing or not finite")
            self._refuse(values < 0.0, f"{name} is negative")
        self._refuse(high <= low, "ENERG_HI is not above ENERG_LO")
        # files made from wavelengths run downwards
        order = np.argsort(low, kind="stable")
        for name, values in zip(
            ("energy_low", "energy_high", "area"), (low, high, area), strict=True
        ):
            values = values[order]
            values.flags.writeable = False
            object.__setattr__(self, name, values)
        step = self.energy_low[1:] - self.energy_high[:-1]
        width = self.energy_high - self.energy_low
        allowed = _SEAM * np.minimum(width[1:], width[:-1])
        for bad, what in ((step > allowed, "there is a gap"), (step < -allowed, "bins overlap")):
            if bad.any():
                at = int(np.flatnonzero(bad)[0])
                raise RecipeError(
                    f"{self.origin}: {what} between the bins "
                    f"{self.energy_low[at]:g}-{self.energy_high[at]:g} and "
                    f"{self.energy_low[at + 1]:g}-{self.energy_high[at + 1]:g} keV "
                    f"({int(bad.sum())} in all). Each bin must begin where the last one ends."
                )

    @property
    def _columns(self) -> tuple[Array, Array, Array]:
        return self.energy_low, self.energy_high, self.area

    def _refuse(self, bad: np.ndarray[Any, np.dtype[np.bool_]], what: str) -> None:
        if bad.any():
            rows = ", ".join(str(row + 1) for row in np.flatnonzero(bad)[:5])
            more = ", ..." if bad.sum() > 5 else ""
            raise RecipeError(
                f"{self.origin}: {what} in {int(bad.sum())} of {bad.size} rows "
                f"(rows {rows}{more}). Repair or remove them."
            )


def read_effective_area(path: str | PathLike[str]) -> EffectiveArea:
    """Read the SPECRESP extension of an OGIP effective area file (FITS).

    Parameters
    ----------
    path : path
        The file; may be gzipped. Units are converted; a column without one is taken to be in
        keV or cm2, as the standard says.

    Raises
    ------
    RecipeError
        If the file is missing, not FITS, or has no such extension or more than one; if a column
        is missing or its unit is not one of energy or area; or as `EffectiveArea` does.
    """
    from astropy.io import fits

    path = Path(path)
    try:
        with fits.open(path, memmap=False) as hdus:
            return _from_tables(path, hdus)
    except RecipeError:
        raise
    except FileNotFoundError:
        raise RecipeError(f"There is no effective area file {path}.") from None
    except (OSError, TypeError, ValueError) as error:
        raise RecipeError(
            f"{path} cannot be read as FITS ({error}). Expected an effective area file with a "
            f"{_EXTENSION} extension."
        ) from None


def _from_tables(path: Path, hdus: Any) -> EffectiveArea:
    from astropy import units

    found = [hdu for hdu in hdus if hdu.name == _EXTENSION and getattr(hdu, "columns", None)]
    if len(found) != 1:
        names = ", ".join(hdu.name or "(unnamed)" for hdu in hdus)
        raise RecipeError(
            f"{path} has {len(found) or 'no'} {_EXTENSION} tables; expected one. It holds: {names}."
        )
    table = found[0]
    by_name = {column.name.upper(): column for column in table.columns}
    values = []
    for name, wanted in _UNITS.items():
        if name not in by_name:
            raise RecipeError(
                f"{path}, extension {_EXTENSION}: no column {name}. "
                f"{did_you_mean(name, by_name)} Expected {', '.join(_UNITS)}."
            )
        column = by_name[name]
        try:
            numbers = np.asarray(table.data[column.name], dtype=float)
            factor = units.Unit(column.unit or wanted).to(wanted)
        except (ValueError, TypeError) as error:
            raise RecipeError(
                f"{path}, extension {_EXTENSION}: column {name} has unit "
                f"{column.unit or '(none)'!r} and format {column.format}; expected numbers in "
                f"{wanted} or a unit that converts to it ({error})."
            ) from None
        values.append(numbers * factor)
    low, high, area = values
    return EffectiveArea(low, high, area, origin=str(path))


def mean_area(
    effective_area: EffectiveArea,
    band: Band,
    gamma: float,
    transmission: Transmission | None = None,
) -> float:
    """Area [cm2] averaged over the photons of a power law that arrive in a band.

    Parameters
    ----------
    effective_area : EffectiveArea
    band : Band
        Observed band [keV].
    gamma : float
        Photon index: photons per keV fall as E^-gamma.
    transmission : callable, optional
        Share of the photons that arrive, by energy. Without it the integrals are exact for an
        area that is constant in each bin; with it each bin is sampled finely.

    Raises
    ------
    RecipeError
        If the file does not cover the band, the area is 0 all over it, or nothing arrives.
    """
    low, high, area = _bins_in(effective_area, band)
    photons = _integral(gamma, low, high, transmission)
    _refuse_darkness(band, photons)
    return float(area @ photons) / float(photons.sum())


def photons_per_energy(band: Band, gamma: float, transmission: Transmission | None = None) -> float:
    """Photons per erg of a power law in a band, of what arrives.

    Raises
    ------
    RecipeError
        If nothing arrives.

    Examples
    --------
    For gamma = 2 the mean photon of 1-10 keV has ln(10) / (1 - 1/10) keV:

    >>> round(1.0 / photons_per_energy(Band(1.0, 10.0), 2.0) / 1.602176634e-9, 4)
    2.5584
    """
    low, high = np.array([band.low]), np.array([band.high])
    photons = _integral(gamma, low, high, transmission)
    energy = _integral(gamma - 1.0, low, high, transmission)
    _refuse_darkness(band, photons)
    return float(photons[0] / (energy[0] * _erg_per_kev()))


def counts_per_flux(
    effective_area: EffectiveArea,
    band: Band,
    gamma: float,
    transmission: Transmission | None = None,
) -> float:
    """Counts per erg/cm2 received in a band: counts/s for a flux of 1 erg/s/cm2.

    The flux is the observed one, what is left after `transmission`; counts and flux share the
    band. Parameters and errors as in `mean_area`.
    """
    return mean_area(effective_area, band, gamma, transmission) * photons_per_energy(
        band, gamma, transmission
    )


def _refuse_darkness(band: Band, photons: Array) -> None:
    if not photons.sum() > 0.0:
        raise RecipeError(f"No photon of {band} arrives: the absorption leaves nothing to count.")


def _bins_in(effective_area: EffectiveArea, band: Band) -> tuple[Array, Array, Array]:
    """The bins that overlap a band, the outer ones cut at its ends."""
    origin = effective_area.origin
    first, last = float(effective_area.energy_low[0]), float(effective_area.energy_high[-1])
    # energies are often stored in single precision
    if first > band.low * (1.0 + 1e-6) or last < band.high * (1.0 - 1e-6):
        raise RecipeError(
            f"{origin} covers {first:g}-{last:g} keV, which does not hold the band {band}. "
            "Give a band inside it, or another file."
        )
    inside = (effective_area.energy_high > band.low) & (effective_area.energy_low < band.high)
    low = effective_area.energy_low[inside].copy()
    high = effective_area.energy_high[inside].copy()
    # one edge for both neighbours, so that no rounding of the file is counted twice or lost
    high[:-1] = low[1:]
    low[0], high[-1] = band.low, band.high
    area = effective_area.area[inside]
    if not area.any():
        raise RecipeError(
            f"{origin}: the area is 0 all over {band}. Check the file and the band's units (keV)."
        )
    return low, high, area


def _integral(gamma: float, low: Array, high: Array, transmission: Transmission | None) -> Array:
    """Integral of E^-gamma, times the transmission, in each bin [keV^(1-gamma)]."""
    if transmission is None:
        return _power_law(gamma, low, high)
    pieces = np.maximum(1, np.ceil(np.log(high / low) / _FINEST)).astype(int)
    bin_of = np.repeat(np.arange(low.size), pieces)
    place = np.arange(bin_of.size) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    ratio: Array = (high / low)[bin_of] ** (1.0 / pieces[bin_of])
    start: Array = low[bin_of] * ratio**place
    half = 0.5 * np.log(ratio)
    energy = start[:, None] * np.exp(half[:, None] * (_NODES + 1.0))
    passed = np.asarray(transmission(energy.ravel()), dtype=float).reshape(energy.shape)
    # only the mean transmission of a piece is sampled; its power law stays in closed form
    shape = _WEIGHTS * energy ** (1.0 - gamma)
    share = (shape * passed).sum(axis=1) / shape.sum(axis=1)
    parts = share * _power_law(gamma, start, start * ratio)
    result: Array = np.add.reduceat(parts, np.cumsum(pieces) - pieces)
    return result


def _power_law(gamma: float, low: Array, high: Array) -> Array:
    """Closed form that stays exact for narrow bins and through gamma = 1."""
    from scipy.special import exprel

    width = np.log1p((high - low) / low)
    integral: Array = low ** (1.0 - gamma) * width * exprel((1.0 - gamma) * width)
    return integral


def _erg_per_kev() -> float:
    from astropy import units

    return float(units.keV.to(units.erg))
