"""Extraction circles: how much of a disc's light falls in a circle, and how large a circle is.

The host is an exponential disc seen face on, surface brightness exp(-r/h) / (2 pi h^2).

| word | meaning |
|---|---|
| aperture | radius of the extraction circle [arcsec] |
| radius | the same in units of the disc's scale length h |
| offset | distance of the circle's centre from the nucleus; `disc_share` takes it in units of h |
| rhalf | radius of the circle around the nucleus that holds half of the light |

The share is an integral over rings around the nucleus. `disc_share` reads it from two tables that
are built from that integral on first use; `disc_share_exact` integrates each row adaptively.
"""

from __future__ import annotations

import math
import threading
from functools import cache
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from embersift.arrays import Array

__all__ = [
    "HALF_LIGHT",
    "circle_radius_kpc",
    "disc_share",
    "disc_share_exact",
    "kpc_per_arcsec",
    "rhalf_to_scale",
]

HALF_LIGHT = 1.6783469900166605
"""Half-light radius of an exponential disc in scale lengths: (1 + x) exp(-x) = 1/2."""

_KPC_PER_ARCSEC_MPC = 1e3 * math.pi / 648000.0

_DEEP = 30.0  # the nucleus this far inside the circle: the light outside is below 3e-12
_OUTSIDE = 16.0  # the nucleus this far outside: share below 2e-7, integrated row by row
_NEAR = 8.0  # largest offset of the first table
_ROOT_STEP = 0.0125  # its step in the square roots of radius and offset
_DEPTH_STEP = 0.07  # step of the second table in radius - offset
_CURVATURE_STEP = 1.0 / (64.0 * _NEAR)  # and in 1 / offset
_PAD = 10  # nodes beyond the range in use: the spline forgets its ends by a factor 0.27 a node
_ROWS = 32768  # rows at a time, so that work arrays stay in cache
_TAIL = 45.0  # rings fainter than exp(-45) of the brightest one are left out

# measured errors of the share: 1e-8 of it everywhere, 2e-5 of it where `_OUTSIDE` holds
_FINE = np.polynomial.legendre.leggauss(32)
_COARSE = np.polynomial.legendre.leggauss(16)

# scipy is imported where it is used: most runs have no aperture and should start fast.


def rhalf_to_scale(rhalf: Array) -> Array:
    """Scale length of the disc, in the unit of its half-light radius `rhalf`."""
    return rhalf / HALF_LIGHT


def kpc_per_arcsec(angular_distance_mpc: Array) -> Array:
    """Length [kpc] seen under one arcsecond at an angular-diameter distance [Mpc].

    Examples
    --------
    >>> round(float(kpc_per_arcsec(np.array(222.289055 / 1.05**2))), 5)
    0.97749
    """
    return angular_distance_mpc * _KPC_PER_ARCSEC_MPC


def circle_radius_kpc(aperture_arcsec: Array | float, angular_distance_mpc: Array) -> Array:
    """Radius [kpc] of a circle of `aperture_arcsec` radius, at an angular-diameter distance."""
    return aperture_arcsec * kpc_per_arcsec(angular_distance_mpc)


def disc_share(radius: ArrayLike, offset: ArrayLike) -> Array:
    """Share of an exponential disc's light inside a circle.

    Parameters
    ----------
    radius, offset : arrays that broadcast, or numbers
        Radius of the circle, and distance of its centre from the nucleus, in scale lengths.

    Returns
    -------
    array
        Between 0 and 1, in the shape of the broadcast inputs: 0 for no radius, 1 for an infinite
        one, NaN where an input is NaN or negative or both are infinite.

    Notes
    -----
    Exact (closed form) at offset 0. Elsewhere within 1e-5 of the integral, and within a factor
    1e-4 of it (2e-3 where the share is below 1e-6). Each value depends on its own row only.

    Examples
    --------
    >>> np.round(disc_share([1.0, 1.0, np.inf], [0.0, 2.0, 2.0]), 4).tolist()
    [0.2642, 0.0717, 1.0]
    """
    a, r0 = np.broadcast_arrays(np.asarray(radius, dtype=float), np.asarray(offset, dtype=float))
    share = np.empty(a.size)
    flat_a, flat_r0 = a.ravel(), r0.ravel()
    for start in range(0, a.size, _ROWS):
        rows = slice(start, start + _ROWS)
        share[rows] = _block(flat_a[rows], flat_r0[rows])
    return share.reshape(a.shape)


