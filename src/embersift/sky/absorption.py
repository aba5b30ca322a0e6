"""Photoelectric absorption by cold gas of solar composition, and what it leaves of a power law.

Cross-section: Morrison & McCammon 1983, ApJ 270, 119, Table 2 (0.03-10 keV, verified against a
public code). Above 10 keV it continues as E^-3 from its value there. Only photoelectric: from
about 1e24 cm-2 electron scattering matters and the result is a sketch; such rows are marked.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from embersift.arrays import Array
from embersift.bands import Band

__all__ = ["EDGES", "LOWEST_ENERGY", "THICK", "cross_section", "power_law_transmission"]

LOWEST_ENERGY = 0.03  # keV
THICK = 1e24  # cm-2; beyond it the photoelectric model no longer holds

_TABLE = np.array(
    [
        # from keV, c0, c1, c2   [1e-24 cm2 per H atom, times E^-3]
        [0.03, 17.3, 608.1, -2150.0],
        [0.100, 34.6, 267.9, -476.1],
        [0.284, 78.1, 18.8, 4.3],
        [0.400, 71.4, 66.8, -51.4],
        [0.532, 95.5, 145.8, -61.1],
        [0.707, 308.9, -380.6, 294.0],
        [0.867, 120.6, 169.3, -47.7],
        [1.303, 141.3, 146.8, -31.5],
        [1.840, 202.7, 104.7, -17.0],
        [2.471, 342.7, 18.7, 0.0],
        [3.210, 352.2, 18.7, 0.0],
        [4.038, 433.9, -2.4, 0.75],
        [7.111, 629.0, 30.9, 0.0],
        [8.331, 701.2, 25.2, 0.0],
    ]
)
_HIGHEST = 10.0
# one more piece so that the continuation above 10 keV is a row like the others
_C0 = np.append(_TABLE[:, 1], 701.2 + 25.2 * _HIGHEST)
_C1 = np.append(_TABLE[:, 2], 0.0)
_C2 = np.append(_TABLE[:, 3], 0.0)
EDGES: Array = np.append(_TABLE[:, 0], _HIGHEST)
"""Where the polynomial changes [keV]; it jumps there, so integrals stop at each."""

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(6)


class _Piece(NamedTuple):
    """The polynomial that holds around given energies, looked up once per quadrature cell."""

    c0: Array
    c1: Array
    c2: Array

    @classmethod
    def at(cls, log_energy: Array) -> _Piece:
        piece = np.searchsorted(EDGES, np.exp(log_energy), side="right") - 1
        return cls(_C0[piece] * 1e-24, _C1[piece] * 1e-24, _C2[piece] * 1e-24)

    def sigma(self, log_energy: Array) -> Array:
        inverse = np.exp(-log_energy)
        return ((self.c0 * inverse + self.c1) * inverse + self.c2) * inverse


def cross_section(energy: Array) -> Array:
    """Cross-section per hydrogen atom [cm2] at `energy` [keV]; NaN below 0.03 keV."""
    piece = np.searchsorted(EDGES, energy, side="right") - 1
    good = piece >= 0
    piece = np.maximum(piece, 0)
    sigma = _C0[piece] + energy * (_C1[piece] + energy * _C2[piece])
    result: Array = np.where(good, sigma * 1e-24 / energy**3, np.nan)
    return result


def power_law_transmission(
    gamma: float, band: Band, galactic_nh: float, nh: Array, z: Array
) -> Array:
    """Share of a power law's energy flux in an observed band that passes both columns.

    Parameters
    ----------
    gamma : float
        Photon index.
    band : Band
        Observed band [keV].
    galactic_nh : float
        Column [cm-2] that absorbs at observed energies.
    nh, z : arrays of one shape
        Column [cm-2] that absorbs at the source's rest energies, and its redshift.

    Returns
    -------
    array
        Between 0 and 1. Integrated piece by piece between the edges of both frames, so an edge
        never falls inside a quadrature cell.
    """
    if galactic_nh == 0.0 and not np.any(nh > 0.0):
        return np.where(np.isfinite(nh), 1.0, np.nan)
    log_stretch = np.log1p(z)
    rest_edges = EDGES[:, None] / (1.0 + z)[None, :]
    edges = [rest_edges, np.full((1, z.size), band.high)]
    if galactic_nh > 0.0:
        edges.append(np.broadcast_to(EDGES[:, None], rest_edges.shape))
    bounds = np.concatenate(edges)
    # edges outside the band collapse onto its upper end, behind all real cells of the row
    bounds[(bounds <= band.low) | (bounds >= band.high)] = band.high
    bounds.sort(axis=0)
    log_bounds = np.log(bounds)
    low = np.full(z.size, math.log(band.low))
    passed = np.zeros(z.size)
    unabsorbed = np.zeros(z.size)
    for high in log_bounds:
        # in ln E the integrand of a power law is nearly flat, so few nodes are enough
        half = 0.5 * (high - low)
        if not half.any():  # an edge outside the band, or one that both frames share
            continue
        middle = 0.5 * (high + low)
        low = high
        rest = _Piece.at(middle + log_stretch)
        galactic = _Piece.at(middle)
        for node, weight in zip(_NODES, _WEIGHTS, strict=True):
            log_energy = middle + half * node
            share = (weight * half) * np.exp((2.0 - gamma) * log_energy)
            depth = rest.sigma(log_energy + log_stretch)
            depth *= nh
            if galactic_nh > 0.0:
                depth += galactic_nh * galactic.sigma(log_energy)
            np.negative(depth, out=depth)
            np.exp(depth, out=depth)
            depth *= share
            passed += depth
            unabsorbed += share
    return passed / unabsorbed
