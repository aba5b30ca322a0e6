"""The faintest accretion that would still pass: the chain turned round.

For every galaxy, observation and threshold the flux that must be seen is the largest of three:

======= ============================================================================
depth   the flux limit (less the host's light where `screen.flux_of` is total)
floor   the flux of the luminosity `screen.floor`
glow    threshold x host's flux, or (threshold - 1) x host's flux for criterion total
======= ============================================================================

It becomes an intrinsic L(2-10 keV), and through the bolometric and accretion laws in use a
bolometric luminosity, an Eddington ratio and a rate. Where a law is not monotonic, the lowest
accretion is reported above which the row stays visible at every higher one, and the row is marked.
Holes of one galaxy that would blend in one circle are taken one by one.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from embersift.arrays import Array, Mask
from embersift.catalogue import Sources
from embersift.chain import Chain
from embersift.columns import fate_column
from embersift.constants import EDDINGTON_PER_MSUN, MPC
from embersift.errors import RecipeError, did_you_mean
from embersift.inversion import INSIDE, MARGIN, Inverse

__all__ = [
    "REASONS",
    "SCALINGS",
    "SET_BY",
    "Reach",
    "checked_exposure",
    "reach",
    "reach_columns",
    "scaled_exposure",
]

SET_BY = ("", "glow", "floor", "depth")
"""What sets the needed flux, by code; empty where nothing does or where it is not known."""

REASONS = ("", "below the range searched", "above the range searched", "not known")
"""Why a row has no Eddington ratio and no rate, by code."""

SCALINGS: Mapping[str, float] = {"background": 0.5, "photon": 1.0}
"""How the flux limit falls with exposure: as its power of minus this."""

Scaling = Literal["background", "photon"]

_UNKNOWN = 3


@dataclass(frozen=True)
class Reach:
    """What one observation can reach at one threshold; arrays of the block's length.

    Attributes
    ----------
    lx, lbol : array
        Faintest intrinsic L(2-10 keV) and bolometric luminosity that pass [erg/s].
    eddington, mdot : array
        The same as Eddington ratio and as rate [Msun/yr] in the catalogue's convention (inflow or
        growth); NaN without a black-hole mass, and where `reason` says so.
    set_by : int8 array
        Code into `SET_BY`.
    saturation_flux : array
        The flux limit [erg/s/cm2] below which a deeper one gains nothing; 0 where there is none.
    exposure_saturation, exposure_wanted : array or None
        Exposure, in the unit of the reference exposure, that reaches saturation, and that reaches
        the wanted Eddington ratio; infinite where no exposure does.
    not_monotonic : bool array
        Some lower accretion would pass too, but not all between it and the one reported.
    reason : int8 array
        Code into `REASONS`.
    mbh : array (rows, Eddington ratios) or None
        Lightest black hole [Msun] that passes at each Eddington ratio of the grid.
    """

    lx: Array
    lbol: Array
    eddington: Array
    mdot: Array
    set_by: NDArray[np.int8]
    saturation_flux: Array
    exposure_saturation: Array | None
    exposure_wanted: Array | None
    not_monotonic: Mask
    reason: NDArray[np.int8]
    mbh: Array | None = None


def _positive(values: ArrayLike, what: str) -> Array:
    numbers = np.atleast_1d(np.asarray(values, dtype=float))
    wrong = ~((numbers > 0.0) & np.isfinite(numbers))
    if wrong.any():
        raise RecipeError(
            f"{what}: {numbers[wrong][0]:g} is not possible; give finite numbers above 0."
        )
    return numbers


def checked_exposure(exposure: ArrayLike) -> Array:
    """Exposures as numbers.

    Raises
    ------
    RecipeError
        If one is 0, negative or not finite.
    """
    return _positive(exposure, "exposure")


def scaled_exposure(flux_limit: float, flux: Array, exposure: float, scaling: str) -> Array:
    """Exposure whose flux limit is `flux`, when `flux_limit` is that of the exposure given.

    Parameters
    ----------
    flux_limit : float
        Limit of the reference exposure [erg/s/cm2].
    flux : array
        Limits that are asked for; 0 takes forever.
    exposure : float
        Reference exposure, in any unit.
    scaling : {"background", "photon"}
        The limit falls with the square root of the exposure, or in proportion to it.

    Raises
    ------
    RecipeError
        An unknown scaling, an exposure or a limit that is not above 0.

    Examples
    --------
    >>> scaled_exposure(1e-16, np.array([5e-17]), 100.0, "background").tolist()
    [400.0]
    """
    if scaling not in SCALINGS:
        raise RecipeError(
            f"there is no exposure scaling {scaling!r}. {did_you_mean(scaling, SCALINGS)}"
        )
    (reference,) = checked_exposure(exposure)
    if not flux_limit > 0.0:
        raise RecipeError(
            "an exposure can only be scaled from a flux limit above 0; "
            f"the observation has {flux_limit:g}. Give it a flux_limit, or leave the exposure out."
        )
    with np.errstate(divide="ignore", over="ignore"):
        longer: Array = reference * (flux_limit / flux) ** (1.0 / SCALINGS[scaling])
    return longer


def _with_mass(sources: Sources, mbh: ArrayLike | None) -> Sources:
    mass = np.where(sources.mbh > 0.0, sources.mbh, np.nan)
    if mbh is not None:
        given = np.broadcast_to(_positive(mbh, "mbh"), mass.shape)
        mass = np.where(np.isnan(mass), given, mass)
    return sources._replace(mbh=mass)


def reach(
    sources: Sources,
    chain: Chain,
    *,
    mbh: ArrayLike | None = None,
    eddington: Sequence[float] = (),
    exposure: float | None = None,
    scaling: str = "background",
    wanted: float | None = None,
    inverse: Inverse | None = None,
) -> dict[tuple[str, float], Reach]:
    """Faintest accretion that passes, for every observation and threshold of the chain's recipe.

    Parameters
    ----------
    sources : Sources
        One block; `mdot` is not looked at, and `mbh` may be missing (0 or NaN).
    chain : Chain
        The recipe made ready to run.
    mbh : float or array, optional
        Black-hole mass [Msun] for rows that have none.
    eddington : sequence of float
        Eddington ratios at which the lightest black hole that passes is asked for.
    exposure : float, optional
        Exposure that the flux limits belong to.
    scaling : {"background", "photon"}
        How the limits fall with exposure.
    wanted : float, optional
        Eddington ratio for `Reach.exposure_wanted`.
    inverse : Inverse, optional
        Made from the same chain, to be used again for many blocks.

    Returns
    -------
    dict
        `Reach` by (observation name, threshold).

    Raises
    ------
    RecipeError
        An exposure, mass or Eddington ratio that is not above 0; an exposure for an observation
        without a flux limit; a wanted Eddington ratio without an exposure.
    """
    sources = _with_mass(sources, mbh)
    grid = tuple(_positive(eddington, "eddington")) if len(eddington) else ()
    if wanted is not None:
        _positive(wanted, "wanted Eddington ratio")
        if exposure is None:
            raise RecipeError(
                "a wanted Eddington ratio needs the exposure that the flux limit belongs to."
            )
    if exposure is not None:
        for observation in chain.recipe.observation:
            scaled_exposure(observation.flux_limit, np.ones(1), exposure, scaling)
    inverse = inverse or Inverse(chain)
    wanted_lx = None if wanted is None else _light_at(chain, wanted, sources.mbh)

    def longer(limit: float, flux: Array) -> Array | None:
        return None if exposure is None else scaled_exposure(limit, flux, exposure, scaling)

    screen = chain.recipe.screen
    host = chain.host_light(sources)
    u = np.log1p(sources.z)
    area = 4.0 * np.pi * (sources.distance * MPC) ** 2
    result: dict[tuple[str, float], Reach] = {}
    for view in chain.views:
        seen = chain.fluxes(view, sources, np.ones(u.shape), host, u, area)
        per_lx, glow = seen.agn, seen.background
        limit = view.observation.flux_limit
        extra = glow if screen.flux_of == "total" else np.zeros(u.shape)
        for threshold in screen.thresholds:
            factor = threshold if screen.criterion == "agn" else max(threshold - 1.0, 0.0)
            with np.errstate(divide="ignore", invalid="ignore"):
                # in the order of SET_BY: at equality going deeper gains nothing already
                needed = np.stack(
                    (
                        factor * glow / per_lx,
                        np.where(np.isnan(glow), np.nan, screen.floor),
                        np.maximum(limit - extra, 0.0) / per_lx,
                    )
                )
            # no light arrives: what is needed is infinite, even where nothing is asked for
            needed[:, per_lx == 0.0] = np.inf
            lx = needed.max(axis=0)
            set_by = np.where(np.isfinite(lx) & (lx > 0.0), 1 + np.argmax(needed, axis=0), 0)
            lx = lx * MARGIN
            with np.errstate(invalid="ignore"):
                # NaN where no light arrives at any depth
                saturation = needed[:2].max(axis=0) * per_lx + extra
            exposure_wanted = None
            if wanted_lx is not None:
                with np.errstate(invalid="ignore"):
                    seen_flux = wanted_lx * per_lx + extra
                    passes = wanted_lx >= needed[:2].max(axis=0)
                seen_flux[~passes & ~np.isnan(seen_flux)] = 0.0
                exposure_wanted = longer(limit, seen_flux)
            result[view.observation.name, threshold] = _inverted(
                inverse,
                sources,
                lx,
                set_by.astype(np.int8),
                saturation,
                longer(limit, saturation),
                exposure_wanted,
                grid,
            )
    return result


def _light_at(chain: Chain, ratio: float, mbh: Array) -> Array:
    ratios = np.full(mbh.shape, ratio)
    return chain.agn_light(ratios * mbh * EDDINGTON_PER_MSUN, ratios, mbh)


def _inverted(
    inverse: Inverse,
    sources: Sources,
    lx: Array,
    set_by: NDArray[np.int8],
    saturation: Array,
    exposure_saturation: Array | None,
    exposure_wanted: Array | None,
    grid: tuple[float, ...],
) -> Reach:
    luminosity = inverse.luminosity(lx, sources.mbh)
    rate = inverse.rate(lx, luminosity.x, sources.mbh)
    place = np.where(luminosity.place == INSIDE, rate.place, luminosity.place)
    reason = np.where(np.isnan(lx) | np.isnan(sources.mbh), _UNKNOWN, place)
    inside = reason == INSIDE
    lbol = luminosity.x
    return Reach(
        lx=lx,
        lbol=lbol,
        eddington=np.where(inside, lbol / (sources.mbh * EDDINGTON_PER_MSUN), np.nan),
        mdot=inverse.mdot(np.where(inside, rate.x, np.nan), lx, sources),
        set_by=set_by,
        saturation_flux=saturation,
        exposure_saturation=exposure_saturation,
        exposure_wanted=exposure_wanted,
        not_monotonic=luminosity.again | rate.again,
        reason=reason.astype(np.int8),
        mbh=np.stack([inverse.mass(lx, ratio) for ratio in grid], axis=-1) if grid else None,
    )


_COLUMNS: Mapping[str, Callable[[Reach], Array | None]] = {
    "reach_lx": lambda one: one.lx,
    "reach_lbol": lambda one: one.lbol,
    "reach_eddington": lambda one: one.eddington,
    "reach_mdot": lambda one: one.mdot,
    "saturation_flux": lambda one: one.saturation_flux,
    "exposure_saturation": lambda one: one.exposure_saturation,
    "exposure_wanted": lambda one: one.exposure_wanted,
}


def reach_columns(
    result: Mapping[tuple[str, float], Reach], eddington: Sequence[float] = ()
) -> dict[str, NDArray[np.generic]]:
    """Output columns by name, as `reach` gives them for one block.

    `not_monotonic` stands once: a row is marked when it is so for any observation and threshold.
    """
    columns: dict[str, NDArray[np.generic]] = {}
    marked: Mask | None = None
    for (name, threshold), one in result.items():
        ending = fate_column(name, threshold).removeprefix("fate")
        for start, values in _COLUMNS.items():
            column = values(one)
            if column is not None:
                columns[start + ending] = column
            if start == "reach_mdot":
                columns["reach_set_by" + ending] = np.array(SET_BY)[one.set_by]
                columns["reach_reason" + ending] = np.array(REASONS)[one.reason]
        if one.mbh is not None:
            for ratio, mass in zip(eddington, one.mbh.T, strict=True):
                columns[f"reach_mbh{ending}_at_{ratio:.10g}"] = mass
        marked = one.not_monotonic if marked is None else marked | one.not_monotonic
    if marked is not None:
        columns["not_monotonic"] = marked
    return columns
