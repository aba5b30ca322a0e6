"""The odds of a row: the probability that it is visible, when scatter is admitted.

Three independent log-normal scatters [dex] move a row about its central values, which are taken
as medians:

=========== =================================== ======================================
agn         the black hole's X-rays for its     k: its flux, and the L(2-10 keV) that is
            bolometric light                    compared with the floor
variability its flux on the day                 v: its flux alone
background  the host's own X-rays               b: the background flux
=========== =================================== ======================================

With t = k + v and s = t - b the criteria of a fate are bounds: ``underfloor`` on k, ``faint`` on
t, ``outshone`` on s. Given t, k and s are independent, so the probability of all three is one
integral over t; with only two bounds in doubt it is a bivariate normal probability, closed with
Owen's T function (Owen 1956, Ann. Math. Stat. 27, 1075). When the flux that counts is the total,
``faint`` couples t and b, and a second integral takes off what is too faint. Instead of a
log-normal any background distribution can be given. Nothing is drawn at random.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array, Mask
from embersift.errors import RecipeError

__all__ = [
    "ACCURACY",
    "Scatter",
    "Survival",
    "odds",
]

ACCURACY = 1e-5
"""Largest absolute error of `odds` with a log-normal background."""

Rows: TypeAlias = NDArray[np.intp]
Survival: TypeAlias = Callable[[Array, Rows], Array]
"""``survival(flux, rows)``: P(background >= flux), for the rows of the catalogue numbered `rows`;
`flux` has shape (rows,) or (rows, nodes). It must not rise with flux, and be 1 at flux 0."""

_CUT = 4.7  # standard deviations: 1.3e-6 of a Gaussian lies above
_SURE = 1.3e-6  # a bound that is met with all but this probability is dropped
_BLOCK = 16384  # rows at a time
_CHUNK = 1024  # rows of a quadrature at a time: times nodes, they stay in the cache
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(24)
_SMOOTH = 3.2  # segments no longer than this many half-widths of the narrowest step stay whole
_LN10 = float(np.log(10.0))


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

    @property
    def flux(self) -> float:
        """Of t: the black hole's flux."""
        return float(np.hypot(self.agn, self.variability))

    @property
    def excess(self) -> float:
        """Of s: the excess."""
        return float(np.hypot(self.flux, self.background))


# --- normal probabilities ---------------------------------------------------------------------


def _both(h: Array, k: Array, rho: float) -> Array:
    """P(U >= h, V >= k) of two standard normals with correlation 0 < `rho` < 1."""
    from scipy.special import ndtr, owens_t

    # Owen's formula is in -h and -k; its limit at 0 comes out right for any tiny number
    h, k = -np.clip(h, -40.0, 40.0), -np.clip(k, -40.0, 40.0)
    h = np.where(np.abs(h) < 1e-200, 1e-200, h)
    k = np.where(np.abs(k) < 1e-200, 1e-200, k)
    across = 1.0 / np.sqrt((1.0 - rho) * (1.0 + rho))
    with np.errstate(over="ignore"):
        result = 0.5 * (ndtr(h) + ndtr(k))
        result -= owens_t(h, (k / h - rho) * across)
        result -= owens_t(k, (h / k - rho) * across)
    result -= 0.5 * ((h < 0.0) != (k < 0.0))
    clipped: Array = np.clip(result, 0.0, 1.0)
    return clipped


def _integrals(
    low: Array, high: Array, breaks: Sequence[Array], integrand: Callable[[Array, Rows], Array]
) -> Array:
    """Integral of ``integrand(points, rows)`` from `low` to `high`, row by row, in segments."""
    result = np.zeros(low.shape)
    edges = [low, *np.sort(np.clip(np.array(breaks), low, high), axis=0), high]
    for start, end in pairwise(edges):
        wide = np.flatnonzero(end > start)
        for at in range(0, wide.size, _CHUNK):
            rows = wide[at : at + _CHUNK]
            half = 0.5 * (end[rows] - start[rows])
            points = half[:, None] * _NODES
            points += (start[rows] + half)[:, None]
            result[rows] += (integrand(points, rows) @ _WEIGHTS) * half
    return result


