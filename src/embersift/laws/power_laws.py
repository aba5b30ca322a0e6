"""Chains of power laws in luminosity: their density and, exactly, their moments.

The form that every published luminosity function of X-ray binaries has; the functions themselves
are declared in `luminosity_functions`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal, NamedTuple, TypeAlias

import numpy as np
from numpy.typing import ArrayLike

from embersift.arrays import Array
from embersift.bands import Band
from embersift.errors import LawError
from embersift.laws.declaration import Coefficient, Coefficients, Source, Status

__all__ = ["LuminosityFunction", "PowerLaws"]

_LOWEST = 0.01
# In ln L the integrand of an exponential cut is analytic; 48 nodes reach rounding on any interval
# a published function needs (tests hold it against adaptive quadrature).
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(48)
# Beyond this many folds above the lower end nothing is left in double precision.
_FOLDS = 90.0


class PowerLaws(NamedTuple):
    """The shape at one metallicity, or at an array of them.

    dN/dL38 = norm L38^-slopes[0] below breaks[0], and so on without jumps, all of it multiplied
    by exp(-L38 / fold) where there is a fold.
    """

    norm: float
    slopes: tuple[ArrayLike, ...]
    breaks: tuple[float, ...] = ()
    fold: Array | None = None


class _Piece(NamedTuple):
    norm: Array
    slope: Array
    low: float
    high: float


Shape: TypeAlias = Callable[[Coefficients, Array], PowerLaws]


@dataclass(frozen=True, kw_only=True)
class LuminosityFunction:
    """One published luminosity function.

    ``shape(coefficients, oh12)`` gives the power laws. `per` is the unit that the numbers are
    for: ``sfr``, 1 Msun/yr, or ``mstar``, 1e11 Msun. `oh12_range` is where the metallicity is
    held at its edges; ``None`` where the function does not depend on it. `for_totals` is False
    where the integral contradicts the total that the same paper quotes.
    """

    name: str
    summary: str
    source: Source
    per: Literal["sfr", "mstar"]
    band: Band
    formula_text: str
    coefficients: Mapping[str, Coefficient]
    shape: Shape
    high: float
    low: float = _LOWEST
    oh12_range: tuple[float, float] | None = None
    for_totals: bool = True
    status: Status = "V"
    status_note: str = ""

    @property
    def values(self) -> Coefficients:
        """The central values of the coefficients."""
        return MappingProxyType({name: c.value for name, c in self.coefficients.items()})

    @property
    def needs_oh12(self) -> bool:
        return self.oh12_range is not None

    def density(
        self, l38: ArrayLike, oh12: ArrayLike | None = None, values: Coefficients | None = None
    ) -> Array:
        """Return dN/dL38; zero outside the limits.

        Parameters
        ----------
        l38 : array
            Luminosity [1e38 erg/s].
        oh12 : array, optional
            12 + log(O/H); shapes broadcast; NaN gives NaN. Ignored by functions without it.
        values : mapping, optional
            Coefficients in place of the central ones.

        Raises
        ------
        LawError
            If the function depends on O/H and none is given.
        """
        l38 = np.asarray(l38, dtype=float)
        shape = self._shape(oh12, values)
        held = np.clip(l38, self.low, self.high)
        pieces = self._pieces(shape)
        first = next(pieces)
        dn = np.asarray(first.norm * held**-first.slope)
        for piece in pieces:
            dn = np.where(held >= piece.low, piece.norm * held**-piece.slope, dn)
        if shape.fold is not None:
            dn = dn * np.exp(-held / shape.fold)
        return np.where((l38 < self.low) | (l38 > self.high), 0.0, dn)

    def number_above(
        self, l38: ArrayLike, oh12: ArrayLike | None = None, values: Coefficients | None = None
    ) -> Array:
        """Mean number of sources above a luminosity [1e38 erg/s]; arguments as in `density`."""
        return self.moment(0, l38, self.high, oh12, values)

    def luminosity_above(
        self, l38: ArrayLike, oh12: ArrayLike | None = None, values: Coefficients | None = None
    ) -> Array:
        """Mean light [1e38 erg/s] of the sources above a luminosity, as `number_above`."""
        return self.moment(1, l38, self.high, oh12, values)

    def moment(
        self,
        n: float,
        low: ArrayLike,
        high: ArrayLike,
        oh12: ArrayLike | None = None,
        values: Coefficients | None = None,
    ) -> Array:
        """Integrate L38^n dN/dL38 over an interval of luminosity.

        Parameters
        ----------
        n : float
            Order, up to about 6.
        low, high : array
            Limits [1e38 erg/s], broadcast with `oh12`; what lies outside the function's own
            limits counts nothing, and neither does an interval that ends before it begins.
        oh12, values
            As in `density`.

        Returns
        -------
        array
            Closed form for power laws, quadrature to 1e-11 or better with an exponential cut.

        Raises
        ------
        LawError
            If the function depends on O/H and none is given.
        """
        low, high = np.asarray(low, dtype=float), np.asarray(high, dtype=float)
        shape = self._shape(oh12, values)
        total: Array | None = None
        for piece in self._pieces(shape):
            a = np.clip(low, piece.low, piece.high)
            b = np.maximum(a, np.clip(high, piece.low, piece.high))
            power = (n + 1.0) - piece.slope
            if shape.fold is None:
                part = piece.norm * _power_integral(power, a, b)
            else:
                part = piece.norm * _folded_integral(power, a, b, shape.fold)
            total = part if total is None else total + part
        assert total is not None
        return np.asarray(total)

    def _shape(self, oh12: ArrayLike | None, values: Coefficients | None) -> PowerLaws:
        if self.oh12_range is None:
            known = np.asarray(np.nan)
        elif oh12 is None:
            raise LawError(
                f"The luminosity function {self.name} depends on O/H, and none was given. "
                "Give 12 + log(O/H), or choose one that does not, such as lehmer2019-hmxb."
            )
        else:
            known = np.clip(np.asarray(oh12, dtype=float), *self.oh12_range)
        return self.shape(self.values if values is None else values, known)

    def _pieces(self, shape: PowerLaws) -> Iterator[_Piece]:
        norm = np.asarray(shape.norm, dtype=float)
        slopes = [np.asarray(slope, dtype=float) for slope in shape.slopes]
        edges = (self.low, *shape.breaks, self.high)
        for i, slope in enumerate(slopes):
            if i:
                norm = norm * shape.breaks[i - 1] ** (slope - slopes[i - 1])
            yield _Piece(norm, slope, edges[i], edges[i + 1])


def _power_integral(power: Array, a: Array, b: Array) -> Array:
    # a^p ln(b/a) (e^u - 1)/u with u = p ln(b/a): right through p = 0 and for narrow intervals
    width = np.log(b / a)
    u = power * width
    flat = u == 0.0
    growth = np.where(flat, 1.0, np.expm1(u) / np.where(flat, 1.0, u))
    return np.asarray(a**power * width * growth)


def _folded_integral(power: Array, a: Array, b: Array, fold: Array) -> Array:
    b = np.minimum(b, a + _FOLDS * fold)
    half = 0.5 * np.log(b / a)
    middle = np.log(a) + half
    total = np.zeros(np.broadcast_shapes(np.shape(power), np.shape(middle), np.shape(fold)))
    # node by node, so that long arrays need no array fifty times as long
    for node, weight in zip(_NODES.tolist(), _WEIGHTS.tolist(), strict=True):
        x = middle + node * half
        total += weight * np.exp(power * x - np.exp(x) / fold)
    return np.asarray(total * half)
