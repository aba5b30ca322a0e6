"""Distinct galaxies per bin, kept so that two counts can be joined without counting one twice.

A galaxy with two black holes has two rows, which may stand in two blocks of a stream. So each bin
keeps the identity of every galaxy in it: 9 bytes per galaxy and bin, 17 with weights.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array

__all__ = ["NO_USABLE_ROW", "OCCUPIED", "USABLE", "Galaxies", "Members"]

NO_USABLE_ROW, USABLE, OCCUPIED = range(3)
"""What is known of a galaxy; the highest of its rows holds."""


class Members(NamedTuple):
    """Distinct galaxies of one bin, ascending by `host`."""

    host: NDArray[np.uint64]
    level: NDArray[np.int8]
    weight: Array | None


@dataclass(frozen=True, eq=False)
class Galaxies:
    """Distinct galaxies of every bin.

    Attributes
    ----------
    parts : tuple of tuples of Members
        Per bin, sets that still have to be joined; each is more than twice the next, so that a
        long stream is not sorted again at every block.
    """

    parts: tuple[tuple[Members, ...], ...]

    @classmethod
    def of_rows(
        cls,
        cell: NDArray[Any],
        cells: int,
        host: NDArray[np.uint64],
        level: NDArray[np.int8],
        weight: Array | None,
    ) -> Galaxies:
        """Gather rows by bin.

        Parameters
        ----------
        cell : integer array
            Bin of each row, 0 to `cells` - 1.
        host, level, weight : arrays
            Galaxy, what the row says of it, and the row's weight, if any.
        """
        order = np.argsort(cell, kind="stable")
        ends = np.cumsum(np.bincount(cell, minlength=cells))
        parts: list[tuple[Members, ...]] = []
        start = 0
        for end in ends:
            rows = order[start:end]
            found = _distinct(host[rows], level[rows], None if weight is None else weight[rows])
            parts.append((found,) if rows.size else ())
            start = end
        return cls(tuple(parts))

    def __add__(self, other: Galaxies) -> Galaxies:
        return Galaxies(
            tuple(_joined((*a, *b)) for a, b in zip(self.parts, other.parts, strict=True))
        )

    def members(self) -> tuple[Members, ...]:
        """The distinct galaxies of each bin."""
        return tuple(_union(parts) for parts in self.parts)


def _joined(parts: Iterable[Members]) -> tuple[Members, ...]:
    kept: list[Members] = []
    for part in parts:
        kept.append(part)
        while len(kept) > 1 and kept[-2].host.size <= 2 * kept[-1].host.size:
            kept[-2:] = [_union(kept[-2:])]
    return tuple(kept)


def _union(parts: Iterable[Members]) -> Members:
    parts = tuple(parts)
    if len(parts) == 1:
        return parts[0]
    if not parts:
        return Members(np.empty(0, np.uint64), np.empty(0, np.int8), None)
    weights = [part.weight for part in parts if part.weight is not None]
    return _distinct(
        np.concatenate([part.host for part in parts]),
        np.concatenate([part.level for part in parts]),
        np.concatenate(weights) if weights else None,
    )


def _distinct(host: NDArray[np.uint64], level: NDArray[np.int8], weight: Array | None) -> Members:
    if host.size == 0:
        return Members(host, level, weight)
    order = np.argsort(host)
    host = host[order]
    first = np.flatnonzero(np.concatenate([[True], host[1:] != host[:-1]]))
    return Members(
        host[first],
        np.maximum.reduceat(level[order], first),
        # rows of one galaxy normally agree; the largest is the same in any order
        None if weight is None else np.maximum.reduceat(weight[order], first),
    )
