"""Numbers on the sky: from visible rows of a simulated volume to what a survey should find.

The rows are a snapshot; the survey's shell is taken to be filled like it. The interval is that of
the number of rows, so it says how well the catalogue knows the mean; cosmic variance is not in it.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from embersift.arrays import Array, Mask
from embersift.bins import checked_edges, slots
from embersift.counts import ONE_SIGMA, poisson_interval
from embersift.errors import RecipeError
from embersift.sky.distance import HIGHEST_REDSHIFT, FlatUniverse

__all__ = ["WHOLE_SKY", "SurveyYield", "survey_volume", "survey_yield"]

WHOLE_SKY = 4.0 * math.pi * (180.0 / math.pi) ** 2
"""The whole sky [deg2]."""


class SurveyYield(NamedTuple):
    """Per bin: visible rows, expected number on the survey's area, and its limits."""

    edges: tuple[float, ...]
    rows: Array
    expected: Array
    low: Array
    high: Array


def survey_volume(area: float, z_low: float, z_high: float, universe: FlatUniverse) -> float:
    """Comoving volume [Mpc3] of a redshift shell on an area of the sky [deg2].

    Raises
    ------
    RecipeError
        An area that is not above 0 or larger than the sky; a redshift range that is upside down.
    """
    if not 0.0 < area <= WHOLE_SKY * (1.0 + 1e-3):
        raise RecipeError(
            f"the survey's area is {area:g} deg2; it must be above 0 and at most the whole sky, "
            f"{WHOLE_SKY:.0f}."
        )
    if not 0.0 <= z_low < z_high <= HIGHEST_REDSHIFT:
        raise RecipeError(
            f"the survey's redshifts run from {z_low:g} to {z_high:g}; the lower comes first, "
            f"is not negative, and neither is above {HIGHEST_REDSHIFT:g}."
        )
    z = np.array([z_low, z_high])
    comoving = universe.luminosity_distance(z) / (1.0 + z)
    return float(
        min(area / WHOLE_SKY, 1.0) * 4.0 * math.pi / 3.0 * (comoving[1] ** 3 - comoving[0] ** 3)
    )


def survey_yield(
    values: Array,
    visible: Mask,
    edges: ArrayLike,
    *,
    area: float,
    redshifts: tuple[float, float],
    universe: FlatUniverse,
    box: float | None = None,
    volume_per_row: ArrayLike | None = None,
    weight: ArrayLike | None = None,
    level: float = ONE_SIGMA,
) -> SurveyYield:
    """Expected number of visible sources on the sky, per bin.

    Parameters
    ----------
    values : array
        What is binned: log10 of a mass, in the unit of `edges`.
    visible : bool array
        Rows that pass.
    edges : sequence of float
        Bin edges.
    area : float
        Area of the survey [deg2].
    redshifts : (float, float)
        The shell that the survey covers.
    universe : FlatUniverse
        Cosmology of the run.
    box : float, optional
        Side of the cubic volume that the catalogue fills [comoving Mpc]; or
    volume_per_row : float or array, optional
        Comoving volume [Mpc3] that each row stands for (1 / number density).
    weight : array, optional
        Rows count as many times; not negative.
    level : float
        One-sided confidence of either limit.

    Returns
    -------
    SurveyYield
        A row counts survey volume / its volume. The limits are Poisson limits on the number of
        rows (the effective number where they do not count alike), scaled; an empty bin has the
        scale of the row that counts most.

    Raises
    ------
    RecipeError
        A volume that is not above 0, both or neither of `box` and `volume_per_row`, and what
        `survey_volume` and `embersift.counts.poisson_interval` refuse.
    """
    bounds = checked_edges(edges)
    shell = survey_volume(area, *redshifts, universe)
    if (box is None) == (volume_per_row is None):
        raise RecipeError(
            "give either the side of the catalogue's box [comoving Mpc] or the comoving volume "
            "per row [Mpc3], and not both."
        )
    filled = np.asarray(box, dtype=float) ** 3 if box is not None else np.asarray(volume_per_row)
    # rows that are not seen need no volume
    filled = np.broadcast_to(filled.astype(float), values.shape)
    wrong = ~(filled > 0.0) & visible
    if wrong.any() or (box is not None and not box > 0.0):
        what = "box" if box is not None else "volume_per_row"
        raise RecipeError(f"{what}: a volume must be above 0 (row {int(np.argmax(wrong))} is not).")
    each = shell / np.where(visible, filled, np.inf)
    heaviest = float(each.max(initial=0.0)) if box is None else shell / float(box or 1.0) ** 3
    if weight is not None:
        weights = np.broadcast_to(np.asarray(weight, dtype=float), values.shape)
        if np.any(weights < 0.0):
            raise RecipeError("weight: a row cannot count a negative number of times.")
        each = each * np.nan_to_num(weights, nan=0.0)
        heaviest = float(each.max(initial=0.0)) or heaviest
    slot = slots(values, bounds)[visible]
    size = len(bounds) + 2
    kept = each[visible]
    inner = slice(1, len(bounds))
    rows = np.bincount(slot, minlength=size)[inner]
    expected = np.bincount(slot, kept, size)[inner].astype(float)
    squares = np.bincount(slot, kept**2, size)[inner]
    some = squares > 0.0
    number = np.where(some, expected**2 / np.where(some, squares, 1.0), 0.0)
    low, high = poisson_interval(number, level)
    scale = np.where(some, expected / np.where(some, number, 1.0), heaviest)
    return SurveyYield(bounds, np.asarray(rows, dtype=float), expected, low * scale, high * scale)
