"""Laws from right to left: the lowest argument above which a function stays at or above a goal.

A law may step down at a joint or dip between two branches, so "where it reaches the goal" can be
several places. What a proposal needs is the last of them: beyond it every brighter accretor passes.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cached_property
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array, Mask
from embersift.catalogue import Sources
from embersift.chain import Chain
from embersift.constants import EDDINGTON_PER_MSUN, RATE_TO_LUMINOSITY
from embersift.errors import LawError

__all__ = ["ABOVE", "BELOW", "INSIDE", "MARGIN", "Crossing", "Curve", "Inverse"]

INSIDE, BELOW, ABOVE = range(3)
"""Where the goal is reached: in the range searched, below all of it, or nowhere up to its end."""

MARGIN = 1.0 + 8.0 * float(np.finfo(float).eps)
"""What is asked for is this much more than needed, so that it passes by rounding too."""
_LBOL = (1e20, 1e55)  # erg/s
_RATIO = (1e-20, 1e6)
_RATE = (1e-12, 1e7)  # L_Edd / c2
_MASS = (1e-2, 1e15)  # Msun
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


class Inverse:
    """The laws of a chain from right to left.

    Parameters
    ----------
    chain : Chain
        Its bolometric and accretion laws are inverted.

    Raises
    ------
    LawError
        The bolometric law mixes mass, luminosity and Eddington ratio, which none built in does.
    """

    def __init__(self, chain: Chain) -> None:
        self._chain = chain
        # what a law does not depend on may be missing without a trace in k
        given = {"lbol": 1e44, "ratio": 1e-2, "mbh": 1e7}

        def enough(quantity: str) -> bool:
            lbol, ratio, mbh = (
                np.array([value if name == quantity else np.nan]) for name, value in given.items()
            )
            with np.errstate(invalid="ignore"):
                k = chain.bolometric_law.formula(lbol, ratio, mbh, chain.correction)
            return bool(np.isfinite(k[0]))

        self.by_mass = enough("mbh")
        self.by_ratio = not self.by_mass and enough("ratio")
        if not (self.by_mass or self.by_ratio or enough("lbol")):
            raise LawError(
                f"the bolometric law {chain.bolometric_law.name} depends on several quantities at "
                "once and cannot be inverted."
            )

    def _ratio_of_rate(self, rate: Array) -> Array:
        return self._chain.accretion_law.eddington_ratio(rate, self._chain.disc)

    def _lx_of_lbol(self, lbol: Array) -> Array:
        unknown = np.full(lbol.shape, np.nan)
        return self._chain.agn_light(lbol, unknown, unknown)

    def _lx_of_ratio(self, ratio: Array) -> Array:
        """L(2-10 keV) in units of the Eddington luminosity."""
        return self._chain.agn_light(ratio, ratio, np.full(ratio.shape, np.nan))

    @cached_property
    def _rates(self) -> Curve:
        return Curve(self._ratio_of_rate, *_RATE)

    @cached_property
    def _luminosities(self) -> Curve:
        return Curve(self._lx_of_lbol, *_LBOL)

    @cached_property
    def _ratios(self) -> Curve:
        return Curve(self._lx_of_ratio, *_RATIO)

    @cached_property
    def _rates_by_ratio(self) -> Curve:
        return Curve(lambda rate: self._lx_of_ratio(self._ratio_of_rate(rate)), *_RATE)

    def luminosity(self, lx: Array, mbh: Array) -> Crossing:
        """Lowest bolometric luminosity [erg/s] that stays at or above `lx`."""
        if self.by_mass:
            # L_X is proportional to L_bol at a given mass
            per_lbol = self._chain.agn_light(np.ones(lx.shape), np.full(lx.shape, np.nan), mbh)
            lbol = lx / per_lbol * MARGIN
            place = np.select([lbol < _LBOL[0], lbol > _LBOL[1]], [BELOW, ABOVE], INSIDE)
            lbol[place != INSIDE] = np.nan
            return Crossing(lbol, place.astype(np.int8), np.zeros(lx.shape, dtype=bool))
        if self.by_ratio:
            eddington = mbh * EDDINGTON_PER_MSUN
            found = self._ratios.last_crossing(lx / eddington)
            return found._replace(x=found.x * eddington)
        return self._luminosities.last_crossing(lx)

    def rate(self, lx: Array, lbol: Array, mbh: Array) -> Crossing:
        """Lowest inflow [L_Edd/c2] that stays at or above `lx`; `lbol` from `luminosity`."""
        eddington = mbh * EDDINGTON_PER_MSUN
        if self.by_ratio:
            return self._rates_by_ratio.last_crossing(lx / eddington)
        return self._rates.last_crossing(lbol / eddington)

    def mass(self, lx: Array, ratio: float) -> Array:
        """Lightest black hole [Msun] that stays at or above `lx` at one Eddington ratio."""
        if not self.by_mass:
            if self.by_ratio:
                per_eddington = self._lx_of_ratio(np.array([ratio]))[0]
                return np.asarray(lx / (per_eddington * EDDINGTON_PER_MSUN))
            found = self._luminosities.last_crossing(lx)
            return np.asarray(found.x / (ratio * EDDINGTON_PER_MSUN))

        def light(mbh: Array) -> Array:
            lbol = ratio * mbh * EDDINGTON_PER_MSUN
            return self._chain.agn_light(lbol, np.full(mbh.shape, ratio), mbh)

        return Curve(light, *_MASS).last_crossing(lx).x

    def mdot(self, rate: Array, lx: Array, sources: Sources) -> Array:
        """The rate in the catalogue's convention [Msun/yr], moved up by rounding where needed."""
        chain = self._chain
        mdot = rate * (sources.mbh * EDDINGTON_PER_MSUN / RATE_TO_LUMINOSITY)
        if chain.recipe.catalogue.rate == "growth":
            mdot *= 1.0 - chain.growth_efficiency
        for power in range(12):
            fed_back = sources._replace(mdot=mdot)
            lbol, ratio, _ = chain.accretion(fed_back)
            short = chain.agn_light(lbol, ratio, sources.mbh) < lx
            if not short.any():
                break
            mdot = np.where(short, mdot * (1.0 + 2.0 ** (power - 52)), mdot)
        return mdot
