"""The odds of a row: the probability that it is visible, when the laws' scatter is admitted.

Three independent log-normal scatters [dex] move a row about its central values, which are taken
as medians:

========== ============================================== ===========================
agn        the black hole's X-rays for its L_bol          its flux, and L(2-10) of the floor
variability its flux on the day of the observation        its flux alone
background the host's own X-rays                          the background flux
========== ============================================== ===========================

With k, v, b their Gaussian deviates, t = k + v and s = t - b, the criteria of a fate are bounds:
``underfloor`` on k, ``faint`` on t, ``outshone`` on s. Given t, k and s are independent, so the
probability of all three is one integral over t; with only two bounds in doubt it is a bivariate
normal probability, in closed form with Owen's T function (Owen 1956, Ann. Math. Stat. 27, 1075).
When the flux that counts is the total, ``faint`` couples t and b, and one more integral over t
takes off the rows that are too faint. Instead of a log-normal background any distribution can
be given. Nothing is drawn at random.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array, Mask
from embersift.errors import RecipeError
from embersift.exact_sums import LARGEST, SMALLEST, Exact, as_floats, exact_sums

__all__ = [
    "ACCURACY",
    "EXACT_ROWS",
    "Expected",
    "Scatter",
    "Survival",
    "expected_visible",
    "odds",
    "poisson_binomial",
    "poisson_binomial_interval",
]

ACCURACY = 1e-5
"""Largest absolute error of `odds` with a log-normal background."""

EXACT_ROWS = 65536
"""Up to so many rows in doubt the interval of a Poisson-binomial count is always exact."""

Survival: TypeAlias = Callable[[Array, NDArray[np.intp]], Array]
"""``survival(flux, rows)``: P(background >= flux) for the rows numbered `rows`, one per row of
`flux`, which has shape (rows,) or (rows, nodes)."""

_CUT = 4.9  # standard deviations: 5e-7 of a Gaussian lies above
_SURE = 5e-7  # a bound that is met with all but this probability is dropped
_CHUNK = 4096  # rows of a quadrature at a time: its arrays, 20 numbers a row, stay in the cache
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(20)
_NORMAL = 1.0 / np.sqrt(2.0 * np.pi)


@dataclass(frozen=True)
class Scatter:
    """Standard deviations [dex] of the three independent scatters; 0 switches one off.

    Raises
    ------
    RecipeError
        One is negative or not a finite number.
    """

    agn: float = 0.0
    background: float = 0.0
    variability: float = 0.0

    def __post_init__(self) -> None:
        for name in ("agn", "background", "variability"):
            value = getattr(self, name)
            if not (np.isfinite(value) and value >= 0.0):
                raise RecipeError(
                    f"The scatter of {name} is {value}; a finite number of dex, 0 or more, is "
                    "expected (0 switches it off)."
                )


# --- normal probabilities ---------------------------------------------------------------------


def _both(h: Array, k: Array, rho: float) -> Array:
    """P(U >= h, V >= k) of two standard normals with correlation `rho` (-1 < rho < 1)."""
    from scipy.special import ndtr, owens_t

    # Owen's formula is in -h, -k; its limits at 0 come out right for any tiny number
    h, k = -np.clip(h, -40.0, 40.0), -np.clip(k, -40.0, 40.0)
    h = np.where(np.abs(h) < 1e-200, 1e-200, h)
    k = np.where(np.abs(k) < 1e-200, 1e-200, k)
    across = 1.0 / np.sqrt((1.0 - rho) * (1.0 + rho))
    with np.errstate(over="ignore"):
        result = ndtr(h) + ndtr(k)
        result *= 0.5
        result -= owens_t(h, (k / h - rho) * across)
        result -= owens_t(k, (h / k - rho) * across)
    result -= 0.5 * ((h < 0.0) != (k < 0.0))
    clipped: Array = np.clip(result, 0.0, 1.0)
    return clipped


def _over_segment(low: Array, high: Array, integrand: Callable[[Array, Array], Array]) -> Array:
    """Gauss-Legendre integral of ``integrand(points, rows)`` from `low` to `high`, row by row."""
    result = np.zeros(low.shape)
    rows = np.flatnonzero(high > low)
    for start in range(0, rows.size, _CHUNK):
        some = rows[start : start + _CHUNK]
        half = 0.5 * (high[some] - low[some])
        points = half[:, None] * _NODES
        points += (low[some] + half)[:, None]
        result[some] = (integrand(points, some) @ _WEIGHTS) * half
    return result


@dataclass(frozen=True)
class _Scales:
    """The standard deviations, and what follows from them for t = k + v in units of its own."""

    k: float
    v: float
    b: float

    @property
    def t(self) -> float:
        return float(np.hypot(self.k, self.v))

    @property
    def s(self) -> float:
        return float(np.hypot(self.t, self.b))

    @property
    def floor_slope(self) -> float:
        """P(k >= F | t) = cdf(slope (t/sigma_t - centre)) with centre = F sigma_t / sigma_k^2."""
        return self.k / self.v

    @property
    def to_centre(self) -> float:
        return self.t / self.k**2


def _log_ratio(upper: Array, lower: Array) -> Array:
    """log10(upper / lower) for lower > 0; -inf where `upper` is 0 or below."""
    with np.errstate(divide="ignore"):
        result: Array = np.log10(np.maximum(upper, 0.0)) - np.log10(lower)
    return result


def _floor_given(points: Array, centre: Array, slope: float) -> Array:
    from scipy.special import ndtr

    result: Array = ndtr((points - centre[:, None]) * slope)
    return result


def _density(points: Array) -> Array:
    result = points * points
    result *= -0.5
    np.exp(result, out=result)
    result *= _NORMAL
    return result


def _three(scales: _Scales, k_least: Array, t_least: Array, s_least: Array) -> Array:
    """P(k >= k_least, t >= t_least, s >= s_least), all in doubt; every scatter above 0."""
    from scipy.special import ndtr

    slope_k, slope_s = scales.floor_slope, scales.t / scales.b
    centre_k, centre_s = k_least * scales.to_centre, s_least / scales.t
    wide_k, wide_s = _CUT / slope_k, _CUT / slope_s
    # below `low` one factor vanishes, above `high` both steps are climbed; the step that ends
    # first ends at `middle`, so that nothing is narrow against its segment
    low = np.maximum(np.maximum(centre_k - wide_k, centre_s - wide_s), t_least / scales.t)
    low = np.clip(low, -_CUT, _CUT)
    high = np.clip(np.maximum(centre_k + wide_k, centre_s + wide_s), low, _CUT)
    middle = np.clip(np.minimum(centre_k + wide_k, centre_s + wide_s), low, high)

    def integrand(points: Array, rows: NDArray[np.intp]) -> Array:
        value = _floor_given(points, centre_k[rows], slope_k)
        value *= ndtr((points - centre_s[rows, None]) * slope_s)
        value *= _density(points)
        return value

    result: Array = ndtr(-high)
    result += _over_segment(low, middle, integrand)
    result += _over_segment(middle, high, integrand)
    return result


def _bounds(scales: _Scales, k_least: Array, t_least: Array, s_least: Array) -> Array:
    """P(k >= k_least, t >= t_least, s >= s_least) for log-normal scatters, sigma_t above 0.

    A bound on a deviate without scatter is left to the caller (-inf here, or folded into t).
    """
    from scipy.special import ndtr

    k_out = np.full(k_least.shape, -np.inf) if scales.v == 0.0 or scales.k == 0.0 else k_least
    if scales.v == 0.0:
        t_least = np.maximum(t_least, k_least)
    if scales.b == 0.0:
        t_least, s_least = np.maximum(t_least, s_least), np.full(t_least.shape, -np.inf)
    h = (k_out / scales.k if scales.k > 0.0 else k_out, t_least / scales.t, s_least / scales.s)
    met = [ndtr(-one) for one in h]
    doubt = [one < 1.0 - _SURE for one in met]
    result: Array = np.minimum(np.minimum(met[0], met[1]), met[2])
    kind = doubt[0] * 1 + doubt[1] * 2 + doubt[2] * 4
    kind[result < _SURE] = 0
    rho = {
        3: (0, 1, scales.k / scales.t),
        5: (0, 2, scales.k / scales.s),
        6: (1, 2, scales.t / scales.s),
    }
    for code, (one, other, correlation) in rho.items():
        rows = np.flatnonzero(kind == code)
        if rows.size:
            if correlation < 1.0:
                result[rows] = _both(h[one][rows], h[other][rows], correlation)
            # a correlation that rounds to 1 leaves the stricter bound, which is there already
    rows = np.flatnonzero(kind == 7)
    if rows.size:
        result[rows] = _three(scales, k_out[rows], t_least[rows], s_least[rows])
    return result


# --- other backgrounds ------------------------------------------------------------------------


def _crossings(
    share: Callable[[Array], Array], low: Array, high: Array, levels: tuple[float, ...]
) -> list[Array]:
    """Where a rising function of the row passes each level, from below, to 1/128 of the range."""
    found = []
    start = low
    for level in levels:
        below, above = start.copy(), high.copy()
        for _ in range(7):
            middle = 0.5 * (below + above)
            under = share(middle) < level
            below = np.where(under, middle, below)
            above = np.where(under, above, middle)
        found.append(below if level < 0.5 else above)
        start = below
    return found


# --- the odds ---------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Rows:
    """The rows in which something is to be worked out; flux_agn above 0."""

    agn: Array
    background: Array
    floor_dex: Array  # least k
    limit: float
    factor: float  # least flux_agn / flux_background; 0 or below asks nothing
    scales: _Scales
    survival: Callable[[Array, NDArray[np.intp]], Array] | None
    least: Array
    total: bool

    @property
    def floor_slope(self) -> float | None:
        return self.scales.floor_slope if self.scales.k > 0.0 and self.scales.v > 0.0 else None

    def floor_share(self, points: Array, rows: NDArray[np.intp]) -> Array | float:
        slope = self.floor_slope
        if slope is None:
            return 1.0
        return _floor_given(points, self.floor_dex[rows] * self.scales.to_centre, slope)

    def floor_range(self) -> tuple[Array, Array]:
        """Where in t / sigma_t the floor begins to let pass, and where it has ceased to matter."""
        slope = self.floor_slope
        if slope is None:
            low = self.floor_dex / self.scales.t if self.scales.v == 0.0 else np.full(
                self.agn.shape, -np.inf
            )
            return low, low
        centre = self.floor_dex * self.scales.to_centre
        return centre - _CUT / slope, centre + _CUT / slope

    def below(self, flux: Array, rows: NDArray[np.intp]) -> Array:
        """P(background <= flux)."""
        from scipy.special import ndtr

        if self.survival is not None:
            # "at least the next number" is "more than this one"
            return 1.0 - self.survival(np.nextafter(np.maximum(flux, 0.0), np.inf), rows)
        centre = self.background[rows]
        centre = centre[:, None] if flux.ndim == 2 else centre
        with np.errstate(divide="ignore", invalid="ignore"):
            dex = np.log10(np.maximum(flux, 0.0) / centre)
            if self.scales.b == 0.0:
                return (flux >= centre).astype(float)
            value: Array = ndtr(dex / self.scales.b)
        return np.where(centre == 0.0, (flux >= 0.0) * 1.0, value)
