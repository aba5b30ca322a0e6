"""Sums of weights that are exact, so that no order and no cut into blocks can change them.

A float64 sum depends on the order of its terms. Here each term is taken apart into an integer and
a power of two, the integers are added without rounding, and the total is a Python integer in units
of 2^-1074 (the smallest float64). Adding two such totals is exact as well.
"""

from __future__ import annotations

from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array

__all__ = ["LARGEST", "SMALLEST", "Exact", "as_floats", "exact_sums", "no_sums"]

Exact: TypeAlias = NDArray[Any]  # of Python integers

SMALLEST, LARGEST = 1e-150, 1e150
"""Weights other than 0 stay inside, so that their squares are numbers too."""

_UNIT = 1074
_LOW_BITS = 26
_BLOCK = 1 << 18  # times 2^27, the largest part of a term, stays below 2^53: float64 adds exactly


def no_sums(size: int) -> Exact:
    """`size` sums of nothing."""
    sums = np.empty(size, dtype=object)
    sums[:] = 0
    return sums


def exact_sums(values: Array, index: NDArray[np.intp], size: int) -> Exact:
    """Exact sums of `values` by `index` (0 to `size` - 1), in units of 2^-1074.

    Parameters
    ----------
    values : array
        0, or between the squares of `SMALLEST` and `LARGEST`.
    index : integer array
        Where each value belongs.
    size : int
        Number of sums.

    Examples
    --------
    >>> as_floats(exact_sums(np.array([1e16, 1.0, 1.0]), np.array([0, 0, 0]), 1)).tolist()
    [1.0000000000000002e+16]
    """
    sums = no_sums(size)
    for start in range(0, values.size, _BLOCK):
        part = values[start : start + _BLOCK]
        mantissa, exponent = np.frexp(part)
        lowest = int(exponent.min())
        span = int(exponent.max()) - lowest + 1
        place = index[start : start + _BLOCK] * span + (exponent - lowest)
        mantissa *= 2.0 ** (53 - _LOW_BITS)
        high = np.floor(mantissa)
        low = (mantissa - high) * 2.0**_LOW_BITS
        tops = np.bincount(place, weights=high, minlength=size * span)
        tails = np.bincount(place, weights=low, minlength=size * span)
        for at in np.flatnonzero(tops):
            whole = (int(tops[at]) << _LOW_BITS) + int(tails[at])
            sums[at // span] += whole << (int(at % span) + lowest - 53 + _UNIT)
    return sums


def as_floats(sums: Exact) -> Array:
    """The float64 nearest to each sum."""
    unit = 1 << _UNIT
    return np.array([total / unit for total in sums.flat], dtype=float).reshape(sums.shape)
