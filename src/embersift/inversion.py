"""The inverse of a law: the lowest argument above which a function stays at or above a goal.

A law may step down at a joint or dip between two branches, so "where it reaches the goal" can be
several places. What a proposal needs is the last of them: beyond it every brighter accretor passes.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array, Mask

__all__ = ["ABOVE", "BELOW", "INSIDE", "Curve", "Crossing"]

INSIDE, BELOW, ABOVE = range(3)
"""Where the goal is reached: in the range searched, below all of it, or nowhere up to its end."""

_PER_DECADE = 400
_JOINT_DEX = 1e-6  # a bend or step this large gets nodes of its own


class Crossing(NamedTuple):
    """Where a curve crosses its goals for the last time.

    `x` is NaN unless `place` is `INSIDE`; `again` marks goals that are also met somewhere lower.
    """

    x: Array
    place: NDArray[np.int8]
    again: Mask


class Curve:
    """A positive function of one positive argument, made ready to be inverted.

    Parameters
    ----------
    function : callable
        Array to array, each element by itself; piecewise smooth in log-log.
    low, high : float
        Range that is searched.
    """

    def __init__(self, function: Callable[[Array], Array], low: float, high: float) -> None:
        self._function = function
        count = int(np.ceil(np.log10(high / low) * _PER_DECADE)) + 1
        x = np.geomspace(low, high, count)
        self._x = np.union1d(x, _joints(function, x))
        values = function(self._x)
        self._values = values
        self._floor = np.minimum.accumulate(values[::-1])[::-1]
        self._peak = np.maximum.accumulate(values)

    @property
    def monotonic(self) -> bool:
        """Whether the function never falls, up to rounding."""
        return bool(np.all(self._floor >= self._values * (1.0 - 1e-12)))

    def last_crossing(self, goal: Array) -> Crossing:
        """The lowest argument from which on the function is never below `goal`.

        Returns
        -------
        Crossing
            ``function(x) >= goal`` holds at `x` itself, and `x` is within a few units of the last
            place of where it ceases to hold.
        """
        known = np.isfinite(goal)
        at = np.searchsorted(self._floor, np.where(known, goal, 0.0), side="left")
        place = np.where(at == 0, BELOW, np.where(at == self._x.size, ABOVE, INSIDE))
        place[np.isposinf(goal)] = ABOVE
        place[np.isnan(goal)] = INSIDE
        rows = np.flatnonzero(known & (place == INSIDE))
        x = np.full(goal.shape, np.nan)
        again = np.zeros(goal.shape, dtype=bool)
        node = at[rows]
        x[rows] = _refined(
            self._function, goal[rows], self._x[node - 1], self._x[node], self._values, node
        )
        again[rows] = self._peak[node - 1] >= goal[rows]
        return Crossing(x, place.astype(np.int8), again)


def _joints(function: Callable[[Array], Array], x: Array) -> Array:
    """Both sides of every place where the function steps or bends, to the last digit."""
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = np.diff(np.log10(function(x)))
    bent = np.flatnonzero(np.abs(np.diff(slope)) > _JOINT_DEX)
    cells = np.unique(np.concatenate((bent, bent + 1)))
    low, high = x[cells], x[cells + 1]
    # the smooth slope next to a step is the median of its surroundings
    around = np.clip(cells[:, None] + np.array([-3, -2, 2, 3]), 0, slope.size - 1)
    smooth = np.median(slope[around], axis=1) / np.log10(x[1] / x[0])
    for _ in range(60):
        middle = np.sqrt(low * high)
        with np.errstate(divide="ignore", invalid="ignore"):
            f_low, f_middle, f_high = (np.log10(function(p)) for p in (low, middle, high))
            left = np.abs(f_middle - f_low - smooth * np.log10(middle / low))
            right = np.abs(f_high - f_middle - smooth * np.log10(high / middle))
        step_left = left > right
        # at the end the midpoint rounds onto one of the two neighbours
        high = np.where(step_left & (middle > low), middle, high)
        low = np.where(~step_left & (middle < high), middle, low)
    return np.concatenate((low, high))


def _refined(
    function: Callable[[Array], Array],
    goal: Array,
    low: Array,
    high: Array,
    values: Array,
    node: NDArray[np.intp],
) -> Array:
    """The crossing inside each cell: secants first, bisection for what they leave."""
    low, high = low.copy(), high.copy()
    f_low, f_high = values[node - 1], values[node]
    for step in range(5):
        if step < 3:
            with np.errstate(divide="ignore", invalid="ignore"):
                share = np.log(goal / f_low) / np.log(f_high / f_low)
                x = low * (high / low) ** share
            x = np.where((x >= low) & (x <= high), x, np.sqrt(low * high))
            best = x
        else:
            x = np.clip(best * (1.0 + (2 * step - 7) * 1e-14), low, high)
        value = function(x)
        passed = value >= goal
        high, f_high = np.where(passed, x, high), np.where(passed, value, f_high)
        low, f_low = np.where(passed, low, x), np.where(passed, f_low, value)
    left = np.arange(goal.size)
    while left.size:
        middle = np.sqrt(low[left]) * np.sqrt(high[left])
        inside = (middle > low[left]) & (middle < high[left])
        inside &= high[left] > low[left] * (1.0 + 4e-16)
        left, middle = left[inside], middle[inside]
        passed = function(middle) >= goal[left]
        high[left[passed]] = middle[passed]
        low[left[~passed]] = middle[~passed]
    return high
