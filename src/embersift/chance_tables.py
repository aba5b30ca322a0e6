"""Tables behind the chance: built from exact distributions, read a million times a second.

What is tabulated is not the probability but a score that is smooth where the probability is not:

* P = Phi(-z), and z below 0 (P above one half, where nobody needs digits) is compressed by asinh.
* Not against the luminosity l but against y = l - b, where b is the *bulk*, the light that nearly
  every such galaxy has (the 2 per cent quantile of the high-mass and of the low-mass sum). A rich
  galaxy's distribution moves with its bulk; at fixed y it hardly changes.

Along log SFR, O/H and log M* cubic B-splines pass through the nodes; along y the score is linear.
Nodes in y crowd where the luminosity functions end sharply.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from embersift.arrays import Array

__all__ = ["BOTTOM", "METALLICITIES", "TOP", "Axis", "ScoreTable", "bulk", "compressed"]

TOP = 1e5  # 1e43 erg/s
BOTTOM = 1e-3  # 1e35 erg/s
METALLICITIES = (7.0, 9.2)
# One node beyond the largest amounts keeps the ends of the splines out of the range. Below the
# lowest, probabilities are as good as proportional to the amount, and `chance` takes over.
_LOG_SFRS = (-3.6, 2.2)
_LOG_MASSES = (-4.2, 1.43)

_SOFT = 0.5
Scale: TypeAlias = Literal["sfr", "mass", "oh12"]
Floats: TypeAlias = NDArray[np.float32]


def _scaled(scale: Scale, values: Array) -> Array:
    """What the nodes of an axis are uniform in."""
    if scale == "oh12":
        # the exponential cut moves fastest, counted in its own lengths, where O/H is low
        return np.asarray(-np.exp(-0.3 * (values - METALLICITIES[0])))
    logs = np.log10(values)
    if scale == "sfr":
        # denser around 1 Msun/yr: few or many bright sources, and low-mass binaries take over
        # the far tail within a factor of two in SFR
        away = (logs - 0.1) / 0.7
        logs = logs + away / np.sqrt(1.0 + away * away)
    return np.asarray(logs)


_RANGES: dict[Scale, tuple[Array, int]] = {
    "sfr": (np.logspace(*_LOG_SFRS, 100_001), 42),
    "mass": (np.logspace(*_LOG_MASSES, 100_001), 27),
    "oh12": (np.linspace(*METALLICITIES, 100_001), 22),
}


@dataclass(frozen=True)
class Axis:
    """Uniform nodes in a smooth function of SFR [Msun/yr], M* [1e11 Msun] or O/H."""

    scale: Scale
    first: float
    step: float
    count: int

    @classmethod
    def of(cls, scale: Scale) -> Axis:
        values, count = _RANGES[scale]
        first, last = _scaled(scale, values[[0, -1]]).tolist()
        return cls(scale, first, (last - first) / (count - 1), count)

    @property
    def nodes(self) -> Array:
        values, _ = _RANGES[self.scale]
        wanted = self.first + self.step * np.arange(self.count)
        return np.asarray(np.interp(wanted, _scaled(self.scale, values), values))

    def locate(self, values: Array) -> tuple[NDArray[np.intp], Array]:
        """First of the four splines that count for each value, and their weights (4, n)."""
        place = (_scaled(self.scale, values) - self.first) / self.step
        cell = np.clip(place.astype(np.intp), 0, self.count - 2)
        t = place - cell
        s = 1.0 - t
        weights = np.empty((4, t.size))
        weights[0] = s * s * s
        weights[3] = t * t * t
        weights[1] = (3.0 * t - 6.0) * t * t + 4.0
        weights[2] = (3.0 * s - 6.0) * s * s + 4.0
        weights /= 6.0
        return cell, weights

    def splines(self, values: Array, axis: int) -> Array:
        """Coefficients of the cubic B-splines that pass through values at the nodes."""
        n = self.count
        matrix = np.zeros((n + 2, n + 2))
        for i in range(n):
            matrix[i + 1, i : i + 3] = 1 / 6, 4 / 6, 1 / 6
        # no knot at the second and the last but one node
        matrix[0, :5] = matrix[-1, -5:] = 1, -4, 6, -4, 1
        solve = np.linalg.inv(matrix)[:, 1:-1]
        return np.moveaxis(np.tensordot(solve, values, (1, axis)), 0, axis)


def compressed(z: Array) -> Array:
    return np.where(z < 0.0, -_SOFT * np.arcsinh(-z / _SOFT), z)


def _probability(score: Floats) -> Array:
    score = np.asarray(score, dtype=np.float64)
    below = score < 0.0
    if below.any():
        score[below] = -_SOFT * np.sinh(np.minimum(-score[below] / _SOFT, 10.0))
    return np.asarray(ndtr(-score))


def bulk(log_quantile: Array, faintest: float) -> Array:
    # nothing, smoothly, where nearly every galaxy has no source
    quantile = np.exp(log_quantile)
    above = np.maximum(quantile - faintest, 0.0)
    return np.asarray(above * above / (quantile + faintest))


@dataclass(frozen=True)
class ScoreTable:
    """Scores on the splines of up to three axes (SFR, O/H, M*) and the nodes in y.

    Attributes
    ----------
    axes : tuple of Axis
    scores : float32 array, one axis for each of `axes` and one for y
    bulks : pairs of a choice of axes and the spline coefficients of ln(quantile) on them
    nodes : array
        The values of y [1e38 erg/s], ascending.
    faintest : float
        Luminosity of the faintest source.
    """

    axes: tuple[Axis, ...]
    scores: Floats
    bulks: tuple[tuple[tuple[int, ...], Array], ...]
    nodes: Array
    faintest: float

    @cached_property
    def _pairs(self) -> NDArray[np.float64]:
        """Neighbours in y side by side, eight bytes that one look-up fetches."""
        flat = self.scores.ravel()
        pairs = np.empty((flat.size, 2), np.float32)
        pairs[:, 0] = flat
        pairs[:-1, 1] = flat[1:]
        pairs[-1, 1] = flat[-1]
        return pairs.view(np.float64).ravel()

    def exceedance(self, coordinates: Sequence[Array], l38: Array) -> Array:
        """P(S >= l38) for rows whose coordinates (one array an axis) are all on the axes."""
        located = [axis.locate(x) for axis, x in zip(self.axes, coordinates, strict=True)]
        y = l38 - self._bulk(located)
        node = np.searchsorted(self.nodes, y, side="right") - 1
        np.clip(node, 0, self.nodes.size - 2, out=node)
        left = self.nodes[node]
        share = ((y - left) / (self.nodes[node + 1] - left)).clip(0.0, 1.0).astype(np.float32)
        counts = self.scores.shape
        strides = [int(np.prod(counts[i + 1 :])) for i in range(len(self.axes))]
        for (cell, _), stride in zip(located, strides, strict=True):
            node += cell * stride
        weights = [np.repeat(w.astype(np.float32), 2, axis=1) for _, w in located]
        pair = _contract(self._pairs, node, strides, weights).reshape(-1, 2)
        return _probability(pair[:, 0] + share * (pair[:, 1] - pair[:, 0]))

    def _bulk(self, located: Sequence[tuple[NDArray[np.intp], Array]]) -> Array:
        """The light [1e38 erg/s] that nearly every such galaxy has; smooth, not exact."""
        total = np.zeros(located[0][0].size)
        for chosen, coefficients in self.bulks:
            shape = coefficients.shape
            strides = [int(np.prod(shape[i + 1 :])) for i in range(len(chosen))]
            base = sum(located[a][0] * s for a, s in zip(chosen, strides, strict=True))
            weights = [located[a][1] for a in chosen]
            flat = coefficients.ravel()
            total += bulk(_contract(flat, np.asarray(base), strides, weights), self.faintest)
        return total


def _contract(
    flat: NDArray[np.float64],
    base: NDArray[np.intp],
    strides: Sequence[int],
    weights: Sequence[NDArray[np.floating]],
) -> NDArray[np.floating]:
    """Sum over the splines, axis by axis. Pairs of float32 hide in `flat` if weights are float32."""
    total: NDArray[np.floating] | None = None
    for i in range(4):
        shifted = flat[i * strides[0] :]
        if len(strides) == 1:
            # positions are inside by construction; mode="clip" only spares the check
            part = shifted.take(base, mode="clip").view(weights[0].dtype)
        else:
            part = _contract(shifted, base, strides[1:], weights[1:])
        part *= weights[0][i]
        if total is None:
            total = part
        else:
            total += part
    assert total is not None
    return total
