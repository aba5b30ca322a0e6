"""Luminosity distance in a flat universe of matter and a cosmological constant, and its inverse.

The comoving distance is integrated by Gauss-Legendre quadrature cell by cell, once, and then
interpolated: astropy's own function costs more per row than all the rest of the chain.
"""

from __future__ import annotations

import numpy as np

from embersift.arrays import Array
from embersift.constants import SPEED_OF_LIGHT_KM
from embersift.interpolation import UniformCubic

__all__ = ["HIGHEST_REDSHIFT", "FlatUniverse"]

HIGHEST_REDSHIFT = 1000.0
_CELLS = 8192
_HIGHEST_U = float(np.log1p(HIGHEST_REDSHIFT))


class FlatUniverse:
    """Flat LCDM without radiation.

    Parameters
    ----------
    h0 : float
        Hubble constant [km/s/Mpc].
    om0 : float
        Matter density today in units of the critical one, 0 to 1.

    Examples
    --------
    >>> round(float(FlatUniverse(70.0, 0.3).luminosity_distance(np.array([0.05]))[0]), 3)
    222.289
    """

    def __init__(self, h0: float, om0: float) -> None:
        self.h0, self.om0 = h0, om0
        self._hubble_distance = SPEED_OF_LIGHT_KM / h0
        step = _HIGHEST_U / _CELLS
        # a node beyond either end of the interpolant: the integral continues smoothly through 0
        edges = step * np.arange(-1, _CELLS + 2)
        x, w = np.polynomial.legendre.leggauss(8)
        u = edges[:-1, None] + 0.5 * step * (x + 1.0)
        growth = np.exp(u)
        cells = 0.5 * step * ((growth / np.sqrt(om0 * growth**3 + (1.0 - om0))) @ w)
        comoving = np.concatenate(([0.0], np.cumsum(cells)))
        comoving -= comoving[1]  # zero at u = 0
        # D_C / u has no zero, so small redshifts keep full relative accuracy
        with np.errstate(invalid="ignore"):
            ratio = comoving / edges
        ratio[1] = 1.0
        self._ratio = UniformCubic(lambda _: ratio, 0.0, _HIGHEST_U, _CELLS)
        inner = slice(1, _CELLS + 2)
        self._nodes_u = edges[inner]
        with np.errstate(divide="ignore"):
            self._nodes_log_d = np.log(comoving[inner]) + edges[inner]

    def luminosity_distance(self, z: Array) -> Array:
        """Luminosity distance [Mpc] for redshifts 0 to 1000; NaN outside."""
        u = np.log1p(z)
        d = self._ratio(u)
        d *= u
        u = z + 1.0
        u *= self._hubble_distance
        d *= u
        return d

    def redshift(self, distance: Array) -> Array:
        """The redshift that has this luminosity distance [Mpc]; NaN beyond redshift 1000."""
        with np.errstate(divide="ignore", invalid="ignore"):
            goal = distance / self._hubble_distance
            inside = (goal > 0.0) & (np.log(goal) <= self._nodes_log_d[-1])
            goal = np.where(inside, goal, 1.0)
            # interpolating u(log d) below the first node would start Newton far off: d = u there
            u = np.where(
                goal < np.exp(self._nodes_log_d[1]),
                goal,
                np.interp(np.log(goal), self._nodes_log_d[1:], self._nodes_u[1:]),
            )
        for _ in range(4):
            growth = np.exp(u)
            d = self._ratio(np.clip(u, 0.0, _HIGHEST_U)) * u * growth
            slope = d + growth**2 / np.sqrt(self.om0 * growth**3 + (1.0 - self.om0))
            u = u - (d - goal) / slope
        z: Array = np.where(inside, np.expm1(u), np.nan)
        return z
