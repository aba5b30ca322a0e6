"""From criteria to fates: one small integer per row, observation and threshold.

A fate is ``unusable``, else ``no_black_hole``, else ``dormant``, else ``visible`` when no criterion
fails, else the failed ones joined by ``+``. A code above 2 is 3 plus one bit per failed criterion,
so a fate can be taken apart again without text.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array, Mask

__all__ = [
    "CRITERIA",
    "DORMANT",
    "FATES",
    "NO_BLACK_HOLE",
    "UNUSABLE_ROW",
    "VISIBLE",
    "fate_code",
    "judge",
    "judge_thresholds",
]

CRITERIA = ("faint", "underfloor", "outshone", "blended")
"""In the order of their bits, which is the order of the joined names."""

UNUSABLE_ROW, NO_BLACK_HOLE, DORMANT, VISIBLE = range(4)


def _joined(bits: int) -> str:
    return "+".join(name for i, name in enumerate(CRITERIA) if bits >> i & 1)


FATES: tuple[str, ...] = (
    "unusable",
    "no_black_hole",
    "dormant",
    "visible",
    *(_joined(bits) for bits in range(1, 1 << len(CRITERIA))),
)

_CODES = {fate: code for code, fate in enumerate(FATES)}


def fate_code(fate: str) -> int:
    """The code of a fate.

    Examples
    --------
    >>> FATES[fate_code("faint+outshone")]
    'faint+outshone'
    """
    return _CODES[fate]


def judge_thresholds(
    *,
    usable: Mask,
    has_hole: Mask,
    accreting: Mask,
    flux_counted: Array,
    flux_limit: float,
    lx_agn: Array,
    floor: float,
    excess: Array,
    thresholds: Sequence[float],
    blended: Mask | None = None,
) -> list[NDArray[np.int8]]:
    """Fates of one observation at several thresholds; what they share is worked out once.

    Parameters
    ----------
    usable, has_hole, accreting : bool arrays
        What is known of each row.
    flux_counted : array
        Flux that is compared with `flux_limit` [erg/s/cm2].
    lx_agn : array
        Intrinsic L(2-10 keV) that is compared with `floor` [erg/s]; a floor of 0 is no floor.
    excess : array
        What is compared with each threshold.
    thresholds : sequence of float
        Factors above the background.
    blended : bool array, optional
        Rows whose light falls into the circle of a brighter hole of the same galaxy.

    Returns
    -------
    list of int8 arrays
        Codes into `FATES`, one array per threshold. Equality passes. An accreting row whose
        compared numbers are missing cannot be judged and comes out unusable.
    """
    base = np.full(usable.shape, VISIBLE, dtype=np.int8)
    if flux_limit > 0.0:
        base += flux_counted < flux_limit
    if floor > 0.0:
        base += (lx_agn < floor).view(np.int8) << 1
    if blended is not None:
        base += blended.view(np.int8) << 3
    judged = usable & has_hole & accreting
    unknown = judged & (np.isnan(flux_counted) | np.isnan(lx_agn) | np.isnan(excess))
    other = np.where(has_hole, np.int8(DORMANT), np.int8(NO_BLACK_HOLE))
    other[~usable | unknown] = UNUSABLE_ROW
    judged &= ~unknown
    fates = []
    for threshold in thresholds:
        codes = base + ((excess < threshold).view(np.int8) << 2)
        fates.append(np.where(judged, codes, other))
    return fates


def judge(
    *,
    usable: Mask,
    has_hole: Mask,
    accreting: Mask,
    flux_counted: Array,
    flux_limit: float,
    lx_agn: Array,
    floor: float,
    excess: Array,
    threshold: float,
    blended: Mask | None = None,
) -> NDArray[np.int8]:
    """`judge_thresholds` for a single threshold."""
    (codes,) = judge_thresholds(
        usable=usable,
        has_hole=has_hole,
        accreting=accreting,
        flux_counted=flux_counted,
        flux_limit=flux_limit,
        lx_agn=lx_agn,
        floor=floor,
        excess=excess,
        thresholds=[threshold],
        blended=blended,
    )
    return codes
