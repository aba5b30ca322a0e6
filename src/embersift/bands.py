"""Energy bands in keV; rest frame or observed frame as the context says."""

from __future__ import annotations

from typing import NamedTuple

__all__ = ["HARD", "SOFT", "Band"]


class Band(NamedTuple):
    """An energy band.

    Examples
    --------
    >>> str(Band(0.5, 8))
    '0.5-8 keV'
    """

    low: float
    high: float

    def __str__(self) -> str:
        return f"{self.low:g}-{self.high:g} keV"


HARD = Band(2.0, 10.0)
SOFT = Band(0.5, 2.0)
