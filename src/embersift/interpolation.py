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
        # Lagrange form through nodes -1, 0, 1, 2 as a polynomial in t, the place in the cell; one
        # more cell, flat, for the upper end itself
        self._c0: Array = np.append(left, f[-2])
        self._c1: Array = np.append(-before / 3.0 - left / 2.0 + right - after / 6.0, 0.0)
        self._c2: Array = np.append(before / 2.0 - left + right / 2.0, 0.0)
        self._c3: Array = np.append((after - before) / 6.0 + (left - right) / 2.0, 0.0)

    def __call__(self, x: Array) -> Array:
        place = x - self.low
        place *= 1.0 / self._step
        with np.errstate(invalid="ignore"):  # NaN has no cell; its t is NaN, and so is its value
            cell = place.astype(np.intp)
        outside = place > self._cells
        outside |= place < 0.0
        place -= cell
        # mode="clip" looks nothing up twice, where the default checks and copies first
        y: Array = self._c3.take(cell, mode="clip")
        for coefficient in (self._c2, self._c1, self._c0):
            y *= place
            y += coefficient.take(cell, mode="clip")
        if outside.any():
            y[outside] = np.nan
        return y