def disc_share_exact(radius: ArrayLike, offset: ArrayLike) -> Array:
    """The same by adaptive quadrature, row by row: slow, to build on and to check with."""
    with np.errstate(all="ignore"):  # flags raised inside scalar arithmetic, not by arrays
        return np.asarray(np.vectorize(_share_by_quadrature, otypes=[float])(radius, offset))


def _block(a: Array, r0: Array) -> Array:
    from scipy.special import gammainc

    with np.errstate(invalid="ignore"):
        depth = a - r0  # of the nucleus inside the circle; NaN when both are infinite
        known = (a >= 0.0) & (r0 >= 0.0) & ~np.isnan(depth)
    share = np.full(a.size, np.nan)
    share[known & (depth == -np.inf)] = 0.0
    share[known & (depth > _DEEP)] = 1.0
    left = known & np.isfinite(r0) & (depth <= _DEEP)
    central = left & (r0 == 0.0)
    if central.any():
        share[central] = gammainc(2.0, a[central])  # 1 - (1 + a) exp(-a), without cancellation
        left &= ~central
    near = left & (r0 <= _NEAR)
    far = left & (r0 > _NEAR) & (depth >= -_OUTSIDE)
    outside = left & (r0 > _NEAR) & (depth < -_OUTSIDE)
    for rows, evaluate in ((near, _near_share), (far, _far_share), (outside, _outside_share)):
        if rows.all():
            return evaluate(a, r0)
        if rows.any():
            share[rows] = evaluate(a[rows], r0[rows])
    return share


def _outside_share(a: Array, r0: Array) -> Array:
    return _ring_integral(a, r0, _COARSE)


def _ring_integral(a: Array, r0: Array, rule: tuple[Array, Array] = _FINE) -> Array:
    """The share by a fixed quadrature over rings; all inputs finite.

    A ring of radius r has a part phi / pi inside the circle, with (law of cosines, half angle)
    tan^2(phi/2) = (a - r + r0)(a + r - r0) / ((r + r0 - a)(r + r0 + a)). Rings smaller than
    a - r0 lie inside whole. Writing r = |a - r0| + u, the four factors are sums of positive
    terms, so nothing cancels.
    """
    inside = a > r0
    large, small = np.where(inside, a, r0), np.where(inside, r0, a)
    gap = large - small
    reach = np.minimum(2.0 * small, _TAIL)
    beyond = 2.0 * small - reach
    total = np.zeros(a.shape)
    for node, weight in zip(0.25 * np.pi * (rule[0] + 1.0), rule[1], strict=True):
        # u = reach sin^2: both ends of the range are square-root branch points
        sine, cosine = math.sin(node), math.cos(node)
        u = reach * sine**2
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            first = u / (2.0 * gap + u)
            second = (beyond + reach * cosine**2) / (u + 2.0 * large)
            tangent = np.sqrt(np.where(inside, second / first, second * first))
        total += weight * sine * cosine * np.arctan(tangent) * (gap + u) * np.exp(-u)
    fall = np.exp(-gap)
    # no reach: the circle is a point, or centred, and no ring is cut
    partly = np.where(reach > 0.0, total * reach * fall, 0.0)
    share: Array = partly + np.where(inside, -np.expm1(-gap) - gap * fall, 0.0)
    return share


