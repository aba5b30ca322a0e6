"""What can be wrong with a row, as one bit each, so that millions of rows are marked cheaply.

A problem either makes the row `unusable` (a value that the verdict needs is missing or
impossible) or is a note (the verdict stands, and the user should know).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["PROBLEMS", "UNUSABLE", "Bits", "Problem", "bit", "problem_counts", "problem_text"]

Bits = NDArray[np.uint64]


@dataclass(frozen=True)
class Problem:
    column: str
    reason: str
    unusable: bool

    def __str__(self) -> str:
        return f"{self.column}: {self.reason}"


def _value(column: str, *reasons: str, unusable: bool = True) -> list[Problem]:
    return [Problem(column, reason, unusable) for reason in reasons]


PROBLEMS: tuple[Problem, ...] = (
    *_value("mstar", "missing", "not a number", "not finite", "not positive"),
    *_value("sfr", "missing", "not a number", "not finite", "negative"),
    *_value("mbh", "not a number", "not finite", "negative", "below 10 Msun"),
    *_value("mdot", "missing", "not a number", "not finite", "negative"),
    *_value("redshift", "missing", "not a number", "not finite", "negative"),
    *_value("redshift", "zero without a distance", "above 1000"),
    *_value("distance", "missing", "not a number", "not finite", "not positive"),
    *_value("distance", "beyond redshift 1000"),
    *_value("nh", "not a number", "not finite", "negative"),
    # from here on notes: the verdict stands
    *_value("mdot", "positive without a black hole", unusable=False),
    *_value("distance", "differs from that of the redshift", unusable=False),
    *_value("redshift", "not usable, taken from the distance", unusable=False),
    *_value("oh12", "missing", "not a number", "not finite", unusable=False),
    *_value("metallicity", "missing", "not a number", "not finite", unusable=False),
    *_value("metallicity", "not positive", unusable=False),
    *_value("nh", "missing, taken as 0", unusable=False),
    *_value("nh", "above 1e24 cm-2, photoelectric absorption only", unusable=False),
    *_value("offset", "missing", "not a number", "not finite", "negative", unusable=False),
    *_value("rhalf", "missing", "not a number", "not finite", "not positive", unusable=False),
    *_value("weight", "missing, counts as 0", "not a number, counts as 0", unusable=False),
    *_value("weight", "not finite, counts as 0", "negative, counts as 0", unusable=False),
)

_INDEX = {(p.column, p.reason): i for i, p in enumerate(PROBLEMS)}
assert len(PROBLEMS) == len(_INDEX) <= 64

UNUSABLE = np.uint64(sum(1 << i for i, p in enumerate(PROBLEMS) if p.unusable))


def bit(column: str, reason: str) -> np.uint64:
    """The bit that stands for one column and reason."""
    return np.uint64(1 << _INDEX[column, reason])


def _of(bits: int) -> list[Problem]:
    return [problem for i, problem in enumerate(PROBLEMS) if bits >> i & 1]


def problem_text(bits: int) -> str:
    """The text of the column `problem` for one row's bits.

    Examples
    --------
    >>> problem_text(int(bit("mstar", "missing") | bit("oh12", "missing")))
    'mstar: missing; oh12: missing'
    """
    return "; ".join(str(problem) for problem in _of(bits))


def problem_counts(bits: Bits) -> list[tuple[Problem, int, NDArray[np.intp]]]:
    """Each problem that occurs: how many rows have it, and the first three of them (from 0)."""
    present = int(np.bitwise_or.reduce(bits, initial=np.uint64(0)))
    found = []
    for problem in _of(present):
        rows = np.flatnonzero(bits & bit(problem.column, problem.reason))
        found.append((problem, rows.size, rows[:3]))
    return found
