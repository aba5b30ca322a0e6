"""Columns that are known only as a distribution: averages over a table of log NH.

No shares are built in (none are verified); the table is the user's.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from embersift.arrays import Array
from embersift.errors import RecipeError
from embersift.sky.absorption import THICK

__all__ = ["NhTable", "average_over_nh"]

_SUM_ERROR = 1e-6


@dataclass(frozen=True)
class NhTable:
    """Shares of the black holes per bin of log10 NH [cm-2], spread evenly inside each bin.

    Parameters
    ----------
    edges : tuple of float
        Ascending, one more than `fractions`.
    fractions : tuple of float
        Not negative; their sum is 1.

    Raises
    ------
    RecipeError
        If they are not so.
    """

    edges: tuple[float, ...]
    fractions: tuple[float, ...]

    def __post_init__(self) -> None:
        edges, fractions = self.edges, self.fractions
        if not fractions or len(edges) != len(fractions) + 1:
            raise RecipeError(
                f"NH table: {len(edges)} edges and {len(fractions)} fractions were read; "
                "there must be one edge more than fractions."
            )
        if not all(low < high for low, high in pairwise(edges)):
            raise RecipeError("NH table: the edges of log NH must ascend.")
        if not (edges[0] >= 10.0 and edges[-1] <= 27.0):
            raise RecipeError(
                f"NH table: the bins run from {edges[0]:g} to {edges[-1]:g}; log10 of NH [cm-2] "
                "between 10 and 27 is expected."
            )
        if not all(0.0 <= share <= 1.0 for share in fractions):
            raise RecipeError("NH table: every fraction must lie between 0 and 1.")
        total = math.fsum(fractions)
        if abs(total - 1.0) > _SUM_ERROR:
            raise RecipeError(
                f"NH table: the fractions sum to {total:.8g}, not to 1. "
                "Give the share of every bin, the unobscured ones included."
            )

    @classmethod
    def from_centres(cls, centres: Sequence[float], fractions: Sequence[float]) -> NhTable:
        """A table by bin centres: edges half way between, the outer bins symmetric.

        Raises
        ------
        RecipeError
            Fewer than two centres, or what `NhTable` refuses.
        """
        if len(centres) < 2:
            raise RecipeError("NH table: two centres at least are needed; or give edges.")
        middle = [0.5 * (a + b) for a, b in pairwise(centres)]
        first, last = 2.0 * centres[0] - middle[0], 2.0 * centres[-1] - middle[-1]
        return cls((first, *middle, last), tuple(fractions))

    @property
    def thick_share(self) -> float:
        """Share of the table beyond 1e24 cm-2, where the photoelectric model is too dark."""
        limit = math.log10(THICK)
        return math.fsum(
            share * min(max((high - limit) / (high - low), 0.0), 1.0)
            for low, high, share in zip(self.edges, self.edges[1:], self.fractions, strict=False)
        )


def average_over_nh(
    function_of_nh: Callable[[float], Array], table: NhTable, nodes: int = 8
) -> Array:
    """Average a function of NH [cm-2] over the table.

    Parameters
    ----------
    function_of_nh : callable
        Intrinsic column to an array, of the same shape at every call.
    table : NhTable
        Bins without rows are not computed.
    nodes : int
        Gauss-Legendre nodes per bin; exact for polynomials in log NH up to degree 2 nodes - 1.
        A step (visible or not) is averaged to about 1 / nodes of its bin.
    """
    x, w = np.polynomial.legendre.leggauss(nodes)
    total: Array | None = None
    for low, high, share in zip(table.edges, table.edges[1:], table.fractions, strict=False):
        if share == 0.0:
            continue
        half = 0.5 * (high - low)
        for node, weight in zip(x, w, strict=True):
            value = function_of_nh(float(10.0 ** (low + half * (node + 1.0))))
            part = (0.5 * share * weight) * np.asarray(value, dtype=float)
            total = part if total is None else total + part
    assert total is not None  # the fractions sum to 1
    return total
