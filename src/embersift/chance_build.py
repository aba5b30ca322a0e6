"""The tables of `chance_tables`, made from the exact distributions of `compound_poisson`.

For every O/H of the axis: the distributions for all pairs of amounts on one grid of luminosities,
as scores, with the scatter folded in; then moved by the bulk of each pair on to common nodes.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import correlate1d
from scipy.special import ndtr, ndtri, ndtri_exp

from embersift.arrays import Array
from embersift.chance_tables import BOTTOM, TOP, Axis, ScoreTable, bulk, compressed
from embersift.compound_poisson import (
    Complex,
    Cumulants,
    LuminosityDistribution,
    Window,
    cumulants,
    kinks,
    tail,
    windows,
)

__all__ = ["build"]

_EXACT = 1e-9  # the transform is good for probabilities above this
_BULK_SCORE = -2.0
_TILTS = np.concatenate([-np.geomspace(1e4, 1e-6, 160), np.geomspace(1e-6, 30.0, 140)])


class _Kind:
    """Binaries of one kind in all the amounts of the axis, none first."""

    def __init__(self, function: LuminosityDistribution | None, axis: Axis) -> None:
        self.function = function
        self.amounts = np.zeros(1) if function is None else np.append(0.0, axis.nodes)

    def characteristic(
        self, window: Window, oh12: float | None, which: NDArray[np.intp]
    ) -> Complex:
        if self.function is None:
            return np.ones((which.size, window.cells + 1), dtype=complex)
        exponent = np.multiply.outer(self.amounts[which], window.exponent(self.function, oh12))
        # numbers that do not count would become denormal, which makes products very slow
        return np.where(exponent.real > -90.0, np.exp(exponent), 0.0)

    def above(self, window: Window, oh12: float | None) -> Array:
        number = 0.0 if self.function is None else window.number_above(self.function, oh12)
        return self.amounts * number

    def number(self, oh12: float | None) -> Array:
        if self.function is None:
            return self.amounts
        return self.amounts * self.function.number_above(self.function.low, oh12)

    def cumulants(self, oh12: float | None) -> Cumulants:
        if self.function is None:
            return Cumulants(*np.zeros((3, _TILTS.size)))
        return cumulants(self.function, oh12, _TILTS)


def build(
    hmxb: LuminosityDistribution | None,
    lmxb: LuminosityDistribution | None,
    scatter_dex: float = 0.0,
) -> dict[str, ScoreTable]:
    """Make the tables for galaxies with high-mass binaries, low-mass binaries, and both.

    Parameters
    ----------
    hmxb, lmxb : luminosity functions, or None
        For 1 Msun/yr and for 1e11 Msun.
    scatter_dex : float
        Log-normal scatter that multiplies the sum.

    Returns
    -------
    dict
        Keys ``hmxb``, ``lmxb``, ``both``, as far as the functions are there.
    """
    functions = [function for function in (hmxb, lmxb) if function is not None]
    sfr, mass, metal = Axis.of("sfr"), Axis.of("mass"), Axis.of("oh12")
    metals = (metal,) if hmxb is not None and hmxb.needs_oh12 else ()
    oh12s = metal.nodes.tolist() if metals else [None]
    faintest = min(function.low for function in functions)

    grid, scores = _scores(_Kind(hmxb, sfr), _Kind(lmxb, mass), oh12s)
    if scatter_dex > 0.0:
        grid, scores = _scattered(grid, scores, scatter_dex)
    if not metals:
        scores = scores[:, 0]  # from SFR, O/H, M*, luminosity
    y = _nodes(functions, grid[0])

    tables, bulks = {}, []
    if hmxb is not None:
        alone = scores[1:, ..., 0, :]
        bulks.append((tuple(range(alone.ndim - 1)), _log_quantile(grid, alone)))
        tables["hmxb"] = _table((sfr, *metals), bulks, alone, grid, y, faintest)
    if lmxb is not None:
        alone = scores[0, 0, 1:] if metals else scores[0, 1:]
        quantile = _log_quantile(grid, alone)
        tables["lmxb"] = _table((mass,), [((0,), quantile)], alone, grid, y, faintest)
        if hmxb is not None:
            bulks.append(((1 + len(metals),), quantile))
            both = scores[1:, ..., 1:, :]
            tables["both"] = _table((sfr, *metals, mass), bulks, both, grid, y, faintest)
    return tables


def _scores(high: _Kind, low: _Kind, oh12s: Sequence[float | None]) -> tuple[Array, Array]:
    """Luminosities, and scores by SFR, O/H, M* and luminosity."""
    functions = [kind.function for kind in (high, low) if kind.function is not None]
    grid, found = windows(functions, TOP)
    cumulative = np.zeros((high.amounts.size, len(oh12s), low.amounts.size, grid.size))
    number = np.stack([high.number(oh12) for oh12 in oh12s], axis=1)
    number = np.add.outer(number, low.number(None))
    cumulative[..., 0] = np.exp(-number)
    for window in found:
        where = np.searchsorted(grid, window.luminosities * (1.0 - 1e-9))
        _below(high, low, oh12s, window, cumulative, where)
    bounded = all(np.isfinite(function.high) for function in functions)
    scores = -ndtri(np.clip(1.0 - cumulative, _EXACT, 1.0 - _EXACT))
    low_cumulants = low.cumulants(None)
    for k, oh12 in enumerate(oh12s):
        total = Cumulants(
            *(
                high.amounts[:, None, None] * a + low.amounts[:, None] * b
                for a, b in zip(high.cumulants(oh12), low_cumulants, strict=True)
            )
        )
        _add_tails(grid, cumulative[:, k], total, bounded, scores[:, k])
    scores[..., 0] = ndtri_exp(np.maximum(-number, -600.0))
    return grid, scores


def _below(
    high: _Kind,
    low: _Kind,
    oh12s: Sequence[float | None],
    window: Window,
    cumulative: Array,
    where: NDArray[np.intp],
) -> None:
    """Fill in P(S <= l) for the luminosities of one window, at `where` on the last axis."""
    # a galaxy with 45 sources above the window is below its top as good as never
    masses = np.flatnonzero(low.above(window, None) < 45.0)
    inverse = window.inverse()
    of_low = low.characteristic(window, None, masses)
    # all M* at once: one large product for all SFR and O/H instead of many small ones
    mixed = of_low.T[:, :, None] * inverse[:, None, :]
    real = np.stack([mixed.real, -mixed.imag], axis=1).reshape(2 * inverse.shape[0], -1)
    for k, oh12 in enumerate(oh12s):
        sfrs = np.flatnonzero(high.above(window, oh12) < 45.0)
        of_high = high.characteristic(window, oh12, sfrs)
        part = (of_high.view(np.float64) @ real).reshape(sfrs.size, masses.size, -1)
        cumulative[np.ix_(sfrs, [k], masses, where)] = part[:, None]


def _add_tails(
    grid: Array, cumulative: Array, total: Cumulants, bounded: bool, scores: Array
) -> None:
    """Replace the scores of probabilities too small for the transform, in place."""
    below, above = _TILTS < 0.0, _TILTS > 0.0
    log_below = tail(_TILTS[below], Cumulants(*(part[..., below] for part in total)))
    log_above = tail(_TILTS[above], Cumulants(*(part[..., above] for part in total)))
    for node in zip(*np.nonzero(total.slope.any(axis=-1)), strict=True):
        # the approximation is tied to the last probability that is known exactly
        faint = np.flatnonzero(cumulative[node] < _EXACT)
        if faint.size:
            end = faint[-1] + 1
            log_p = np.interp(grid[: end + 1], total.slope[node][below], log_below[node])
            log_p += np.log(max(cumulative[node][end], _EXACT)) - log_p[-1]
            scores[node][:end] = ndtri_exp(np.clip(log_p[:-1], -600.0, 0.0))
        bright = np.flatnonzero(1.0 - cumulative[node] < _EXACT)
        if bright.size and bounded:
            begin = bright[0]
            log_p = np.interp(grid[begin - 1 :], total.slope[node][above], log_above[node])
            log_p += np.log(max(1.0 - cumulative[node][begin - 1], _EXACT)) - log_p[0]
            scores[node][begin:] = -ndtri_exp(np.clip(log_p[1:], -600.0, 0.0))


def _scattered(grid: Array, scores: Array, scatter_dex: float) -> tuple[Array, Array]:
    """Fold in a log-normal factor: a running mean of P, and of 1 - P, along ln l."""
    sigma = scatter_dex * np.log(10.0)
    step = min(sigma / 8.0, 0.04)
    reach = int(np.ceil(6.5 * sigma / step))
    weights = np.exp(-0.5 * (step / sigma * np.arange(-reach, reach + 1)) ** 2)
    weights /= weights.sum()
    fine = np.arange(np.log(BOTTOM) - step, np.log(TOP) + 2.0 * step, step)
    padded = np.concatenate([np.log(grid[0]) * np.ones(0), fine])
    wide = np.exp(padded)
    below = np.geomspace(BOTTOM, grid[0], 40, endpoint=False)
    longer = np.concatenate([below[below < grid[0]], grid])
    result = np.empty((*scores.shape[:-1], longer.size))
    for node in np.ndindex(*scores.shape[:-1]):
        z = np.interp(wide, grid, scores[node])
        more = correlate1d(ndtr(-z), weights, mode="nearest")
        less = correlate1d(ndtr(z), weights, mode="nearest")
        with np.errstate(divide="ignore"):
            folded = np.where(more < less, -ndtri_exp(np.log(more)), ndtri_exp(np.log(less)))
        result[node] = np.interp(np.log(longer), fine, np.clip(folded, -35.0, 35.0))
    return longer, result


def _nodes(functions: Sequence[LuminosityDistribution], begin: float) -> Array:
    """The nodes in y = l - bulk [1e38 erg/s]: negative, then logarithmic, dense around kinks."""
    nodes = [-np.geomspace(0.1, 2e4, 36)]
    for (a, b), dex in zip(
        pairwise((begin, 1.0, 100.0, 2e4, TOP)), (0.045, 0.028, 0.0145, 0.03), strict=True
    ):
        nodes.append(np.geomspace(a, b, 1 + int(np.ceil(np.log10(b / a) / dex))))
    lowest = min(function.low for function in functions)
    # just below a sharp edge the chance falls in proportion to the distance from it
    for kink, before, after in (
        (lowest, 4, 16),
        (2.0 * lowest, 12, 12),
        *((edge, 48, 36) for edge in kinks(functions, TOP)),
        *((2.0 * edge, 16, 16) for edge in kinks(functions, TOP)),
    ):
        nodes += [
            kink * (1.0 - np.geomspace(2e-4, 0.25, before)),
            np.array([kink]),
            kink * (1.0 + np.geomspace(2e-4, 0.25, after)),
        ]
    joined = np.unique(np.concatenate(nodes))
    apart = np.diff(joined, prepend=-np.inf) > 1e-7 * np.abs(joined)
    return np.asarray(joined[apart & (joined <= TOP)])


def _log_quantile(grid: Array, scores: Array) -> Array:
    # scores rise with luminosity but for rounding, far from the one that is wanted
    rising = np.maximum.accumulate(scores.reshape(-1, grid.size), axis=1)
    found = [np.interp(_BULK_SCORE, row, np.log(grid)) for row in rising]
    return np.asarray(found).reshape(scores.shape[:-1])


def _table(
    axes: tuple[Axis, ...],
    bulks: Sequence[tuple[tuple[int, ...], Array]],
    scores: Array,
    grid: Array,
    y: Array,
    faintest: float,
) -> ScoreTable:
    shift = np.zeros(scores.shape[:-1])
    coefficients = []
    for chosen, log_quantile in bulks:
        shape = [n if i in chosen else 1 for i, n in enumerate(shift.shape)]
        shift = shift + bulk(log_quantile, faintest).reshape(shape)
        for i, a in enumerate(chosen):
            log_quantile = axes[a].splines(log_quantile, i)
        coefficients.append((chosen, np.ascontiguousarray(log_quantile)))
    moved = np.empty((*shift.shape, y.size))
    for node in np.ndindex(*shift.shape):
        moved[node] = np.interp(y + shift[node], grid, scores[node])
    splines = compressed(moved)
    for i, axis in enumerate(axes):
        splines = axis.splines(splines, i)
    return ScoreTable(
        axes, np.ascontiguousarray(splines, dtype=np.float32), tuple(coefficients), y, faintest
    )
