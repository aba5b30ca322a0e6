"""Random numbers that belong to a row, or to a coefficient, and to nothing else.

Each number is a function of a key, a seed and a stream: the same row gets the same draw in any
chunk, in any order and in any worker, and the same coefficient the same draws in every combination
of laws it takes part in. The generator is Philox4x32-10 (Salmon et al. 2011, Proc. SC11, article
16), which has no state: it scrambles a counter.

| word | is |
|---|---|
| key | identity of a row (`row_keys`), or the number of a draw |
| seed | the user's, 0 to 2^64 - 1 |
| stream | tells apart the draws that one key needs |

Examples
--------
>>> keys = row_keys(["a", "b", "c"])
>>> whole = uniform(keys, seed=1)
>>> bool((uniform(keys[::-1], seed=1)[::-1] == whole).all())
True
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from embersift.arrays import Array
from embersift.errors import RecipeError
from embersift.laws.declaration import BolometricLaw, Coefficient, Law

__all__ = [
    "coefficient_draws",
    "drawn_coefficients",
    "normal",
    "numbered_keys",
    "philox",
    "row_keys",
    "stream_of",
    "undrawn_coefficients",
    "uniform",
]

Keys = NDArray[np.uint64]

_LOW = np.uint64(0xFFFFFFFF)
_HALF = np.uint64(32)
_MULTIPLIERS = (np.uint64(0xD2511F53), np.uint64(0xCD9E8D57))
_STEPS = (0x9E3779B9, 0xBB67AE85)
_ROUNDS = 10
_BLOCK = 1 << 14  # keys per step: a hundred passes over an array that stays in the cache

_POSITIVE = frozenset({"a", "b", "k", "norm", "per_mstar", "per_sfr"})
"""Coefficients that scale light, a correction or its argument: below zero they mean nothing."""


def philox(
    counter: tuple[Keys, Keys, Keys, Keys], key: tuple[int, int]
) -> tuple[Keys, Keys, Keys, Keys]:
    """Philox4x32-10 of many counters.

    Parameters
    ----------
    counter : four uint64 arrays
        Words of 32 bits each; they broadcast.
    key : two int
        Words of 32 bits.

    Returns
    -------
    four uint64 arrays
        Words of 32 bits.
    """
    a, b, c, d = np.broadcast_arrays(*counter)
    low, high = key
    for _ in range(_ROUNDS):
        first, second = _MULTIPLIERS[0] * a, _MULTIPLIERS[1] * c
        a = (second >> _HALF) ^ b ^ np.uint64(low)
        b = second & _LOW
        c = (first >> _HALF) ^ d ^ np.uint64(high)
        d = first & _LOW
        low, high = (low + _STEPS[0]) & 0xFFFFFFFF, (high + _STEPS[1]) & 0xFFFFFFFF
    return a, b, c, d


def _word(value: int, what: str) -> int:
    if not 0 <= value < 1 << 64:
        raise RecipeError(f"{what} = {value}: give a whole number from 0 to 2^64 - 1.")
    return int(value)


def _bits(keys: Keys, seed: int, stream: int) -> Keys:
    """64 random bits for each key."""
    seed, stream = _word(seed, "random.seed"), _word(stream, "stream")
    # one key as an array: numpy warns of overflow in products of single numbers only
    words = (np.array([stream & 0xFFFFFFFF]), np.array([stream >> 32]))
    low, high = (word.astype(np.uint64) for word in words)
    flat = np.ravel(keys)
    bits = np.empty(flat.size, dtype=np.uint64)
    for start in range(0, flat.size, _BLOCK):
        some = flat[start : start + _BLOCK]
        a, b, _, _ = philox(
            (some & _LOW, some >> _HALF, low, high), (seed & 0xFFFFFFFF, seed >> 32)
        )
        bits[start : start + _BLOCK] = a << _HALF | b
    return bits.reshape(keys.shape)


def uniform(keys: ArrayLike, seed: int, stream: int = 0) -> Array:
    """Uniform random numbers, never 0 and never 1.

    Parameters
    ----------
    keys : uint64 array
        One per number, see `row_keys`; equal keys get equal numbers.
    seed : int
        0 to 2^64 - 1.
    stream : int
        0 to 2^64 - 1; other streams are independent.

    Returns
    -------
    float64 array of the shape of `keys`

    Raises
    ------
    RecipeError
        A seed or stream out of range.
    """
    bits = _bits(np.asarray(keys, dtype=np.uint64), seed, stream)
    # 52 bits and a half step: with 53 the largest would round to 1
    return ((bits >> np.uint64(12)).astype(np.float64) + 0.5) * 2.0**-52


def normal(keys: ArrayLike, seed: int, stream: int = 0) -> Array:
    """Normal random numbers of mean 0 and deviation 1; parameters as in `uniform`."""
    from scipy.special import ndtri

    return np.asarray(ndtri(uniform(keys, seed, stream)), dtype=float)


def row_keys(ids: Any) -> Keys:
    """The key of each row from its id.

    Parameters
    ----------
    ids : array of any type
        As text they are hashed, so that ``7`` and ``"7"`` are one id, and ``"007"`` another.

    Returns
    -------
    uint64 array
        Rows of one id share their draws; `embersift check` reports ids that stand twice.
    """
    import pandas as pd

    text = pd.Series(np.asarray(ids)).astype(str).to_numpy(dtype=object)
    return np.asarray(pd.util.hash_array(text, categorize=False), dtype=np.uint64)


def numbered_keys(first_row: int, rows: int) -> Keys:
    """The keys of a block of rows that have no id: their numbers in the whole table."""
    return np.arange(first_row, first_row + rows, dtype=np.uint64)


def stream_of(*words: str) -> int:
    """A stream for a thing that has a name.

    Examples
    --------
    >>> stream_of("binaries", "lehmer2019") == stream_of("binaries", "lehmer2019")
    True
    """
    return int.from_bytes(hashlib.blake2b("\0".join(words).encode(), digest_size=8).digest(), "big")


def _coefficients(law: Law, band: str) -> Mapping[str, Coefficient]:
    if band == "soft" and isinstance(law, BolometricLaw):
        return law.soft_coefficients
    return law.coefficients


def drawn_coefficients(law: Law, *, band: str = "hard") -> tuple[str, ...]:
    """Names of the coefficients that have errors to draw from."""
    return tuple(
        name
        for name, one in _coefficients(law, band).items()
        if np.isfinite([one.value, one.minus, one.plus]).all() and (one.minus > 0 or one.plus > 0)
    )


def undrawn_coefficients(law: Law, *, band: str = "hard") -> tuple[str, ...]:
    """Names of the coefficients that stay at their central value: no error is known to us."""
    drawn = drawn_coefficients(law, band=band)
    return tuple(name for name in _coefficients(law, band) if name not in drawn)


def coefficient_draws(law: Law, n: int, seed: int, *, band: str = "hard") -> list[dict[str, float]]:
    """Coefficients of a law, drawn from their published errors.

    Parameters
    ----------
    law : Law
        Any law.
    n : int
        How many draws.
    seed : int
        0 to 2^64 - 1.
    band : {"hard", "soft"}
        Which coefficients of a bolometric law.

    Returns
    -------
    list of dict
        One set of coefficients per draw, ready for the law's formula. Draw i of a coefficient
        depends on the seed, on the kind and name of the law, on its own name and on i alone.

    Raises
    ------
    RecipeError
        Fewer than one draw.

    Notes
    -----
    Above the central value the deviation is the upper error, below it the lower one, and half of
    the draws lie on either side: median and 16th and 84th percentile are the published ones.
    Coefficients are drawn independently, as we have no covariances. Where they trade off in the fit
    the spread is too wide: L / SFR of ``lehmer2021`` at 12 + log(O/H) = 7 comes out at 10^39.9 with
    -1.2 +2.3 dex, at 8.69 with -0.25 +0.4 dex. A coefficient that scales light or a correction is
    kept above zero by cutting its distribution there.
    """
    from scipy.special import ndtr, ndtri

    if n < 1:
        raise RecipeError(f"draws = {n}: at least one draw is needed; 100 or more tell a spread.")
    sets: list[dict[str, float]] = [{} for _ in range(n)]
    drawn = set(drawn_coefficients(law, band=band))
    for name, one in _coefficients(law, band).items():
        values = [one.value] * n
        if name in drawn:
            u = uniform(np.arange(n), seed, stream_of(law.kind, law.name, band, name))
            if name in _POSITIVE and one.value > 0.0 and one.minus > 0.0:
                least = float(ndtr(-one.value / one.minus))
                u = least + (1.0 - least) * u
            z = ndtri(u)
            values = (one.value + z * np.where(z > 0.0, one.plus, one.minus)).tolist()
        for chosen, value in zip(sets, values, strict=True):
            chosen[name] = value
    return sets