def _share_by_quadrature(a: float, r0: float) -> float:
    from scipy.integrate import quad
    from scipy.special import gammainc

    if not (a >= 0.0 and r0 >= 0.0) or (math.isinf(a) and math.isinf(r0)):
        return math.nan
    if math.isinf(a) or math.isinf(r0):
        return 1.0 if math.isinf(a) else 0.0
    large, small = max(a, r0), min(a, r0)
    gap = large - small
    whole = float(gammainc(2.0, gap)) if a > r0 else 0.0
    if small < 1e-150:  # its square is lost
        return whole

    def ring(angle: float) -> float:
        u = 2.0 * small * math.sin(0.5 * angle) ** 2
        left = 2.0 * small * math.cos(0.5 * angle) ** 2
        if a > r0:
            part = math.atan2(math.sqrt(left * (2.0 * gap + u)), math.sqrt(u * (u + 2.0 * large)))
        else:
            part = math.atan2(math.sqrt(left * u), math.sqrt((2.0 * gap + u) * (u + 2.0 * large)))
        return 2.0 * part * (gap + u) * math.exp(-u) * small * math.sin(angle)

    last = math.acos(max(-1.0, 1.0 - 60.0 / small))
    integral = quad(ring, 0.0, last, epsabs=0.0, epsrel=1e-11, limit=400)[0]
    return whole + integral * math.exp(-gap) / math.pi


class _Tables(NamedTuple):
    """Cubic B-spline coefficients of the share divided by `_scale(radius)`."""

    near: Array
    far: Array


def _scale(a: Array) -> Array:
    """Carries the fall to 0 with a^2, so that the tables keep small circles to full accuracy."""
    with np.errstate(divide="ignore", over="ignore"):
        share: Array = 1.0 / (1.0 + 2.0 / np.square(a))
    return share


def _near_share(a: Array, r0: Array) -> Array:
    return _read(_tables().near, np.sqrt(r0) / _ROOT_STEP, np.sqrt(a) / _ROOT_STEP, a)


def _far_share(a: Array, r0: Array) -> Array:
    curvature = 1.0 / (r0 * _CURVATURE_STEP) + _PAD
    depth = (a - r0 + _OUTSIDE) / _DEPTH_STEP + _PAD
    return _read(_tables().far, curvature, depth, a)


def _read(table: Array, row: Array, column: Array, a: Array) -> Array:
    from scipy.ndimage import map_coordinates

    value = map_coordinates(table, np.stack((row, column)), order=3, prefilter=False, mode="mirror")
    value *= _scale(a)
    # the spline may pass 1 by its own error where the whole disc is inside
    share: Array = np.clip(value, 0.0, 1.0)
    return share


_building = threading.Lock()


def _tables() -> _Tables:
    with _building:
        return _build()


@cache
def _build() -> _Tables:
    """Two tables, because the share has structure on two scales.

    Near the nucleus it changes on the scale of radius and offset themselves: the square roots
    are small steps there, and the share, even in both, continues as its mirror image through 0.
    Far out it is a step of width h across radius = offset, nearly that of a straight edge: the
    depth of the nucleus and the edge's curvature are the natural variables. A negative curvature
    is the same edge with the two sides exchanged, so the table runs on smoothly through 0.
    """
    from scipy.ndimage import spline_filter

    def nodes(step: float, last: float, first: float = 0.0) -> Array:
        before = _PAD if first else 0
        after = math.ceil((last - first) / step) + _PAD
        return first + step * np.arange(-before, after + 1, dtype=np.float64)

    radius = nodes(_ROOT_STEP, math.sqrt(_NEAR + _DEEP)) ** 2
    offset = nodes(_ROOT_STEP, math.sqrt(_NEAR)) ** 2
    near = np.empty((offset.size, radius.size))
    near[:, 0] = np.exp(-offset)  # surface brightness at the centre of a vanishing circle
    inner = radius[1:]
    for row, r0 in zip(near, offset, strict=True):
        row[1:] = _ring_integral(inner, np.full(inner.size, r0)) / _scale(inner)

    curvature = _CURVATURE_STEP * np.arange(-_PAD, round(1 / (_NEAR * _CURVATURE_STEP)) + _PAD + 1)
    depth = nodes(_DEPTH_STEP, _DEEP, -_OUTSIDE)
    far = np.empty((curvature.size, depth.size))
    for row, kappa in zip(far, curvature, strict=True):
        r0 = 1.0 / max(abs(kappa), 1e-8)
        exchanged = kappa < 0.0
        # a negative radius stands for the mirror image of the circle
        a = np.maximum(np.abs(r0 - depth if exchanged else r0 + depth), 1e-6)
        share = _ring_integral(a, np.full(a.size, r0))
        row[:] = (1.0 - share if exchanged else share) / _scale(a)
    return _Tables(spline_filter(near, mode="mirror"), spline_filter(far, mode="mirror"))
