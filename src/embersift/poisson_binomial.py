"""How many of many uncertain rows are visible: counts of independent trials with unequal odds.

A count of rows with odds p_i has the mean sum p and the variance sum p (1 - p); its distribution is
the Poisson-binomial one, the product of the rows' generating functions.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array
from embersift.errors import RecipeError
from embersift.exact_sums import SMALLEST, Exact, as_floats, exact_sums, no_sums

__all__ = [
    "EXACT_ROWS",
    "Expected",
    "expected_visible",
    "poisson_binomial",
    "poisson_binomial_interval",
]

EXACT_ROWS = 65536
"""Up to so many rows in doubt, the interval of a Poisson-binomial count is always exact."""

_EXACT_VARIANCE = 1e4


def poisson_binomial(p: Array) -> tuple[float, float]:
    """Mean and variance of the number of successes of independent trials; NaN is left out.

    Examples
    --------
    >>> poisson_binomial(np.array([0.5, 0.5, 1.0]))
    (2.0, 0.5)
    """
    p = p[~np.isnan(p)]
    return float(p.sum()), float((p * (1.0 - p)).sum())


def _spectrum(p: Array, size: int) -> NDArray[np.complex128]:
    """Fourier transform of the distribution of the count, modulo `size`."""
    total = np.ones(size // 2 + 1, dtype=complex)
    for at in range(0, p.size, EXACT_ROWS):
        some = p[at : at + EXACT_ROWS]
        # products of pairs, then of pairs of pairs, while they are shorter than `size`
        length = 1 << max(int(np.ceil(np.log2(some.size))), 0)
        padded = np.zeros(length)
        padded[: some.size] = some
        polynomials = np.stack([1.0 - padded, padded], axis=1)
        while len(polynomials) > 1 and 2 * polynomials.shape[1] - 1 <= size:
            degree = 2 * polynomials.shape[1] - 1
            points = 1 << int(np.ceil(np.log2(degree)))
            waves = np.fft.rfft(polynomials, points, axis=1)
            polynomials = np.fft.irfft(waves[0::2] * waves[1::2], points, axis=1)[:, :degree]
        for one in polynomials:
            folded = np.zeros(-(-one.size // size) * size)
            folded[: one.size] = one
            total *= np.fft.rfft(folded.reshape(-1, size).sum(axis=0))
    return total


def poisson_binomial_interval(p: Array, level: float) -> tuple[int, int]:
    """Central interval of the number of successes of independent trials.

    Parameters
    ----------
    p : array
        Probability of each; NaN is left out.
    level : float
        Probability inside, such as 0.68.

    Returns
    -------
    tuple of int
        The quantiles (1 - level)/2 and (1 + level)/2: the least counts whose cumulative
        probability reaches them.

    Raises
    ------
    RecipeError
        `level` is not between 0 and 1.

    Notes
    -----
    Exact, by products of the generating functions under a Fourier transform, up to `EXACT_ROWS`
    rows with 0 < p < 1, and beyond while the variance is below 1e4. Above, the normal quantile
    with its correction for skewness (Cornish & Fisher 1937), good to one count.
    """
    if not 0.0 < level < 1.0:
        raise RecipeError(f"The level of an interval is {level}; between 0 and 1 is expected.")
    certain = int(np.count_nonzero(p == 1.0))
    p = p[(p > 0.0) & (p < 1.0)]
    mean, variance = poisson_binomial(p)
    tails = np.array([0.5 * (1.0 - level), 0.5 * (1.0 + level)])
    if p.size == 0:
        return certain, certain
    spread = np.sqrt(variance)
    if p.size > EXACT_ROWS and variance > _EXACT_VARIANCE:
        from scipy.special import ndtri

        z = ndtri(tails)
        skewness = float((p * (1.0 - p) * (1.0 - 2.0 * p)).sum()) / spread**3
        counts = np.ceil(mean + spread * (z + skewness * (z * z - 1.0) / 6.0) - 0.5)
    else:
        # counts farther off than this have no weight that float64 could show
        reach = int(np.ceil(12.0 * spread)) + 48
        first = max(int(mean) - reach, 0)
        size = 1 << int(np.ceil(np.log2(min(int(mean) + reach, p.size) - first + 2)))
        chances = np.fft.irfft(_spectrum(p, size), size)
        chances = np.roll(chances, -(first % size))
        # rounding must not move a quantile that falls on a cumulative probability
        counts = first + np.searchsorted(np.cumsum(chances), tails * (1.0 - 1e-12))
    counts = np.clip(counts, 0, p.size) + certain
    return int(counts[0]), int(counts[1])


@dataclass(frozen=True, eq=False)
class Expected:
    """What odds lead to expect, bin by bin; add two for both.

    Attributes
    ----------
    rows : int array
        Rows with odds.
    sums, variances : object arrays
        Exact sums of w p and w^2 p (1 - p), see `embersift.exact_sums`.
    """

    rows: NDArray[np.int64]
    sums: Exact
    variances: Exact

    def __add__(self, other: Expected) -> Expected:
        return Expected(
            self.rows + other.rows, self.sums + other.sums, self.variances + other.variances
        )

    @property
    def mean(self) -> Array:
        """Expected number visible (sum of weights)."""
        return as_floats(self.sums)

    @property
    def spread(self) -> Array:
        """Its standard deviation, rows being independent."""
        return np.sqrt(as_floats(self.variances))


def expected_visible(
    odds: Array, index: NDArray[np.intp], size: int, weight: Array | None = None
) -> Expected:
    """Expected number visible and its spread per bin, in sums that no cut into blocks changes.

    Parameters
    ----------
    odds : array
        Probability of each row; NaN is left out.
    index : integer array
        Bin of each row, 0 to `size` - 1.
    size : int
        Number of bins.
    weight : array, optional
        Weight of each row.

    Examples
    --------
    >>> expected = expected_visible(np.array([0.5, 0.5, 1.0]), np.array([0, 0, 1]), 2)
    >>> expected.mean.tolist(), expected.spread.round(3).tolist()
    ([1.0, 1.0], [0.707, 0.0])
    """
    known = ~np.isnan(odds)
    p, index = odds[known], index[known]
    rows = np.bincount(index, minlength=size).astype(np.int64)
    if p.size == 0:
        return Expected(rows, no_sums(size), no_sums(size))
    mean, variance = p.copy(), p * (1.0 - p)
    if weight is not None:
        mean *= weight[known]
        variance *= weight[known] ** 2
    # what exact_sums cannot hold has no weight beside anything else
    mean[np.abs(mean) < SMALLEST**2] = 0.0
    variance[variance < SMALLEST**2] = 0.0
    return Expected(rows, exact_sums(mean, index, size), exact_sums(variance, index, size))
