"""One fast interpolant for smooth functions of one variable that the chain evaluates per row."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from embersift.arrays import Array

__all__ = ["UniformCubic"]


class UniformCubic:
    """Local cubic through four neighbouring nodes of a uniform grid.

    Parameters
    ----------
    function : callable
        Vectorised; evaluated once, on the nodes and one node beyond either end.
    low, high : float
        The interval that is covered.
    cells : int
        Number of cells; the error falls with its fourth power (3/128 h^4 f'''').

    Notes
    -----
    Each value depends on its own argument only, so results cannot change with the way rows are
    grouped. Arguments outside the interval, and NaN, give NaN.
    """

    def __init__(
        self, function: Callable[[Array], Array], low: float, high: float, cells: int
    ) -> None:
        self.low, self.high = low, high
        self._step = (high - low) / cells
        self._cells = cells
        nodes: Array = low + self._step * np.arange(-1.0, cells + 2)
        f: Array = np.asarray(function(nodes))
        before, left, right, after = f[:-3], f[1:-2], f[2:-1], f[3:]
        # Lagrange form through nodes -1, 0, 1, 2 as a polynomial in t, the place in the cell
        self._c0 = np.ascontiguousarray(left)
        self._c1 = -before / 3.0 - left / 2.0 + right - after / 6.0
        self._c2 = before / 2.0 - left + right / 2.0
        self._c3 = (after - before) / 6.0 + (left - right) / 2.0

    def __call__(self, x: Array) -> Array:
        place = (x - self.low) / self._step
        inside = (place >= 0.0) & (place <= self._cells)
        if not inside.all():
            place = np.where(inside, place, 0.0)
        # take() converts any narrower index on every call
        cell = np.minimum(place.astype(np.intp), self._cells - 1)
        t = place - cell
        y: Array = self._c3.take(cell)
        y *= t
        y += self._c2.take(cell)
        y *= t
        y += self._c1.take(cell)
        y *= t
        y += self._c0.take(cell)
        if not inside.all():
            y[~inside] = np.nan
        return y
