"""Holes of one galaxy that fall in one extraction circle: one source to the observer.

A catalogue gives how far each hole is from the centre, not in which direction, so two holes are at
least ``|offset_1 - offset_2|`` apart. They are taken as blended when that is within the aperture's
radius: a pair that might be one source is not claimed as two. Rows without a host or an offset,
and circles that are not set, blend with nothing.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array, Mask

__all__ = ["Blends", "blends"]


class Blends(NamedTuple):
    """Rows that share a circle with another hole.

    `fainter` marks those that a brighter one outshines; `summed` is, for each row, its own flux
    plus that of the fainter holes in its circle.
    """

    fainter: Mask
    summed: Array


def blends(
    host: NDArray[np.uint64], offset: Array, radius: Array, flux: Array, candidate: Mask
) -> Blends:
    """Find the blends of one observation.

    Parameters
    ----------
    host : uint64 array
        One number per galaxy.
    offset, radius : arrays
        Distance from the centre and radius of the extraction circle [kpc].
    flux : array
        Flux of each hole in the observed band.
    candidate : bool array
        Rows that shine: usable, with an accreting hole.

    Returns
    -------
    Blends
        The brightest hole of a circle (the first of equals in the table) carries the summed
        light; every other hole in its circle is `fainter`.
    """
    fainter = np.zeros(flux.size, dtype=bool)
    summed = flux.copy()
    able = candidate & np.isfinite(offset) & np.isfinite(radius) & (flux >= 0.0)
    rows = np.flatnonzero(able)
    if rows.size < 2:
        return Blends(fainter, summed)
    # brightest first within each galaxy; the table's order settles equals
    order = rows[np.lexsort((rows, -flux[rows], host[rows]))]
    hosts = host[order]
    starts = np.flatnonzero(np.r_[True, hosts[1:] != hosts[:-1]])
    sizes = np.diff(np.r_[starts, hosts.size])
    rank = np.arange(hosts.size) - np.repeat(starts, sizes)
    first = np.repeat(starts, sizes)
    # one pass per rank: nearly all galaxies have one or two holes, so there are few passes
    for brighter in range(int(sizes.max()) - 1):
        behind = np.flatnonzero(rank > brighter)
        ahead = first[behind] + brighter
        lead, follow = order[ahead], order[behind]
        near = np.abs(offset[lead] - offset[follow]) <= radius[lead]
        # a hole that is blended itself carries nothing, and nobody is counted in twice
        near &= ~fainter[lead] & ~fainter[follow]
        np.add.at(summed, lead[near], flux[follow[near]])
        fainter[follow[near]] = True
    return Blends(fainter, summed)
