"""From values to slots: below the edges, in a bin, above them, or no value at all.

A bin holds low <= value < high; the last one holds its upper edge too.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray

from embersift.arrays import Array
from embersift.errors import RecipeError

__all__ = ["OUTSIDE", "checked_edges", "slot_limits", "slot_names", "slots"]

OUTSIDE = ("below", "above", "no value")
"""Labels of the slots that are no bins: the first, and the last two."""

_FEW_EDGES = 32  # up to here comparing with each edge beats a binary search


def checked_edges(edges: ArrayLike) -> tuple[float, ...]:
    """The edges as numbers.

    Raises
    ------
    RecipeError
        Fewer than two, or not ascending.
    """
    bounds = tuple(float(edge) for edge in np.atleast_1d(np.asarray(edges, dtype=float)))
    if len(bounds) < 2 or not all(low < high for low, high in pairwise(bounds)):
        shown = ", ".join(format(edge, "g") for edge in bounds[:8])
        raise RecipeError(
            f"tally.edges: at least two values are needed, each above the last; got [{shown}]."
        )
    return bounds


def slots(values: Array, edges: tuple[float, ...]) -> NDArray[np.intp]:
    """Slot of each value: 0 below, 1 and up the bins, then above, then no value (NaN).

    Examples
    --------
    >>> slots(np.array([7.9, 8.0, 9.0, 9.1, np.nan]), (8.0, 9.0)).tolist()
    [0, 1, 1, 2, 3]
    """
    above = len(edges)
    if above <= _FEW_EDGES:
        passed = np.zeros(values.shape, dtype=np.int8)
        for edge in edges:
            passed += values >= edge
        slot = passed.astype(np.intp)
    else:
        slot = np.searchsorted(np.asarray(edges), values, side="right")
    slot -= values == edges[-1]
    slot[np.isnan(values)] = above + 1
    return slot


def slot_names(edges: tuple[float, ...]) -> list[str]:
    """Label of each slot.

    Examples
    --------
    >>> slot_names((8.0, 8.5, 9.0))
    ['below', '8-8.5', '8.5-9', 'above', 'no value']
    """
    words = [format(edge, ".10g") for edge in edges]
    # a hyphen between signs or exponents would be hard to read
    joint = " to " if any("-" in word or "e" in word for word in words) else "-"
    below, above, none = OUTSIDE
    return [below, *(f"{low}{joint}{high}" for low, high in pairwise(words)), above, none]


def slot_limits(edges: tuple[float, ...]) -> tuple[list[float], list[float]]:
    """Lower and upper limit of each slot; infinite at the outside, NaN for no value."""
    return [-np.inf, *edges, np.nan], [*edges, np.inf, np.nan]
