"""Counting photons: how many to expect, whether they make a source, how far they may be off.

| quantity | unit |
|---|---|
| flux | erg/s/cm2 in the observed band, as it arrives: after all absorption |
| exposure | s |
| factor | counts per erg/cm2 received: mean area times photons per erg |
| rates | counts/s; of the background, inside the extraction circle |
| area ratio | background region over circle, exposures included (the ratio of BACKSCAL) |

All functions broadcast. Missing or impossible counts (NaN, negative) give NaN.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy import special

from embersift.arrays import Array, Mask
from embersift.errors import RecipeError

__all__ = [
    "ONE_SIGMA",
    "expected_counts",
    "exposure_for_probability",
    "li_ma_significance",
    "no_source_probability",
    "poisson_interval",
    "poisson_interval_with_background",
]

ONE_SIGMA = 0.8413447460685429
"""One-sided level of one Gaussian sigma (0.84134 in the tables of Gehrels 1986)."""

_MOST_COUNTS = 1e12  # an exposure that needs more background counts than this is out of reach
_HALVINGS = 60


def _arrays(*values: ArrayLike) -> tuple[Array, ...]:
    return tuple(np.broadcast_arrays(*(np.asarray(value, dtype=float) for value in values)))


def _fraction(value: float, what: str) -> None:
    if not 0.0 < value < 1.0:
        raise RecipeError(f"The {what} is {value:g}; give a number between 0 and 1.")


def no_source_probability(
    source_counts: ArrayLike, background_counts: ArrayLike, area_ratio: ArrayLike
) -> Array:
    """Binomial probability that background alone gives so many counts in the circle, or more.

    Parameters
    ----------
    source_counts : array
        Counts S in the extraction circle (source and background). Real numbers are allowed, so
        that expected counts can be put in.
    background_counts : array
        Counts B where only background is expected.
    area_ratio : array
        How many times larger that region is than the circle (BACKSCAL ratio, exposures
        included).

    Returns
    -------
    array
        P_B = sum over x >= S of C(N, x) p^x (1-p)^(N-x), N = S + B, p = 1 / (1 + area_ratio);
        1 for S = 0; NaN for a ratio that is not positive.

    Notes
    -----
    Weisskopf et al. 2007, ApJ, 657, 1026. The sum is the regularised incomplete beta function
    I_p(S, B + 1).

    Examples
    --------
    >>> f"{no_source_probability(3, 1, 20):.4e}"
    '4.1649e-04'
    """
    s, b, ratio = _arrays(source_counts, background_counts, area_ratio)
    good = (s >= 0.0) & (b >= 0.0) & (ratio > 0.0)
    p = 1.0 / (1.0 + np.where(good, ratio, 1.0))
    # betainc is not defined at S = 0, where the sum is over everything
    counted = good & (s > 0.0)
    chance = special.betainc(np.where(counted, s, 1.0), np.where(good, b, 0.0) + 1.0, p)
    result: Array = np.where(good, np.where(counted, chance, 1.0), np.nan)
    return result


def li_ma_significance(on: ArrayLike, off: ArrayLike, alpha: ArrayLike) -> Array:
    """Significance of an excess, in sigma: positive above the background, negative below.

    Parameters
    ----------
    on, off : arrays
        Counts on the source and off it; either may be 0.
    alpha : array
        Exposure (area times time) on the source over that off it: 1 / area ratio.

    Returns
    -------
    array
        0 where nothing was counted at all; NaN for an alpha that is not positive.

    Notes
    -----
    Li & Ma 1983, ApJ, 272, 317, eq. 17, with the sign of on - alpha off.

    Examples
    --------
    >>> round(float(li_ma_significance(10, 5, 0.3)), 4)
    3.5854
    """
    on_, off_, a = _arrays(on, off, alpha)
    good = (on_ >= 0.0) & (off_ >= 0.0) & (a > 0.0)
    n_on, n_off = np.where(good, on_, 0.0), np.where(good, off_, 0.0)
    a = np.where(good, a, 1.0)
    total = np.where(n_on + n_off > 0.0, n_on + n_off, 1.0)
    expected_off = total / (1.0 + a)
    expected_on = a * expected_off
    likelihood = special.xlogy(n_on, n_on / expected_on) + special.xlogy(
        n_off, n_off / expected_off
    )
    # rounding can leave a hair below 0 where on equals its expectation
    size = np.sqrt(2.0 * np.maximum(likelihood, 0.0))
    result: Array = np.where(good, np.copysign(size, n_on - a * n_off), np.nan)
    return result


def poisson_interval(n: ArrayLike, level: float = ONE_SIGMA) -> tuple[Array, Array]:
    """Lower and upper limit on the mean of a Poisson count, each one-sided at `level`.

    Parameters
    ----------
    n : array
        Counts (real numbers are allowed).
    level : float
        One-sided confidence of either limit, 0 to 1.

    Raises
    ------
    RecipeError
        If the level is not between 0 and 1.

    Notes
    -----
    Gehrels 1986, ApJ, 303, 336, eqs 7 and 11, through exact chi-squared (gamma) quantiles rather
    than the paper's approximations. The lower limit of no counts is 0.

    Examples
    --------
    >>> [round(float(limit), 3) for limit in poisson_interval(5)]
    [2.84, 8.382]
    """
    _fraction(level, "confidence level")
    (counts,) = _arrays(n)
    good = counts >= 0.0
    counts = np.where(good, counts, 0.0)
    some = counts > 0.0
    lower = special.gammaincinv(np.where(some, counts, 1.0), 1.0 - level)
    upper = special.gammaincinv(counts + 1.0, level)
    return (
        np.where(good, np.where(some, lower, 0.0), np.nan),
        np.where(good, upper, np.nan),
    )


def poisson_interval_with_background(
    n: ArrayLike, background: ArrayLike, level: float
) -> tuple[Array, Array]:
    """Shortest interval that holds the source's mean counts with probability `level`.

    Parameters
    ----------
    n : array
        Counts in the circle.
    background : array
        Expected background counts in the circle, known exactly; 0 is allowed.
    level : float
        Two-sided probability, 0 to 1.

    Returns
    -------
    lower, upper : arrays
        On the source's own mean counts: never negative. NaN where the background exceeds the
        counts by so much (about 700) that the probability cannot be represented.

    Raises
    ------
    RecipeError
        If the level is not between 0 and 1.

    Notes
    -----
    Kraft, Burrows & Nousek 1991, ApJ, 374, 344: with a flat prior the total mean follows a gamma
    distribution cut below the background, and the interval has one density at both ends unless
    it begins at 0.
    """
    _fraction(level, "confidence level")
    counts, b = _arrays(n, background)
    shape = counts.shape
    counts, b = counts.ravel(), b.ravel()
    good = (counts >= 0.0) & (b >= 0.0)
    counts, b = np.where(good, counts, 0.0), np.where(good, b, 0.0)
    # without counts the source's distribution is exponential whatever the background
    b = np.where(counts > 0.0, b, 0.0)
    above = special.gammaincc(counts + 1.0, b)
    good &= above > 0.0

    def top(low: Array) -> Array:
        survival = special.gammaincc(counts + 1.0, low) - level * above
        end: Array = special.gammainccinv(counts + 1.0, np.maximum(survival, 0.0))
        return end

    def log_density(total: Array) -> Array:
        density: Array = special.xlogy(counts, total) - total
        return density

    low, high = b, np.maximum(b, counts)  # the mode is the highest place to begin
    with np.errstate(invalid="ignore"):  # no end holds enough: infinite, and of no density
        for _ in range(_HALVINGS):
            middle = 0.5 * (low + high)
            rising = log_density(middle) < log_density(top(middle))
            low, high = np.where(rising, middle, low), np.where(rising, high, middle)
        start = np.where(log_density(b) < log_density(top(b)), low, b)
    lower = np.where(good, start - b, np.nan)
    upper = np.where(good, top(start) - b, np.nan)
    return lower.reshape(shape), upper.reshape(shape)


def expected_counts(flux: ArrayLike, exposure_s: ArrayLike, factor: ArrayLike) -> Array:
    """Counts expected of a flux [erg/s/cm2] in an exposure [s], with counts per erg/cm2 `factor`.

    Raises
    ------
    RecipeError
        If an exposure or a factor is 0 or negative.
    """
    f, t, per_fluence = _arrays(flux, exposure_s, factor)
    for values, what, unit in ((t, "exposure", "s"), (per_fluence, "factor", "counts per erg/cm2")):
        if np.any(values <= 0.0):
            raise RecipeError(
                f"The {what} is {float(np.nanmin(values)):g} {unit}; it must be larger than 0."
            )
    counts: Array = f * t * per_fluence
    return counts


def exposure_for_probability(
    rate_source: ArrayLike,
    rate_background_in_circle: ArrayLike,
    area_ratio: ArrayLike,
    wanted_probability: float,
) -> Array:
    """Shortest exposure whose expected counts reach a no-source probability.

    Parameters
    ----------
    rate_source, rate_background_in_circle : arrays
        Counts/s of the source, and of everything else in the circle.
    area_ratio : array
        Region where the background is counted over the circle.
    wanted_probability : float
        The P_B to reach, 0 to 1; e.g. 0.007.

    Returns
    -------
    array
        Exposure [s]. Infinite for a source without counts, and for one so faint that it would
        take 1e12 counts; NaN for rates that are missing or negative.

    Raises
    ------
    RecipeError
        If the wanted probability is not between 0 and 1.

    Notes
    -----
    P_B is taken at the expected counts, as real numbers: S = (s + b) t in the circle and
    B = b ratio t outside. It falls with t. A real exposure of that length gives more or fewer
    counts, and reaches the wanted probability in about half of all cases. P_B at the returned
    exposure is the wanted one or just below.

    Examples
    --------
    Without background P_B = p^S, so the exposure is that of ln(0.001) / ln(1/11) = 2.88 counts:

    >>> round(float(exposure_for_probability(1e-3, 0.0, 10.0, 1e-3)), 1)
    2880.8
    """
    _fraction(wanted_probability, "wanted no-source probability")
    s, b, ratio = _arrays(rate_source, rate_background_in_circle, area_ratio)
    good = (s >= 0.0) & (b >= 0.0) & (ratio > 0.0)
    exposure = np.where(good, np.inf, np.nan)
    rows = good & (s > 0.0)
    s, b, ratio = s[rows], b[rows], ratio[rows]

    def reached(t: Array) -> Mask:
        chance = no_source_probability((s + b) * t, b * ratio * t, ratio)
        enough: Mask = chance <= wanted_probability
        return enough

    with np.errstate(over="ignore", invalid="ignore"):
        high = 1.0 / (s + b)  # one count in the circle
        last = _MOST_COUNTS * high
        low = np.zeros(s.size)
        done = reached(high)
        while True:
            grow = ~done & (high < last)
            if not grow.any():
                break
            low, high = np.where(grow, high, low), np.where(grow, 4.0 * high, high)
            done |= reached(high)
        for _ in range(_HALVINGS):
            middle = 0.5 * (low + high)
            enough = reached(middle)
            low, high = np.where(enough, low, middle), np.where(enough, middle, high)
    exposure[rows] = np.where(done, high, np.inf)
    return exposure