def _density(points: Array) -> Array:
    result = points * points
    result *= -0.5
    np.exp(result, out=result)
    result *= 1.0 / np.sqrt(2.0 * np.pi)
    return result


def _step(value: Array, points: Array, centre: Array, slope: float) -> Array:
    """`value` times cdf(slope (points - centre)), in place; points rise along a row."""
    from scipy.special import ndtr

    climbed = points[:, 0] >= centre + _CUT / slope
    if not climbed.any():
        value *= ndtr((points - centre[:, None]) * slope)
    elif not climbed.all():
        rows = np.flatnonzero(~climbed)
        value[rows] *= ndtr((points[rows] - centre[rows, None]) * slope)
    return value


class _Floor:
    """P(k >= least | t), a step in t / sigma_t that is climbed between `low` and `high`."""

    def __init__(self, scatter: Scatter, least: Array) -> None:
        self.hard = scatter.agn == 0.0 or scatter.variability == 0.0
        self.slope = 0.0
        if self.hard:
            # k is t, and the floor one more bound on it; or k is 0 and the caller's affair
            none = np.full(least.shape, -np.inf)
            self.low = none if scatter.agn == 0.0 else least / scatter.flux
            self.high = none
        else:
            self.slope = scatter.agn / scatter.variability
            self.centre = least * (scatter.flux / scatter.agn**2)
            self.low = self.centre - _CUT / self.slope
            self.high = self.centre + _CUT / self.slope

    def times(self, value: Array, points: Array, rows: Rows) -> Array:
        return value if self.hard else _step(value, points, self.centre[rows], self.slope)


def _three(scatter: Scatter, k_least: Array, t_least: Array, s_least: Array) -> Array:
    """P(k >= k_least, t >= t_least, s >= s_least); every scatter above 0."""
    from scipy.special import ndtr

    floor = _Floor(scatter, k_least)
    slope = scatter.flux / scatter.background
    centre, wide = s_least / scatter.flux, _CUT / slope
    # below `low` one factor vanishes, above `high` both steps are climbed. The step that ends
    # first ends at the break, so that none is narrow against its segment
    low = np.maximum(np.maximum(floor.low, centre - wide), t_least / scatter.flux)
    low = np.clip(low, -_CUT, _CUT)
    high = np.clip(np.maximum(floor.high, centre + wide), low, _CUT)

    def integrand(points: Array, rows: Rows) -> Array:
        return floor.times(_step(_density(points), points, centre[rows], slope), points, rows)

    first_end = np.minimum(floor.high, centre + wide)
    smooth = high <= low + _SMOOTH * _CUT / max(slope, floor.slope, 1.0)
    breaks = [np.where(smooth, high, first_end)]
    result: Array = ndtr(-high) + _integrals(low, high, breaks, integrand)
    return result


def _bounded(scatter: Scatter, k_least: Array, t_least: Array, s_least: Array | None) -> Array:
    """P(k >= k_least, t >= t_least, s >= s_least), sigma_t above 0; no scatter, no bound on k."""
    from scipy.special import ndtr

    none = np.full(t_least.shape, -np.inf)
    if scatter.variability == 0.0:
        t_least = np.maximum(t_least, k_least)
    if scatter.agn == 0.0 or scatter.variability == 0.0:
        k_least = none
    if s_least is None:
        s_least = none
    elif scatter.background == 0.0:
        t_least, s_least = np.maximum(t_least, s_least), none
    sigmas = (scatter.agn or 1.0, scatter.flux, scatter.excess)
    h = [one / sigma for one, sigma in zip((k_least, t_least, s_least), sigmas, strict=True)]
    met = [ndtr(-one) for one in h]
    result: Array = np.minimum(np.minimum(met[0], met[1]), met[2])
    doubt = np.zeros(result.shape, dtype=np.int8)
    for i, one in enumerate(met):
        doubt += (one < 1.0 - _SURE) * np.int8(1 << i)
    doubt[result < _SURE] = 0
    for code, first, second in ((3, 0, 1), (5, 0, 2), (6, 1, 2)):
        rho = sigmas[first] / sigmas[second]
        rows = np.flatnonzero(doubt == code)
        if rows.size and rho < 1.0:  # at 1 the stricter bound is all there is
            result[rows] = _both(h[first][rows], h[second][rows], rho)
    rows = np.flatnonzero(doubt == 7)
    if rows.size:
        result[rows] = _three(scatter, k_least[rows], t_least[rows], s_least[rows])
    return result


