"""How far a fraction of a small sample may be off: binomial intervals, and weighted samples.

Numbers may be real: a weighted sample enters through its effective number (Kish).
"""

from __future__ import annotations

from statistics import NormalDist

import numpy as np
from numpy.typing import ArrayLike

from embersift.arrays import Array
from embersift.errors import RecipeError, did_you_mean

__all__ = ["ONE_SIGMA_INSIDE", "binomial_interval", "effective_number"]

ONE_SIGMA_INSIDE = 0.6826894921370859
"""Probability within one Gaussian sigma on either side: erf(1/sqrt(2))."""

_METHODS = ("wilson", "jeffreys")


def binomial_interval(
    k: ArrayLike, n: ArrayLike, *, level: float = ONE_SIGMA_INSIDE, method: str = "wilson"
) -> tuple[Array, Array]:
    """Interval of the fraction behind `k` of `n`.

    Parameters
    ----------
    k, n : arrays
        Successes and trials; they broadcast. Real numbers are allowed.
    level : float
        Probability inside the interval, between 0 and 1; one sigma by default.
    method : {"wilson", "jeffreys"}
        Score interval, or equal-tailed quantiles of the beta distribution with Jeffreys' prior.

    Returns
    -------
    low, high : arrays
        `low` is exactly 0 at k = 0 and `high` exactly 1 at k = n. NaN where there is nothing to
        tell (n = 0), and for impossible numbers (k < 0, k > n, NaN).

    Raises
    ------
    RecipeError
        The level is not between 0 and 1, or the method is unknown.

    Notes
    -----
    Wilson 1927, J. Am. Stat. Assoc., 22, 209. Jeffreys: beta(k + 1/2, n - k + 1/2) as in Brown,
    Cai & DasGupta 2001, Stat. Sci., 16, 101, who set the outer limit to 0 at k = 0 and to 1 at
    k = n and leave the other one where it is; beta quantiles for astronomers: Cameron 2011, PASA,
    28, 128.

    Examples
    --------
    >>> low, high = binomial_interval([0, 3, 10], 10)
    >>> low.round(5).tolist(), high.round(5).tolist()
    ([0.0, 0.17882, 0.90909], [0.09091, 0.45754, 1.0])
    """
    if not 0.0 < level < 1.0:
        raise RecipeError(
            f"The level of an interval is {level:g}; give a probability between 0 and 1, such as "
            "0.6827 for one sigma."
        )
    if method not in _METHODS:
        raise RecipeError(
            f"There is no binomial interval named {method!r}. {did_you_mean(method, _METHODS)}"
        )
    some, all_ = np.broadcast_arrays(np.asarray(k, dtype=float), np.asarray(n, dtype=float))
    possible = (some >= 0.0) & (some <= all_) & (all_ > 0.0) & np.isfinite(all_)
    some, all_ = np.where(possible, some, 0.0), np.where(possible, all_, 1.0)
    low, high = (_wilson if method == "wilson" else _jeffreys)(some, all_, level)
    low = np.where(some == 0.0, 0.0, low)
    high = np.where(some == all_, 1.0, high)
    return np.where(possible, low, np.nan), np.where(possible, high, np.nan)


def _wilson(k: Array, n: Array, level: float) -> tuple[Array, Array]:
    z = NormalDist().inv_cdf(0.5 + 0.5 * level)
    centre = k + 0.5 * z * z
    half = z * np.sqrt(k * ((n - k) / n) + 0.25 * z * z)
    # centre - half loses every digit for few of many; the product of both limits is k^2/n / (n+z^2)
    return k * (k / n) / (centre + half), (centre + half) / (n + z * z)


def _jeffreys(k: Array, n: Array, level: float) -> tuple[Array, Array]:
    from scipy import special

    tail = 0.5 - 0.5 * level
    a, b = k + 0.5, n - k + 0.5
    low, high = special.betaincinv(a, b, tail), special.betaincinv(a, b, 1.0 - tail)
    return np.asarray(low, dtype=float), np.asarray(high, dtype=float)


def effective_number(sum_w: ArrayLike, sum_w2: ArrayLike) -> Array:
    """Size of the unweighted sample that would scatter as much as a weighted one.

    Parameters
    ----------
    sum_w, sum_w2 : arrays
        Sum of the weights, and of their squares.

    Returns
    -------
    array
        (sum w)^2 / sum w^2; 0 where there is no weight at all.

    Notes
    -----
    Kish 1965, Survey Sampling. Equal weights give back the number of rows.

    Examples
    --------
    >>> float(effective_number(1.0 + 1.0 + 0.5, 1.0 + 1.0 + 0.25)).__round__(4)
    2.7778
    """
    w, w2 = np.broadcast_arrays(np.asarray(sum_w, dtype=float), np.asarray(sum_w2, dtype=float))
    result: Array = np.divide(w * w, w2, out=np.zeros(w.shape), where=w2 > 0.0)
    return result
