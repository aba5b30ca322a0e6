"""What the figures take from a screened table: fates, numbers and counts; the chain is not run."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array, Mask
from embersift.catalogue import Layout, Sources, column_names, layout, numbers
from embersift.columns import fate_column
from embersift.errors import CatalogueError, RecipeError, did_you_mean
from embersift.figures.style import power
from embersift.recipe import Observation, Recipe
from embersift.screening import fates_of_table, tally
from embersift.tallying import split_fate_column
from embersift.verdict import CRITERIA, DORMANT, FATES, VISIBLE

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["GROUPS", "Reading", "View", "group_of", "log10"]

GROUPS = ("dormant", "faint", "several", "underfloor", "outshone", "blended", "visible")
"""Fates as they are drawn, in the order of drawing: what matters most comes last, on top."""


def _group_name(code: int) -> str:
    fate = FATES[code]
    return fate if fate in GROUPS else ("several" if code > VISIBLE else "")


_GROUP_OF_CODE = np.array(
    [GROUPS.index(name) if (name := _group_name(code)) else -1 for code in range(len(FATES))],
    dtype=np.int8,
)
_BLENDED = 1 << CRITERIA.index("blended")


def group_of(codes: NDArray[np.int8]) -> NDArray[np.int8]:
    """Place in `GROUPS` of each fate; -1 for rows without a black hole or unusable ones."""
    return _GROUP_OF_CODE[codes]


def log10(values: Array) -> Array:
    """log10, NaN where there is none."""
    with np.errstate(divide="ignore", invalid="ignore"):
        result = np.log10(values)
    return np.where(np.isfinite(result), result, np.nan)


@dataclass(frozen=True, eq=False)
class Reading:
    """A screened table and its recipe, each column read once."""

    table: Any
    recipe: Recipe

    @classmethod
    def of(cls, screened: Any, recipe: Recipe | None) -> Reading:
        """A reading of a table; a reading is passed through."""
        return screened if isinstance(screened, cls) else cls(screened, recipe or Recipe())

    @cached_property
    def names(self) -> list[str]:
        return column_names(self.table)

    @cached_property
    def plan(self) -> Layout:
        from embersift.tables import units_of

        return layout(self.names, units_of(self.table), self.recipe, "the screened table")

    @cached_property
    def sources(self) -> Sources:
        return self.plan.take(self.table)

    @cached_property
    def weighted(self) -> bool:
        return "weight" in self.plan.columns

    @cached_property
    def _fates(self) -> dict[str, NDArray[np.int8]]:
        return {}

    @cached_property
    def _numbers(self) -> dict[str, Array]:
        return {}

    @cached_property
    def _counts(self) -> dict[str, pd.DataFrame]:
        return {}

    def fates(self, observation: str, threshold: float) -> NDArray[np.int8]:
        """Codes into `embersift.verdict.FATES`.

        Raises
        ------
        CatalogueError
            The table has no such verdict.
        """
        name = fate_column(observation, threshold)
        if name not in self._fates:
            self._require_verdict(name)
            self._fates.update(fates_of_table(self.table, [name], "the table"))
        return self._fates[name]

    def _require_verdict(self, name: str) -> None:
        if name in self.names:
            return
        there = [n for n in self.names if split_fate_column(n) is not None]
        if not there:
            fates_of_table(self.table, [], "the table")  # says what a screened table is
        raise CatalogueError(
            f"The table has no column {name}. Verdicts in it: {', '.join(there)}. Choose one of "
            "those observations and thresholds, or screen again with this one."
        )

    def column(self, name: str) -> Array:
        """A number column that the screening wrote."""
        if name not in self._numbers:
            if name not in self.names:
                raise CatalogueError(
                    f"The table has no column {name}, which the figure is drawn from. "
                    "`embersift screen` writes it; do not drop it from the screened table."
                )
            self._numbers[name] = numbers(self.table[name]).values
        return self._numbers[name]

    def counts(self, observation: str) -> pd.DataFrame:
        """The tally of one observation at every threshold of the table."""
        if observation not in self._counts:
            kept = [
                n
                for n in self.names
                if (found := split_fate_column(n)) is None or found[0] == observation
            ]
            self._counts[observation] = tally(self.table[kept], self.recipe)
        return self._counts[observation]

    def view(self, observation: str | None, threshold: float | None) -> View:
        """One observation and threshold; the recipe's first and its headline by default."""
        known = {o.name: o for o in self.recipe.observation}
        name = self.recipe.observation[0].name if observation is None else observation
        if name not in known:
            raise RecipeError(
                f"The recipe has no observation {name!r}. {did_you_mean(name, known)}"
            )
        factor = self.recipe.screen.headline if threshold is None else float(threshold)
        self._require_verdict(fate_column(name, factor))
        return View(self, known[name], factor)


class View(NamedTuple):
    """One way of looking at a reading."""

    reading: Reading
    observation: Observation
    threshold: float

    @property
    def codes(self) -> NDArray[np.int8]:
        return self.reading.fates(self.observation.name, self.threshold)

    @property
    def accreting(self) -> Mask:
        return self.codes >= VISIBLE

    @property
    def holes(self) -> Mask:
        return self.codes >= DORMANT

    @property
    def blended(self) -> Mask:
        codes = self.codes
        return (codes > VISIBLE) & (((codes - VISIBLE) & _BLENDED) > 0)

    @property
    def flux_counted(self) -> Array:
        """The flux that is compared with the limit."""
        name = self.observation.name
        flux = self.reading.column(f"flux_agn_{name}")
        if self.reading.recipe.screen.flux_of == "total":
            flux = flux + self.reading.column(f"flux_background_{name}")
        return flux

    @property
    def excess(self) -> Array:
        return self.reading.column(f"excess_{self.observation.name}")

    @property
    def thresholds(self) -> tuple[float, ...]:
        """Every threshold that the table has a verdict for."""
        found = [split_fate_column(n) for n in self.reading.names]
        return tuple(sorted(t for o, t in filter(None, found) if o == self.observation.name))

    def words(self, *, threshold: bool = True) -> str:
        """What is looked at, for the line above the axes."""
        limit = self.observation.flux_limit
        words = f"{self.observation.name}: {self.observation.band} observed, " + (
            f"limit {power(limit)} erg s$^{{-1}}$ cm$^{{-2}}$" if limit > 0.0 else "no flux limit"
        )
        return words + (f", threshold {self.threshold:g}" if threshold else "")