# --- the background's distribution ------------------------------------------------------------


@dataclass(frozen=True)
class _Dark:
    """How the background flux is distributed, for a block of rows."""

    median: Array
    sigma: float
    survival: Survival | None
    least: Array  # no background is fainter
    rows: Rows  # numbers in the catalogue

    def take(self, some: Rows) -> _Dark:
        return _Dark(
            self.median[some], self.sigma, self.survival, self.least[some], self.rows[some]
        )

    def upto(self, flux: Array, rows: Rows | slice = slice(None)) -> Array:
        """P(background <= flux)."""
        if self.survival is not None:
            # "at least the next number" is "more than this one"
            next_one = np.nextafter(np.maximum(flux, 0.0), np.inf)
            return 1.0 - self.survival(next_one, self.rows[rows])
        from scipy.special import ndtr

        median = self.median[rows]
        median = median[:, None] if flux.ndim == 2 else median
        if self.sigma == 0.0:
            return np.where(median <= flux, 1.0, 0.0)
        with np.errstate(divide="ignore", invalid="ignore"):
            value = np.log10(np.maximum(flux, 0.0))
            value -= np.log10(median)
            value /= self.sigma
        return np.where(median == 0.0, 1.0, ndtr(value))

    def under(self, flux: Array, rows: Rows | slice = slice(None)) -> Array:
        """P(background < flux)."""
        positive = flux > 0.0
        if self.survival is not None:
            faint = 1.0 - self.survival(np.maximum(flux, 0.0), self.rows[rows])
            return np.where(positive, faint, 0.0)
        if self.sigma == 0.0:
            return np.where(self.median[rows] < flux, 1.0, 0.0)
        return np.where(positive, self.upto(np.where(positive, flux, 1.0), rows), 0.0)


def _crossings(share: Callable[[Array], Array], low: Array, high: Array) -> list[Array]:
    """Where a share that rises in each row leaves 0, passes 1/2 and comes to 1, to 1/128."""
    found: list[Array] = []
    for level in (_SURE, 0.5, 1.0 - _SURE):
        below, above = (found[-1] if found else low).copy(), high.copy()
        for _ in range(7):
            middle = 0.5 * (below + above)
            under = share(middle) < level
            below, above = np.where(under, middle, below), np.where(under, above, middle)
        found.append(below if level == _SURE else above)
    return found


def _log(upper: Array, lower: Array) -> Array:
    """log10 of a ratio that may overflow, for lower > 0; -inf where `upper` is not positive."""
    with np.errstate(divide="ignore"):
        result: Array = np.log10(np.maximum(upper, 0.0)) - np.log10(lower)
    return result


def _power(dex: Array) -> Array:
    with np.errstate(over="ignore"):
        result: Array = np.exp(dex * _LN10)
    return result


def _logit(dex: Array) -> Array:
    """log10 p - log10(1 - p) for p = 10^dex; inf for p of 1 or more."""
    with np.errstate(divide="ignore"):
        result: Array = dex - np.log10(-np.expm1(np.minimum(dex, 0.0) * _LN10))
    return result


