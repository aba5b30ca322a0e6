"""The tables of `chance_tables`, from the exact distributions of `compound_poisson`.

For every O/H of the axis: the distributions of all pairs of amounts, on one grid of luminosities
(`_distributions`), as scores; then moved by the bulk of each pair on to the common nodes in y.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import pairwise

import numpy as np
from scipy.ndimage import correlate1d
from scipy.special import log_ndtr, ndtri, ndtri_exp

from embersift.arrays import Array
from embersift.chance_tables import BOTTOM, TOP, Axis, ScoreTable, bulk, compressed
from embersift.compound_poisson import (
    NOTHING,
    Complex,
    Cumulants,
    LuminosityDistribution,
    cumulants,
    kinks,
    tail,
    windows,
)

__all__ = ["build"]

# One node beyond the largest amounts keeps the ends of the splines out of the range. Below the
# lowest, probabilities are as good as proportional to the amount (`chance` makes use of it).
_SFRS = np.linspace(-3.6, 2.2, 30)
_MASSES = np.linspace(-4.4, 1.24, 25)

_EXACT = 1e-9  # the transform is good for probabilities above this
_BULK_SCORE = -2.0
_LARGEST_SCORE = 35.0
_TILTS = np.concatenate([-np.geomspace(1e4, 1e-6, 160), np.geomspace(1e-6, 30.0, 140)])


def build(
    hmxb: LuminosityDistribution | None,
    lmxb: LuminosityDistribution | None,
    scatter_dex: float = 0.0,
) -> dict[str, ScoreTable]:
    """Make the tables for galaxies with high-mass binaries, low-mass binaries, and both.

    Parameters
    ----------
    hmxb, lmxb : luminosity functions, or None
        For 1 Msun/yr and for 1e11 Msun.
    scatter_dex : float
        Log-normal scatter that multiplies the sum.

    Returns
    -------
    dict
        Keys ``hmxb``, ``lmxb``, ``both``, as far as the functions are there.
    """
    functions = [function for function in (hmxb, lmxb) if function is not None]
    sfr, mass = Axis.log(_SFRS), Axis.log(_MASSES)
    metal = Axis.oh12() if hmxb is not None and hmxb.needs_oh12 else None
    sfrs = np.array([0.0]) if hmxb is None else np.concatenate([[0.0], sfr.nodes])
    masses = np.array([0.0]) if lmxb is None else np.concatenate([[0.0], mass.nodes])

    grid, found = windows(functions, TOP)
    cumulative = _distributions(
        hmxb or NOTHING, lmxb or NOTHING, sfrs, masses, metal, grid, found
    )
