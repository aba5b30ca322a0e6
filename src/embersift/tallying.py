"""Counts and hidden fractions per bin, from fates alone.

Tallies add up exactly: a stream cut anywhere, read in any order and counted by any number of
workers gives the tally of the whole, to the last bit. Counts are integers; sums of weights (and of
their squares, each rounded once, row by row) are exact, see `embersift.exact_sums`.

| slot | holds |
|---|---|
| below, above | values outside the edges |
| low-high | low <= value < high; the last bin includes its upper edge |
| no value | rows without a number |
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import reduce
from operator import add
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from embersift.arrays import Array
from embersift.bins import checked_edges, slots
from embersift.errors import CatalogueError, RecipeError
from embersift.exact_sums import LARGEST, SMALLEST, Exact, exact_sums, no_sums
from embersift.galaxies import OCCUPIED, Galaxies
from embersift.tally_table import tally_frame, to_records
from embersift.tally_text import lines, where_hidden_lines
from embersift.verdict import FATES

if TYPE_CHECKING:
    import pandas as pd

__all__ = [
    "Tally",
    "count",
    "format_threshold",
    "lines",
    "split_fate_column",
    "to_records",
    "where_hidden_lines",
]

ALL = "all"
"""Label of the one group of a tally that is not split."""

_BLOCK = 1 << 17  # rows per step: its few arrays fit the cache
_FATE_COLUMN = re.compile(r"fate_(?P<observation>.+)_(?P<threshold>[0-9][0-9.e+-]*)", re.DOTALL)


@dataclass(frozen=True, eq=False)
class Tally:
    """What was counted; add two for the tally of both.

    Attributes
    ----------
    by : str
        Quantity that is binned.
    edges : tuple of float
        Bin edges, ascending.
    groups : tuple of str
        Labels of the split; ``("all",)`` without one.
    columns : tuple of str
        Fate columns, one per observation and threshold.
    rows : int array, shape (columns, groups, slots, fates)
        Rows; slots are below, the bins, above, no value.
    weights, squares : object arrays of that shape, or None
        Exact sums of weights and of squared weights.
    galaxies : Galaxies or None
        Distinct galaxies by group and slot: the only part that grows with the catalogue.
    """

    by: str
    edges: tuple[float, ...]
    groups: tuple[str, ...]
    columns: tuple[str, ...]
    rows: NDArray[np.int64]
    weights: Exact | None
    squares: Exact | None
    galaxies: Galaxies | None

    def __add__(self, other: Tally) -> Tally:
        """The tally of both.

        Raises
        ------
        RecipeError
            The two do not count the same thing in the same bins.
        """
        mine, theirs = self._plan(), other._plan()
        for what, here in mine.items():
            if theirs[what] != here:
                raise RecipeError(
                    f"Two tallies cannot be added: one has {what} {here}, the other "
                    f"{theirs[what]}. Count both with the same choices."
                )
        galaxies = None
        if self.galaxies is not None and other.galaxies is not None:
            galaxies = self.galaxies + other.galaxies
        return replace(
            self,
            rows=self.rows + other.rows,
            weights=_sum(self.weights, other.weights),
            squares=_sum(self.squares, other.squares),
            galaxies=galaxies,
        )

    @staticmethod
    def merge(tallies: Iterable[Tally]) -> Tally:
        """The tally of all (at least one)."""
        return reduce(add, tallies)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Tally):
            return NotImplemented
        return (
            self._plan() == other._plan()
            and np.array_equal(self.rows, other.rows)
            and np.array_equal(self.weights, other.weights)  # type: ignore[arg-type]
            and np.array_equal(self.squares, other.squares)  # type: ignore[arg-type]
            and _same_galaxies(self.galaxies, other.galaxies)
        )

    __hash__ = None  # type: ignore[assignment]

    def _plan(self) -> dict[str, Any]:
        return {
            "a count by": self.by,
            "edges": self.edges,
            "groups": self.groups,
            "fate columns": self.columns,
            "weights:": self.weights is not None,
            "galaxies told apart:": self.galaxies is not None,
        }

    def table(self, *, interval: str = "wilson", level: float | None = None) -> pd.DataFrame:
        """Counts, fractions and intervals as a tidy table.

        Parameters
        ----------
        interval : {"wilson", "jeffreys"}
            See `embersift.intervals.binomial_interval`.
        level : float, optional
            Probability inside the interval; one sigma by default.

        Returns
        -------
        pandas.DataFrame
            One row per fate column, group and slot, empty ones included. In a weighted tally
            every count but ``rows`` is a sum of weights.

            | column | meaning |
            |---|---|
            | observation, threshold, split | what was counted |
            | by, bin, low, high | quantity, and the slot: label and edges |
            | rows | rows of the table |
            | galaxies | distinct hosts, or rows without a host column |
            | unusable, no_black_hole, black_holes | rows apart; the first two have no part below |
            | accreting, visible, hidden | of the black holes; hidden = black_holes - visible |
            | hidden_fraction, hidden_low, hidden_high | hidden / black_holes, and its interval |
            | hidden_fraction_accreting, hidden_accreting_low, _high | among accreting ones |
            | occupied | galaxies with a black hole (NaN without a host column) |
            | occupation, occupation_low, _high | their share of galaxies with a usable row |
            | n_effective | black holes, by Kish's effective number if weighted |
            | dormant, faint, ..., faint+underfloor+outshone | where the hidden went, each once |
            | interval, level | how the intervals were made |

            The causes that name ``blended`` are there when any row has that fate.
        """
        return tally_frame(self, [_parsed(name) for name in self.columns], interval, level)


def count(
    values: ArrayLike,
    fates: Mapping[str, NDArray[np.int8]],
    edges: ArrayLike,
    *,
    by: str = "mstar",
    weight: ArrayLike | None = None,
    host: ArrayLike | None = None,
    split: tuple[ArrayLike, Sequence[str]] | None = None,
    first_row: int = 0,
) -> Tally:
    """Count a block of rows.

    Parameters
    ----------
    values : array
        Quantity that is binned, in the unit of the edges (log10 of a mass, by common practice).
    fates : mapping of str to int8 array
        Codes into `embersift.verdict.FATES` by fate column (``fate_NAME_T``).
    edges : array
        Bin edges, ascending, at least two.
    by : str
        Name of the quantity, for the table.
    weight : array, optional
        Weight of each row: 0, or between 1e-150 and 1e150.
    host : integer array, optional
        Galaxy of each row, as a 64-bit hash or code: equal numbers are one galaxy. A galaxy whose
        rows fall into several bins counts in each; its weight is the largest of its rows there.
    split : (integer array, sequence of str), optional
        Group of each row, and the label of each group.
    first_row : int
        Where the block begins in its table, so that messages name the right rows.

    Raises
    ------
    RecipeError
        Edges that do not ascend, or a column that is no fate column.
    CatalogueError
        A weight that is negative or no finite number; the message names the rows.

    Notes
    -----
    Two of N galaxies share a 64-bit hash with probability N^2 / 2^65: 3e-4 for 1e8 galaxies.

    Examples
    --------
    >>> counted = count([8.2, 8.7], {"fate_any_2": np.array([3, 2], np.int8)}, [8, 9])
    >>> counted.table().query("bin == '8-9'")[["black_holes", "visible", "dormant"]].values.tolist()
    [[2, 1, 1]]
    """
    data = np.asarray(values, dtype=float)
    bounds = checked_edges(edges)
    columns = {name: _codes(name, codes, data.shape) for name, codes in fates.items()}
    weights = None if weight is None else _checked_weights(weight, data.shape, first_row)
    group, groups = (None, (ALL,)) if split is None else _checked_split(split, data.shape)
    per_group = len(bounds) + 2
    cells = len(groups) * per_group
    kept = None if host is None else np.empty(data.size, np.int16 if cells < 2**15 else np.int64)
    rows = np.zeros((len(columns), cells * len(FATES)), dtype=np.int64)
    sums = [no_sums(rows.shape[1]) for _ in columns]
    squares = [no_sums(rows.shape[1]) for _ in columns]
    for start in range(0, data.size, _BLOCK):
        part = slice(start, start + _BLOCK)
        cell = slots(data[part], bounds)
        if group is not None:
            cell += group[part] * per_group
        if kept is not None:
            kept[part] = cell
        cell *= len(FATES)
        for i, codes in enumerate(columns.values()):
            place = cell + codes[part]
            rows[i] += np.bincount(place, minlength=rows.shape[1])
            if weights is not None:
                w = weights[part]
                sums[i] += exact_sums(w, place, rows.shape[1])
                squares[i] += exact_sums(w * w, place, rows.shape[1])
    shape = (len(columns), len(groups), per_group, len(FATES))
    galaxies = None
    if kept is not None:
        best = np.zeros(data.shape, dtype=np.int8)
        for codes in columns.values():
            np.maximum(best, codes, out=best)
        np.minimum(best, np.int8(OCCUPIED), out=best)
        galaxies = Galaxies.of_rows(kept, cells, _hosts(host, data.shape), best, weights)
    return Tally(
        by=by,
        edges=bounds,
        groups=groups,
        columns=tuple(columns),
        rows=rows.reshape(shape),
        weights=None if weights is None else np.array(sums, dtype=object).reshape(shape),
        squares=None if weights is None else np.array(squares, dtype=object).reshape(shape),
        galaxies=galaxies,
    )


def split_fate_column(name: str) -> tuple[str, float] | None:
    """Observation and threshold of a fate column; None for any other column.

    Examples
    --------
    >>> split_fate_column("fate_very_deep_2.5")
    ('very_deep', 2.5)
    >>> split_fate_column("fate_of_the_galaxy") is None
    True
    """
    found = _FATE_COLUMN.fullmatch(name)
    if found is None:
        return None
    try:
        threshold = float(found["threshold"])
    except ValueError:
        return None
    # 2 and 2.0 would be two columns of one threshold
    if threshold <= 0.0 or format_threshold(threshold) != found["threshold"]:
        return None
    return found["observation"], threshold


def format_threshold(threshold: float) -> str:
    """The threshold as it stands in column names.

    Examples
    --------
    >>> format_threshold(1.0), format_threshold(2.5)
    ('1', '2.5')
    """
    return format(threshold, ".10g")


def _parsed(name: str) -> tuple[str, float]:
    found = split_fate_column(name)
    if found is None:
        raise RecipeError(
            f"{name!r} is no fate column; those are named fate_NAME_T, such as fate_any_2."
        )
    return found


def _checked_weights(weight: ArrayLike, shape: tuple[int, ...], first_row: int) -> Array:
    weights = np.asarray(weight, dtype=float)
    _same_shape("weight", weights, shape)
    good = (weights >= SMALLEST) & (weights <= LARGEST)
    good |= weights == 0.0
    bad = np.flatnonzero(~good)
    if bad.size:
        rows = ", ".join(f"row {first_row + int(i) + 1}: {weights[i]:g}" for i in bad[:3])
        raise CatalogueError(
            f"weight: {bad.size:,} row{'' if bad.size == 1 else 's'} cannot be counted "
            f"({rows}{', ...' if bad.size > 3 else ''}). A weight is 0, or a number between "
            f"{SMALLEST:g} and {LARGEST:g}; set it to 0 to leave a row out."
        )
    return weights


def _checked_split(
    split: tuple[ArrayLike, Sequence[str]], shape: tuple[int, ...]
) -> tuple[NDArray[np.intp], tuple[str, ...]]:
    group, labels = np.asarray(split[0], dtype=np.intp), tuple(split[1])
    _same_shape("split", group, shape)
    if group.size and not 0 <= int(group.min()) <= int(group.max()) < len(labels):
        raise ValueError(f"split: codes must be 0 to {len(labels) - 1}, one per label")
    return group, labels


def _codes(name: str, codes: NDArray[np.int8], shape: tuple[int, ...]) -> NDArray[np.int8]:
    _parsed(name)
    array = np.asarray(codes)
    _same_shape(name, array, shape)
    if array.size and not 0 <= int(array.min()) <= int(array.max()) < len(FATES):
        raise ValueError(f"{name}: codes must be 0 to {len(FATES) - 1}")
    return array.astype(np.int8, copy=False)


def _hosts(host: ArrayLike | None, shape: tuple[int, ...]) -> NDArray[np.uint64]:
    array = np.asarray(host)
    _same_shape("host", array, shape)
    if array.dtype.kind not in "iu":
        raise ValueError("host: integers are needed (hashes or codes)")
    return array.astype(np.uint64)


def _same_shape(what: str, array: NDArray[Any], shape: tuple[int, ...]) -> None:
    if array.shape != shape:
        raise ValueError(f"{what}: shape {array.shape} where the values have {shape}")


def _sum(one: Exact | None, other: Exact | None) -> Exact | None:
    return None if one is None or other is None else one + other


def _same_galaxies(one: Galaxies | None, other: Galaxies | None) -> bool:
    if one is None or other is None:
        return one is other
    return all(
        np.array_equal(a, b) if a is not None and b is not None else a is b
        for mine, theirs in zip(one.members(), other.members(), strict=True)
        for a, b in zip(mine, theirs, strict=True)
    )