def _outshining(
    scatter: Scatter, dark: _Dark, agn: Array, k_least: Array, t_least: Array, factor: float
) -> Array:
    """P(k >= k_least, t >= t_least, agn 10^t >= factor background)."""
    if factor <= 0.0:
        return _bounded(scatter, k_least, t_least, None)
    if dark.survival is None:
        return _bounded(scatter, k_least, t_least, _log(factor * dark.median, agn))
    floor, sigma = _Floor(scatter, k_least), scatter.flux

    def share(z: Array, rows: Rows | slice = slice(None)) -> Array:
        flux = agn[rows] / factor
        return dark.upto((flux[:, None] if z.ndim == 2 else flux) * _power(z * sigma), rows)

    low = np.maximum(floor.low, np.maximum(t_least, _log(factor * dark.least, agn)) / sigma)
    low = np.clip(low, -_CUT, _CUT)
    begin, half, end = _crossings(share, low, np.full(low.shape, _CUT))

    def integrand(z: Array, rows: Rows) -> Array:
        return floor.times(share(z, rows) * _density(z), z, rows)

    result = _bounded(scatter, k_least, end * sigma, None)
    result += _integrals(begin, end, [half, floor.high], integrand)
    return result


def _too_faint(
    scatter: Scatter, dark: _Dark, agn: Array, k_least: Array, share_least: float, limit: float
) -> Array:
    """P(k >= k_least, agn 10^t >= share_least limit, agn 10^t + background < limit).

    Integrated over w = log10(p / (1 - p)) with p the black hole's share of the limit: where p is
    small w moves with t, where it is near 1 with the log of the background that is missing.
    """
    from scipy.special import ndtr

    sigma = scatter.flux
    floor = _Floor(scatter, k_least)
    at_limit = _log(np.full(agn.shape, limit), agn)  # t at which the black hole alone suffices
    with np.errstate(divide="ignore"):
        t_least = at_limit + np.log10(share_least)
    low = _logit(np.maximum(np.clip(floor.low, -_CUT, None) * sigma, t_least) - at_limit)
    high = _logit(_CUT * sigma - at_limit)
    # closer to the limit than this, too little t is left to matter
    high = np.minimum(high, np.log10(0.2 / _SURE / sigma))
    limits = np.full(agn.shape, limit)
    missing = _log(dark.median, limits)
    if dark.survival is None:
        spread = _CUT * dark.sigma
        begin = -_logit(missing + spread)
        # up to here the missing background hardly moves, measured by its scatter
        breaks = [np.full(agn.shape, min(np.log10(0.7 * dark.sigma), 0.0))]
        high = np.minimum(high, -_logit(missing - spread))
    else:
        high = np.minimum(high, -_logit(_log(dark.least, limits)))
        low = np.minimum(low, high)

        def share(minus_w: Array) -> Array:
            return dark.under(limit / (1.0 + _power(-minus_w)))

        end, half, begin = (-one for one in _crossings(share, -high, -low))
        high, breaks = np.minimum(high, end), [half]
    begin = np.maximum(begin, low)

    def integrand(w: Array, rows: Rows) -> Array:
        parts = _power(w)  # p / (1 - p)
        parts += 1.0
        left = np.log10(parts)  # -log10(1 - p)
        z = w - left
        z += at_limit[rows, None]
        z /= sigma
        if dark.survival is None:
            left += missing[rows, None]
            left *= -1.0 / dark.sigma
            value = ndtr(left)
        else:
            value = dark.under(limit / parts, rows)
        value *= _density(z)
        value /= parts
        return floor.times(value, z, rows)

    def t_at(w: Array) -> Array:
        return at_limit - np.logaddexp(0.0, w * -_LN10) / _LN10

    floor_end = _logit(floor.high * sigma - at_limit)
    # from here on t hardly moves any more, and the integrand falls as 10^-w
    narrow = np.where(np.isinf(floor_end), sigma / max(floor.slope, 1.0), sigma)
    settled = np.maximum(-np.log10(narrow), 0.0)
    high = np.maximum(high, begin)
    breaks = [*breaks, floor_end, settled]
    if dark.survival is None:
        scale = min(sigma / max(floor.slope, 1.0), dark.sigma, 0.3)
        smooth = high <= begin + _SMOOTH * _CUT * scale
        breaks = [np.where(smooth, high, one) for one in breaks]
    result = _integrals(begin, high, breaks, integrand) / sigma
    # up to `begin` every background is too faint
    certain = np.flatnonzero(begin > low)
    if certain.size:
        least = k_least[certain]
        result[certain] += _bounded(scatter, least, t_at(low)[certain], None)
        result[certain] -= _bounded(scatter, least, t_at(begin)[certain], None)
    return result


