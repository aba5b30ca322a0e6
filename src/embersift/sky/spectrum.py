"""Band conversions: how much of a spectrum's light falls in a band, at rest and as observed.

| component | spectrum |
|---|---|
| black hole, binaries | power law, photon index Gamma: photons per keV proportional to E^-Gamma |
| hot gas | two bremsstrahlung components, flat Gaunt factor: energy per keV as exp(-E/kT) |

An observed band [e1, e2] is the rest band [e1 (1+z), e2 (1+z)]. For a power law this is the
factor (1+z)^(2-Gamma); thermal gas needs its own integral. Lines raise the soft band of real gas,
so the hard share given here is an upper estimate.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np

from embersift.arrays import Array
from embersift.bands import SOFT, Band
from embersift.interpolation import UniformCubic
from embersift.sky.absorption import EDGES, cross_section
from embersift.sky.distance import HIGHEST_REDSHIFT

# error below 1e-8 out to redshift 20, where the thermal tail falls steepest of all that is used
_CELLS = 1024

__all__ = ["GasSpectrum", "power_law_integral", "power_law_ratio"]


def power_law_integral(gamma: float, band: Band) -> float:
    """Energy in `band` [keV^(2-Gamma)] of a power law with one photon/keV at 1 keV."""
    if math.isclose(gamma, 2.0, abs_tol=1e-12):
        return math.log(band.high / band.low)
    power = 2.0 - gamma
    return (math.pow(band.high, power) - math.pow(band.low, power)) / power


def power_law_ratio(gamma: float, wanted: Band, given: Band) -> float:
    """L(wanted) / L(given) of an unabsorbed power law.

    Examples
    --------
    >>> round(power_law_ratio(1.8, Band(0.5, 2.0), Band(2.0, 10.0)), 4)
    0.6377
    """
    return power_law_integral(gamma, wanted) / power_law_integral(gamma, given)


@dataclass(frozen=True)
class GasSpectrum:
    """Hot gas as two bremsstrahlung components.

    Parameters
    ----------
    kt : (float, float)
        Temperatures [keV], cooler first.
    hot_share : float
        Share of the 0.5-2 keV light that the hotter one gives (common practice, no source).
    """

    kt: tuple[float, float]
    hot_share: float

    def _components(self) -> tuple[tuple[float, float], ...]:
        shares = (1.0 - self.hot_share, self.hot_share)
        # one unit of light in 0.5-2 keV in all
        return tuple(
            (share / (kt * (math.exp(-SOFT.low / kt) - math.exp(-SOFT.high / kt))), kt)
            for share, kt in zip(shares, self.kt, strict=True)
        )

    def ratio(self, wanted: Band, given: Band) -> float:
        """L(wanted) / L(given) at rest, unabsorbed."""
        return self._band(wanted) / self._band(given)

    def _band(self, band: Band) -> float:
        return sum(
            norm * kt * (math.exp(-band.low / kt) - math.exp(-band.high / kt))
            for norm, kt in self._components()
        )

    def observed_share(self, band: Band, galactic_nh: float) -> UniformCubic:
        """ln of F_band 4 pi d_L^2 / L(0.5-2 keV) as a function of u = ln(1+z).

        The Galactic column acts at observed energies, so the integral is smooth in u and a table
        of its logarithm serves every row.
        """
        if galactic_nh == 0.0:
            return UniformCubic(
                lambda u: self._log_band(band, np.exp(u)), 0.0, math.log1p(HIGHEST_REDSHIFT), _CELLS
            )
        inner = EDGES[(band.low < EDGES) & (band.high > EDGES)]
        bounds = np.concatenate(([band.low], inner, [band.high]))
        # cells no wider than a quarter of the cooler temperature resolve its exponential
        bounds = np.unique(
            np.concatenate(
                [
                    np.linspace(a, b, 2 + min(400, int((b - a) / (0.25 * self.kt[0]))))
                    for a, b in itertools.pairwise(bounds)
                ]
            )
        )
        x, w = np.polynomial.legendre.leggauss(6)
        half = 0.5 * np.diff(bounds)[:, None]
        energy = (bounds[:-1, None] + half * (x + 1.0)).ravel()
        weight = (half * w).ravel()
        weight = weight * np.exp(-galactic_nh * cross_section(energy))

        def log_share(u: Array) -> Array:
            stretch = np.exp(u)
            parts = []
            for norm, kt in self._components():
                if norm == 0.0:
                    continue
                # the exponent at the band's lower end is taken out, so that nothing underflows
                fall = np.exp(-np.outer(stretch, energy - band.low) / kt) @ weight
                parts.append(np.log(norm * stretch * fall) - stretch * band.low / kt)
            total: Array = np.logaddexp.reduce(parts, axis=0)
            return total

        return UniformCubic(log_share, 0.0, math.log1p(HIGHEST_REDSHIFT), _CELLS)

    def _log_band(self, band: Band, stretch: Array) -> Array:
        """ln of the light in the stretched band, in closed form."""
        parts = [
            math.log(norm * kt)
            - stretch * (band.low / kt)
            + np.log(-np.expm1(-stretch * ((band.high - band.low) / kt)))
            for norm, kt in self._components()
            if norm > 0.0
        ]
        total: Array = np.logaddexp.reduce(parts, axis=0)
        return total
