"""Which targets first: odds of success per exposure, for an assumed Eddington-ratio distribution.

The odds say how likely a black hole of that galaxy shines above its reach, if black holes accrete
as assumed. Where the reach is marked `not_monotonic` they are a lower bound.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from embersift.arrays import Array
from embersift.catalogue import Sources
from embersift.chain import Chain
from embersift.errors import RecipeError, did_you_mean
from embersift.intervals import ONE_SIGMA_INSIDE
from embersift.inversion import ABOVE, BELOW, Inverse
from embersift.obscuration import NhTable, average_over_nh
from embersift.reach import SET_BY, Reach, checked_exposure, reach

__all__ = [
    "DISTRIBUTIONS",
    "Distribution",
    "LogNormal",
    "LogUniform",
    "PowerLaw",
    "Ranking",
    "Successes",
    "expected_successes",
    "odds_of_success",
    "odds_over_nh",
    "rank",
    "read_distribution",
    "target_table",
]


class Distribution(Protocol):
    """How Eddington ratios are assumed to be distributed."""

    def survival(self, ratio: ArrayLike) -> Array:
        """Probability of an Eddington ratio of at least `ratio`."""


def _cuts(low: float, high: float, what: str) -> None:
    if not (0.0 < low < high < math.inf):
        raise RecipeError(
            f"{what}: the Eddington ratios run from {low:g} to {high:g}; "
            "the lower must be above 0 and below the upper."
        )


def _kept(survival: Array, ratio: ArrayLike) -> Array:
    return np.where(np.isnan(np.asarray(ratio, dtype=float)), np.nan, survival)


@dataclass(frozen=True)
class LogUniform:
    """The same number per dex between two Eddington ratios."""

    low: float
    high: float

    def __post_init__(self) -> None:
        _cuts(self.low, self.high, "log-uniform")

    def survival(self, ratio: ArrayLike) -> Array:
        inside = np.clip(np.asarray(ratio, dtype=float), self.low, self.high)
        return _kept(np.log(self.high / inside) / math.log(self.high / self.low), ratio)


@dataclass(frozen=True)
class LogNormal:
    """A Gaussian in log10 of the Eddington ratio."""

    median: float
    sigma_dex: float

    def __post_init__(self) -> None:
        if not (0.0 < self.median < math.inf and 0.0 < self.sigma_dex < math.inf):
            raise RecipeError(
                f"log-normal: median {self.median:g} and sigma {self.sigma_dex:g} dex; "
                "both must be above 0."
            )

    def survival(self, ratio: ArrayLike) -> Array:
        from scipy.special import ndtr

        values = np.asarray(ratio, dtype=float)
        with np.errstate(divide="ignore"):
            distance = np.log10(np.maximum(values, 0.0) / self.median) / self.sigma_dex
        return _kept(ndtr(-distance), ratio)


@dataclass(frozen=True)
class PowerLaw:
    """Number per dex proportional to ratio^slope between two cuts; slope 0 is log-uniform."""

    slope: float
    low: float
    high: float

    def __post_init__(self) -> None:
        _cuts(self.low, self.high, "power-law")
        if not abs(self.slope) < 20.0:
            raise RecipeError(f"power-law: a slope of {self.slope:g} is not between -20 and 20.")

    def survival(self, ratio: ArrayLike) -> Array:
        if abs(self.slope) < 1e-12:
            return LogUniform(self.low, self.high).survival(ratio)
        inside = np.clip(np.asarray(ratio, dtype=float), self.low, self.high)
        # from the upper cut down, so that the rare bright end keeps its digits
        above = np.expm1(-self.slope * np.log(self.high / inside))
        return _kept(above / math.expm1(-self.slope * math.log(self.high / self.low)), ratio)


DISTRIBUTIONS: Mapping[str, tuple[Any, str]] = {
    "log-uniform": (LogUniform, "log-uniform(low, high)"),
    "log-normal": (LogNormal, "log-normal(median, sigma_dex)"),
    "power-law": (PowerLaw, "power-law(slope, low, high)"),
}
"""The distributions by name, and how they are written."""


def read_distribution(text: str) -> Distribution:
    """Read a distribution as it is written in a recipe.

    Raises
    ------
    RecipeError
        An unknown name, a wrong number of values, a value that is not possible.

    Examples
    --------
    >>> read_distribution("log-uniform(1e-5, 1)")
    LogUniform(low=1e-05, high=1.0)
    """
    shown = "; ".join(form for _, form in DISTRIBUTIONS.values())
    match = re.fullmatch(r"\s*([\w-]+)\s*\(([^()]*)\)\s*", text)
    if match is None:
        raise RecipeError(f"{text!r} is not a distribution of Eddington ratios. Write {shown}.")
    name, inner = match.groups()
    if name not in DISTRIBUTIONS:
        raise RecipeError(f"there is no distribution {name!r}. {did_you_mean(name, DISTRIBUTIONS)}")
    make, form = DISTRIBUTIONS[name]
    try:
        values = [float(value) for value in inner.split(",")]
    except ValueError:
        raise RecipeError(f"{text!r}: numbers are expected, as in {form}.") from None
    if len(values) != form.count(",") + 1:
        raise RecipeError(f"{text!r} has {len(values)} values; write {form}.")
    made: Distribution = make(*values)
    return made


def odds_of_success(reached: Reach, distribution: Distribution) -> Array:
    """Probability that each target would pass; NaN where the reach is not known."""
    odds = distribution.survival(reached.eddington)
    odds[reached.reason == BELOW] = 1.0
    odds[reached.reason == ABOVE] = 0.0
    return odds


def odds_over_nh(
    sources: Sources,
    chain: Chain,
    distribution: Distribution,
    table: NhTable,
    *,
    mbh: ArrayLike | None = None,
    nodes: int = 8,
) -> dict[tuple[str, float], Array]:
    """`odds_of_success` averaged over a table of intrinsic columns, whatever `sources.nh` says."""
    inverse = Inverse(chain)
    keys: list[tuple[str, float]] = []

    def odds(nh: float) -> Array:
        found = reach(
            sources._replace(nh=np.full(sources.nh.shape, nh)), chain, mbh=mbh, inverse=inverse
        )
        keys[:] = list(found)
        return np.stack([odds_of_success(one, distribution) for one in found.values()])

    averaged = average_over_nh(odds, table, nodes)
    return dict(zip(keys, averaged, strict=True))


class Ranking(NamedTuple):
    """Targets from the best down; `order` holds their rows, the rest are in that order.

    Targets with unknown odds come last and add nothing to `expected`.
    """

    order: NDArray[np.intp]
    odds: Array
    exposure: Array
    odds_per_exposure: Array
    expected: Array  # successes among the targets down to here


def rank(odds: ArrayLike, exposure: ArrayLike) -> Ranking:
    """Order targets by odds per exposure; equals stay in the order of the table.

    Parameters
    ----------
    odds : array
        Probability of success per target.
    exposure : float or array
        Exposure of every target, or of each.

    Raises
    ------
    RecipeError
        An exposure that is not above 0, or odds outside 0 to 1.
    """
    chances = np.atleast_1d(np.asarray(odds, dtype=float))
    if np.any((chances < 0.0) | (chances > 1.0)):
        raise RecipeError("the odds of a target must lie between 0 and 1.")
    given = checked_exposure(exposure)
    if given.size not in (1, chances.size):
        raise RecipeError(
            f"{given.size} exposures were given for {chances.size} targets; "
            "give one for all, or one for each."
        )
    times = np.broadcast_to(given, chances.shape)
    per_exposure = chances / times
    order = np.argsort(-per_exposure, kind="stable")  # NaN sorts last
    sorted_odds = chances[order]
    return Ranking(
        order,
        sorted_odds,
        times[order],
        per_exposure[order],
        np.cumsum(np.nan_to_num(sorted_odds, nan=0.0)),
    )


class Successes(NamedTuple):
    """Expected number of successes among the first `targets`, and its interval."""

    targets: int
    expected: float
    low: int
    high: int


def expected_successes(
    odds: ArrayLike, first: Sequence[int], level: float = ONE_SIGMA_INSIDE
) -> list[Successes]:
    """How many of the first N targets should succeed.

    Parameters
    ----------
    odds : array
        Odds of independent targets, best first; NaN counts as 0.
    first : sequence of int
        The numbers of targets N; those beyond the list mean all of it.
    level : float
        Probability inside the interval, at least: counts are whole numbers.

    Returns
    -------
    list of Successes
        Ascending in N. The interval leaves at most (1 - level) / 2 on either side, by the exact
        distribution of a sum of unequal coins (Poisson binomial).

    Raises
    ------
    RecipeError
        A level outside 0 to 1, or a number of targets below 1.
    """
    from embersift.poisson_binomial import poisson_binomial_interval

    if any(number < 1 for number in first):
        raise RecipeError(f"{min(first)} targets cannot be counted; give 1 or more.")
    chances = np.nan_to_num(np.atleast_1d(np.asarray(odds, dtype=float)), nan=0.0)
    found = []
    for number in sorted({min(int(number), chances.size) for number in first}):
        part = chances[:number]
        low, high = poisson_binomial_interval(part, level)
        found.append(Successes(number, math.fsum(part), low, high))
    return found


def target_table(
    ranking: Ranking,
    reached: Reach,
    ids: Sequence[Any],
    passed_through: Mapping[str, Any] | None = None,
) -> dict[str, NDArray[Any]]:
    """The ranked targets as columns: a target list to start a proposal from.

    Parameters
    ----------
    ranking : Ranking
        From `rank`.
    reached : Reach
        Says what sets the reach of each row.
    ids : sequence
        Id per row of the catalogue.
    passed_through : mapping, optional
        Further columns of the catalogue, such as coordinates, by name.
    """
    order = ranking.order
    columns: dict[str, NDArray[Any]] = {
        "rank": np.arange(1, order.size + 1),
        "id": np.asarray(ids)[order],
    }
    for name, values in (passed_through or {}).items():
        columns[name] = np.asarray(values)[order]
    return columns | {
        "exposure": ranking.exposure,
        "set_by": np.array(SET_BY)[reached.set_by[order]],
        "reach_eddington": reached.eddington[order],
        "odds": ranking.odds,
        "odds_per_exposure": ranking.odds_per_exposure,
        "expected": ranking.expected,
    }