# --- the odds ---------------------------------------------------------------------------------


def _steady(
    dark: _Dark, agn: Array, factor: float, limit: float, *, total: bool, criterion: str
) -> Array:
    """P(visible) of a black hole whose flux does not scatter, its floor apart."""
    if dark.survival is None and dark.sigma == 0.0:
        # the arithmetic of the chain, so that equality passes here as it does there
        with np.errstate(divide="ignore", invalid="ignore"):
            excess = agn / dark.median
        excess[(agn == 0.0) & (dark.median == 0.0)] = 0.0
        excess += criterion == "total"
        threshold = factor + (criterion == "total")
        counted = agn + dark.median if total else agn
        return np.where((excess >= threshold) & (counted >= limit), 1.0, 0.0)
    result = np.ones(agn.shape)
    if factor > 0.0:
        result = np.where(agn > 0.0, dark.upto(agn / factor), 0.0)
    if total:
        return np.maximum(result - dark.under(limit - agn), 0.0)
    return result * (agn >= limit)


def _block(
    dark: _Dark,
    agn: Array,
    lx: Array,
    scatter: Scatter,
    *,
    limit: float,
    floor: float,
    factor: float,
    criterion: str,
    total: bool,
) -> Array:
    from scipy.special import ndtr

    with np.errstate(divide="ignore"):
        k_least = np.full(agn.shape, -np.inf) if floor <= 0.0 else np.log10(floor) - np.log10(lx)
    hard_floor = (lx >= floor) * 1.0 if scatter.agn == 0.0 else 1.0
    result = np.empty(agn.shape)
    still = np.flatnonzero(agn == 0.0) if scatter.flux > 0.0 else np.arange(agn.size)
    if still.size:
        steady = _steady(
            dark.take(still), agn[still], factor, limit, total=total, criterion=criterion
        )
        if scatter.agn > 0.0:
            steady *= ndtr(-k_least[still] / scatter.agn)
        result[still] = steady
    if still.size < agn.size:
        moving = np.flatnonzero(agn > 0.0)
        result[moving] = _moving(
            dark.take(moving), agn[moving], k_least[moving], scatter, limit, factor, total=total
        )
    checked: Array = np.clip(result, 0.0, 1.0) * hard_floor
    return checked


def _moving(
    dark: _Dark,
    agn: Array,
    k_least: Array,
    scatter: Scatter,
    limit: float,
    factor: float,
    *,
    total: bool,
) -> Array:
    """P(visible) of black holes whose flux scatters."""
    limits = np.full(agn.shape, limit)
    if not total or limit <= 0.0:
        return _outshining(scatter, dark, agn, k_least, _log(limits, agn), factor)
    if dark.survival is None and scatter.background == 0.0:
        t_least = _log(limit - dark.median, agn)
        return _outshining(scatter, dark, agn, k_least, t_least, factor)
    # a smaller share of the limit cannot be made up by a background that does not outshine
    share = factor / (1.0 + factor) if factor > 0.0 else 0.0
    result = _outshining(scatter, dark, agn, k_least, _log(share * limits, agn), factor)
    doubt = np.flatnonzero(result > _SURE)
    result[doubt] -= _too_faint(scatter, dark.take(doubt), agn[doubt], k_least[doubt], share, limit)
    return result


