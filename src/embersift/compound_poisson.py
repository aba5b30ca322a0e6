"""The light of a Poisson number of sources, added up: its exact distribution.

A galaxy's binaries are drawn from luminosity functions, each scaled by an amount (SFR for
high-mass, M* for low-mass binaries). The sum S is a compound Poisson variable. Three facts make
its distribution quick to compute and exact:

* The exponents of the characteristic functions add: amount by amount, part by part.
* ``P(S <= l)`` needs only the sources fainter than l, times the probability
  ``exp(-N(>l))`` that there is none above. So every luminosity has a grid of its own scale, a
  `Window`, and a range of seven decades needs no long transform.
* A grid that keeps the first four moments of every cell keeps the sums of many faint sources,
  even of those far below its step.

The transform is damped by ``exp(-DAMPING k / period)`` so that what wraps around is lost below
1e-10. Beyond that, in the far tails, `tail` continues with the saddlepoint approximation, tied to
the last exact value. (Gilfanov, Grimm & Sunyaev 2004, MNRAS 351, 1365, for the problem.)

All luminosities are in 1e38 erg/s.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import log_ndtr

from embersift.arrays import Array

__all__ = [
    "Complex",
    "Cumulants",
    "LuminosityDistribution",
    "Part",
    "Window",
    "cumulants",
    "exceedance_exact",
    "kinks",
    "tail",
    "windows",
]

DAMPING = 24.0
_HALVING = 2.0  # each window covers a factor of two below its top
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(6)
_LARGEST_EXPONENT = 600.0
Complex = NDArray[np.complex128]


class LuminosityDistribution(Protocol):
    """What is needed of a luminosity function; `LuminosityFunction` has it all."""

    @property
    def name(self) -> str: ...
    @property
    def low(self) -> float: ...
    @property
    def high(self) -> float: ...
    @property
    def needs_oh12(self) -> bool: ...
    def density(self, l38: ArrayLike, oh12: ArrayLike | None = None) -> Array: ...
    def number_above(self, l38: ArrayLike, oh12: ArrayLike | None = None) -> Array: ...


class Part(NamedTuple):
    """Sources of one kind: `amount` is the SFR [Msun/yr] or the stellar mass [1e11 Msun]."""

    function: LuminosityDistribution
    amount: float
    oh12: float | None = None


@dataclass(frozen=True)
class Window:
    """A grid of `cells` equal steps from 0 to `top`, and the places on it that are wanted."""

    top: float
    cells: int
    places: NDArray[np.int64]

    @property
    def luminosities(self) -> Array:
        return self.places * (self.top / self.cells)

    def exponent(self, function: LuminosityDistribution, oh12: float | None) -> Complex:
        """Logarithm of the damped characteristic function, for an amount of one.

        The sources above the top enter as their absence: minus their number.
        """
        weights = _on_grid(function, oh12, self.top / self.cells, self.cells)
        place = np.arange(self.cells + 1)
        period = 2 * self.cells
        damped = np.fft.rfft(weights * np.exp(-DAMPING / period * place), n=period)
        return np.asarray(damped - weights.sum() - self.number_above(function, oh12))

    def number_above(self, function: LuminosityDistribution, oh12: float | None) -> float:
        if self.top >= function.high:
            return 0.0
        return float(function.number_above(self.top, oh12))

    def inverse(self) -> Complex:
        """Matrix (frequency, place): the real part of a product with it is P(S <= l).

        It does what an inverse transform, the undoing of the damping, a running sum and a choice
        of places would do. Of P(S = l) at a point of the grid half is counted.
        """
        period = 2 * self.cells
        frequency = np.arange(self.cells + 1)
        q = (DAMPING + 2j * np.pi * frequency) / period
        power = np.exp(np.multiply.outer(q, self.places))
        matrix = (power - 1.0) / np.expm1(q)[:, None] + 0.5 * power
        matrix *= np.where(frequency % self.cells == 0, 1.0, 2.0)[:, None] / period
        return np.asarray(matrix)


def _on_grid(
    function: LuminosityDistribution, oh12: float | None, step: float, cells: int
) -> Array:
    """Numbers of sources on the points of a grid that keep four moments of every cell."""
    weights = np.zeros(cells + 1)
    top = min(cells * step, function.high)
    if top <= function.low:
        return weights
    first = int(function.low / step + 1e-9)
    last = min(int(np.ceil(top / step - 1e-9)), cells)
    edges = np.arange(first, last + 1) * step
    edges[0], edges[-1] = function.low, top
    # the lowest cells span large factors in luminosity and are cut finer
    fine = [
        np.geomspace(a, b, 2 + int(np.log(b / a) / 0.3))[:-1]
        for a, b in zip(edges[:4], edges[1:5], strict=False)
    ]
    edges = np.concatenate([*fine, edges[len(fine) :]])
    logs = np.log(edges)
    half = 0.5 * np.diff(logs)[:, None]
    luminosity = np.exp(0.5 * (logs[:-1] + logs[1:])[:, None] + half * _NODES)
    number = half * _WEIGHTS * luminosity * function.density(luminosity, oh12)
    x, number = luminosity.ravel() / step, number.ravel()
    # cubic through four points that all lie between the limits, so that no sharp edge is smeared
    start = np.clip(x.astype(np.int64) - 1, first, max(first, last - 3))
    start = np.clip(start, 0, cells - 3)
    t = x - start
    a, b, c = t - 1.0, t - 2.0, t - 3.0
    for i, share in enumerate((-a * b * c / 6, t * b * c / 2, -t * a * c / 2, t * a * b / 6)):
        weights += np.bincount(start + i, number * share, minlength=cells + 1)
    return weights


def kinks(functions: Sequence[LuminosityDistribution], top: float) -> list[float]:
    """Return where a luminosity function ends sharply: the sum has kinks there and at twice that."""
    found = set()
    for function in functions:
        oh12 = np.linspace(7.0, 9.2, 5) if function.needs_oh12 else None
        edge = function.high * (1.0 - 1e-12)
        # one source in 1e9 galaxies at the edge is no edge
        if function.high < top and np.max(edge * function.density(edge, oh12)) > 1e-9:
            found.add(function.high)
    return sorted(found)


def windows(functions: Sequence[LuminosityDistribution], top: float) -> tuple[Array, list[Window]]:
    """Cover all luminosities from the faintest source to `top`.

    Returns
    -------
    grid : array
        All luminosities, ascending; the first is the faintest source's, where P(S >= l) is
        still that of any source at all, and which is in no window.
    windows : list of Window
        In no order; together they have the rest of the grid.
    """
    low = min(function.low for function in functions)
    sharp = kinks(functions, top)
    special = [low, 2.0 * low] + [factor * edge for edge in sharp for factor in (1.0, 2.0)]
    found = []
    begin = low
    for end in [*sharp, top]:
        halvings = int(np.ceil(np.log2(end / begin) - 1e-9))
        # grids above a sharp edge have a point on it; those below end on it
        tops = begin * _HALVING ** np.arange(1, halvings) if end == top else []
        tops = [*tops, end] if end == top else end / _HALVING ** np.arange(halvings)[::-1]
        for window_top in tops:
            found.append(_window(begin, float(window_top), special))
            begin = float(window_top)
        if end != top:
            found.append(_window_around(end))
    grid = np.concatenate([[low], *(window.luminosities for window in found)])
    # two windows may share a point up to rounding
    order = np.unique(np.round(np.log(grid), 9), return_index=True)[1]
    return grid[order], found


def _window(begin: float, top: float, special: Sequence[float]) -> Window:
    # many sources of a luminosity near the step: only in the windows of luminous galaxies
    cells = 512 if top < 100.0 else 1024 if top < 2000.0 else 2048
    dex = 0.022 if top < 1.0 else 0.014 if top < 100.0 else 0.008
    first = cells * begin / top
    count = int(np.ceil(np.log10(top / begin) / dex))
    places = [np.round(np.geomspace(first, cells, count + 1)[1:])]
    near = np.unique(np.round(1.15 ** np.arange(1 + np.log(cells / 4.0) / np.log(1.15))))
    if any(abs(begin / edge - 1.0) < 1e-6 for edge in special):
        places.append(np.floor(first) + near)
    if any(abs(top / edge - 1.0) < 1e-6 for edge in special):
        places.append(cells - near)
    chosen = np.unique(np.concatenate(places)).astype(np.int64)
    return Window(top, cells, chosen[(chosen > first + 1e-6) & (chosen <= cells)])


def _window_around(edge: float) -> Window:
    """A finer look at 3 per cent below and above a sharp edge."""
    distance = np.unique(np.round(1.25 ** np.arange(22.0)).clip(max=128)).astype(np.int64)
    centre = 32 * 128
    return Window(
        edge * 33 / 32, 33 * 128, np.concatenate([centre - distance[::-1], centre + distance])
    )


class Cumulants(NamedTuple):
    """Logarithm of the moment-generating function for an amount of one, and two derivatives."""

    value: Array
    slope: Array
    curvature: Array


def cumulants(function: LuminosityDistribution, oh12: float | None, tilt: Array) -> Cumulants:
    """Integrate ``(exp(t L) - 1) dN`` and its derivatives for every tilt t [1e-38 s/erg]."""
    high = min(function.high, 1e6)
    edges = np.linspace(np.log(function.low), np.log(high), 301)
    half = 0.5 * (edges[1] - edges[0])
    luminosity = np.exp((edges[:-1, None] + half) + half * _NODES).ravel()
    number = np.tile(half * _WEIGHTS, edges.size - 1) * luminosity
    number *= function.density(luminosity, oh12)
    seen = number > 0.0
    luminosity, number = luminosity[seen], number[seen]
    value, slope, curvature = (np.empty(tilt.size) for _ in range(3))
    for i, t in enumerate(tilt.tolist()):
        tl = t * luminosity
        grown = np.exp(np.minimum(np.log(number) + tl, _LARGEST_EXPONENT))
        value[i] = np.where(np.abs(tl) < 1.0, number * np.expm1(np.minimum(tl, 1.0)), 0.0).sum()
        value[i] += np.where(np.abs(tl) < 1.0, 0.0, grown - number).sum()
        slope[i] = grown @ luminosity
        curvature[i] = grown @ luminosity**2
    return Cumulants(value, slope, curvature)


def tail(tilt: Array, total: Cumulants) -> Array:
    """Saddlepoint approximation to ln P of a sum beyond the luminosities ``total.slope``.

    That is P(S > l) for positive tilts, where l is above the mean, and P(S < l) for negative
    ones.
    """
    x = np.abs(tilt) * np.sqrt(total.curvature)
    # ln of exp(x^2/2) Phi(-x); far out the two would cancel, and it is 1/(x sqrt(2 pi))
    near = np.minimum(x, 1e4)
    far = -np.log(2.5066282746 * np.maximum(x, 1.0))
    scaled = np.where(x < 1e4, 0.5 * near * near + log_ndtr(-near), far)
    return np.asarray(np.minimum(total.value - tilt * total.slope + scaled, 0.0))


def exceedance_exact(
    parts: Sequence[Part], l38: float, *, rtol: float = 1e-4, most_cells: int = 2**17
) -> float:
    """Probability that the sources together reach a luminosity, for one galaxy.

    The slow way: a grid that ends at `l38`, refined until two successive answers agree.

    Parameters
    ----------
    parts : sequence of Part
        The kinds of sources with their amounts.
    l38 : float
        Luminosity [1e38 erg/s].
    rtol : float
        Relative agreement that is asked for; below P of about 1e-8 rounding prevents it.
    most_cells : int
        Where the refinement gives up.

    Returns
    -------
    float
        P(S >= l38); 1 where `l38` is not positive, 0 for a positive one without any sources.

    Examples
    --------
    >>> from embersift.laws.luminosity_functions import LUMINOSITY_FUNCTIONS
    >>> young = LUMINOSITY_FUNCTIONS["grimm2003"]
    >>> round(exceedance_exact([Part(young, 0.1)], 10.0), 3)
    0.116
    """
    if l38 <= 0.0:
        return 1.0
    parts = [part for part in parts if part.amount > 0.0]
    if not parts:
        return 0.0
    faintest = min(part.function.low for part in parts)
    if l38 <= faintest:
        number = sum(p.amount * float(p.function.number_above(faintest, p.oh12)) for p in parts)
        return float(-np.expm1(-number))
    cells, before = 512, np.inf
    while True:
        window = Window(l38, cells, np.array([cells]))
        exponent = sum(p.amount * window.exponent(p.function, p.oh12) for p in parts)
        now = 1.0 - float((np.exp(exponent) @ window.inverse())[0].real)
        if abs(now - before) <= rtol * abs(now) or 2 * cells > most_cells:
            return now
        cells, before = 2 * cells, now