def odds(
    *,
    flux_agn: Array,
    flux_background: Array,
    lx_agn: Array,
    flux_limit: float,
    floor: float,
    threshold: float,
    scatter: Scatter,
    criterion: Literal["agn", "total"] = "agn",
    flux_of: Literal["agn", "total"] = "agn",
    usable: Mask | None = None,
    active: Mask | None = None,
    blended: Mask | None = None,
    background_survival: Survival | None = None,
    background_least: Array | None = None,
) -> Array:
    """Probability that each row is visible, for one observation and threshold.

    Parameters
    ----------
    flux_agn, flux_background : array, shape (rows,)
        Median fluxes [erg/s/cm2].
    lx_agn : array
        Median intrinsic L(2-10 keV) of the black hole [erg/s].
    flux_limit : float
        Faintest flux that is detected [erg/s/cm2].
    floor : float
        Least L(2-10 keV) [erg/s]; 0 is no floor.
    threshold : float
        Least excess.
    scatter : Scatter
        Scatters about the medians [dex].
    criterion, flux_of : {"agn", "total"}
        As in the recipe: what is compared with the background, and with the limit.
    usable, active, blended : bool arrays, optional
        Rows that can be judged (default all), that have an accreting black hole (default all), and
        that lie in the circle of a brighter hole (default none; a criterion without scatter).
    background_survival : callable, optional
        The background's own distribution in place of a log-normal: ``survival(flux, rows)`` is
        P(background >= flux). It holds all scatter of the background.
    background_least : array, optional
        With `background_survival`: flux below which no background lies (its hot gas), where the
        distribution may jump. Jumps elsewhere cost accuracy.

    Returns
    -------
    array
        NaN where the row is unusable; 0 without an accreting black hole. Absolute error below
        `ACCURACY` with a log-normal background; without scatter exactly the verdict, 0 or 1.

    Raises
    ------
    RecipeError
        A background distribution together with a scatter of the background.

    Examples
    --------
    A median right at the flux limit, far above the background:

    >>> one = np.array([1e-16])
    >>> odds(
    ...     flux_agn=one, flux_background=one * 1e-3, lx_agn=one * 1e56, flux_limit=1e-16,
    ...     floor=0.0, threshold=2.0, scatter=Scatter(agn=0.3),
    ... ).tolist()
    [0.5]
    """
    if background_survival is not None and scatter.background > 0.0:
        raise RecipeError(
            "The background's distribution and a scatter of the background were both given; its "
            "scatter would count twice. Fold it into the distribution and set the scatter to 0."
        )
    if np.isnan(threshold) or np.isnan(flux_limit) or np.isnan(floor):
        raise RecipeError("flux limit, floor and threshold must be numbers; one is NaN.")
    counted = flux_agn + flux_background if flux_of == "total" else flux_agn
    known = np.isfinite(counted) & np.isfinite(lx_agn) & ~np.isnan(flux_background)
    result = np.where(known, 0.0, np.nan)
    if active is not None:
        result[~active] = 0.0
        known &= active
    if usable is not None:
        result[~usable] = np.nan
        known &= usable
    if blended is not None:
        known &= ~blended
    # no flux reaches an infinite limit, and it would only upset the arithmetic below
    rows = np.flatnonzero(known & (flux_limit < np.inf))
    factor = threshold - 1.0 if criterion == "total" else threshold
    for at in range(0, rows.size, _BLOCK):
        some = rows[at : at + _BLOCK]
        least = np.zeros(some.size) if background_least is None else background_least[some]
        dark = _Dark(flux_background[some], scatter.background, background_survival, least, some)
        result[some] = _block(
            dark,
            flux_agn[some],
            lx_agn[some],
            scatter,
            limit=flux_limit,
            floor=floor,
            factor=factor,
            criterion=criterion,
            total=flux_of == "total",
        )
    return result
