"""The observer's side on whole tables: reach, counts and ranking of galaxies to be observed.

Joins `reach`, `counts`, `effective_area` and `ranking` to a table, as `screening` joins the chain:
no files except an effective area, no printing.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from embersift.arrays import Array
from embersift.catalogue import Layout, Sources, column_names, layout
from embersift.chain import Chain
from embersift.columns import fate_column
from embersift.errors import CatalogueError, RecipeError
from embersift.inversion import Inverse
from embersift.obscuration import NhTable
from embersift.plausibility import suspicion
from embersift.ranking import (
    Ranking,
    odds_of_success,
    odds_over_nh,
    rank,
    read_distribution,
    target_table,
)
from embersift.reach import Reach, reach, reach_columns
from embersift.recipe import Observation, Recipe
from embersift.sky.absorption import cross_section

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Reached", "Targets", "rank_targets", "reach_table", "sky_yield"]

_KS = 1000.0


@dataclass(frozen=True)
class Reached:
    """What can be reached in a table of galaxies, with what a summary needs."""

    table: Any  # the user's table with the reach columns behind its own
    chain: Chain
    layout: Layout
    sources: Sources
    found: Mapping[tuple[str, float], Reach]


@dataclass(frozen=True)
class Targets:
    """Galaxies in the order in which to observe them."""

    table: pd.DataFrame
    ranking: Ranking
    observation: str
    threshold: float


def reach_table(table: Any, recipe: Recipe, *, origin: str = "the table") -> Reached:
    """How faint an accretor could still be claimed in each galaxy of a table.

    Parameters
    ----------
    table : DataFrame or Table
        Galaxies; an accretion rate is not looked at, a black-hole mass is used where there is one.
    recipe : Recipe
        The chain, the observations, and the section ``proposal``.
    origin : str
        File name, for messages.

    Raises
    ------
    CatalogueError, RecipeError
        As in `embersift.screen`; an exposure without a flux limit; an aperture that is needed for
        a background rate and not given.
    """
    import pandas as pd

    from embersift.screening import refuse_names
    from embersift.tables import units_of

    names = column_names(table)
    plan = layout(names, units_of(table), recipe, origin, targets=True)
    chain = Chain(recipe)
    if len(table) == 0:
        raise CatalogueError(f"{origin}: the table has columns and no rows; nothing to reach for.")
    suspicion(plan, table)
    sources = plan.take(plan.raw_columns(table))
    choices = recipe.proposal
    found = reach(
        sources,
        chain,
        mbh=assumed_mass(recipe),
        eddington=choices.eddington,
        exposure=choices.exposure,
        scaling=choices.scaling,
        wanted=choices.wanted,
    )
    columns: dict[str, Any] = dict(reach_columns(found, choices.eddington))
    if len(choices.mbh) > 1:
        columns |= _at_masses(chain, sources)
    columns |= _counts(chain, sources, found)
    columns["problem"] = _problems(sources)
    refuse_names(names, columns, origin)
    if hasattr(table, "colnames"):
        reached = table.copy()
        for name, values in columns.items():
            reached[name] = values
    else:
        reached = pd.concat([table, pd.DataFrame(columns, index=table.index)], axis=1)
        reached.attrs = dict(table.attrs)
    return Reached(reached, chain, plan, sources, found)


def assumed_mass(recipe: Recipe) -> float | None:
    """The one mass that fills the gaps of the catalogue; None for none or for a grid of them."""
    masses = recipe.proposal.mbh
    return masses[0] if len(masses) == 1 else None


def _at_masses(chain: Chain, sources: Sources) -> dict[str, Array]:
    """The reach at each mass of a grid, for galaxies without a black-hole mass."""
    inverse = Inverse(chain)
    # a galaxy whose mass is known has its answer already, and no other mass
    unknown = sources._replace(mbh=np.where(sources.mbh > 0.0, np.nan, sources.mbh))
    known = sources.mbh > 0.0
    columns: dict[str, Array] = {}
    for mass in chain.recipe.proposal.mbh:
        for (name, threshold), one in reach(unknown, chain, mbh=mass, inverse=inverse).items():
            ending = fate_column(name, threshold).removeprefix("fate") + f"_mbh_{mass:g}"
            columns["reach_eddington" + ending] = np.where(known, np.nan, one.eddington)
            columns["reach_mdot" + ending] = np.where(known, np.nan, one.mdot)
    return columns


def _problems(sources: Sources) -> Any:
    from embersift.problems import problem_text

    return np.array([problem_text(int(bits)) for bits in sources.problems], dtype=object)


def counts_factor(observation: Observation, recipe: Recipe) -> float | None:
    """Counts per (erg/cm2) of one observation; None when the recipe says nothing about counts."""
    choices = recipe.proposal
    if choices.counts_per_flux is not None:
        return choices.counts_per_flux
    if choices.effective_area is None:
        return None
    from embersift.effective_area import counts_per_flux, read_effective_area

    column = observation.galactic_nh

    def transmission(energy: Array) -> Array:
        return np.exp(-column * cross_section(energy))

    return counts_per_flux(
        read_effective_area(choices.effective_area),
        observation.band,
        recipe.agn.gamma,
        transmission if column > 0.0 else None,
    )


def _counts(
    chain: Chain, sources: Sources, found: Mapping[tuple[str, float], Reach]
) -> dict[str, Array]:
    """Counts of the faintest source that passes, and how surely they are more than background."""
    from embersift.counts import (
        exposure_for_probability,
        no_source_probability,
    )

    choices = chain.recipe.proposal
    columns: dict[str, Array] = {}
    for view in chain.views:
        observation = view.observation
        factor = counts_factor(observation, chain.recipe)
        if factor is None:
            continue
        circle = 0.0
        if choices.background_rate > 0.0:
            if observation.aperture is None:
                raise RecipeError(
                    f"proposal.background_rate needs the aperture of the observation "
                    f"{observation.name!r}: it is per arcsec2."
                )
            circle = choices.background_rate * math.pi * observation.aperture**2
        for threshold in chain.recipe.screen.thresholds:
            one = found[observation.name, threshold]
            flux = chain.observe(view, sources, one.lx).agn
            ending = fate_column(observation.name, threshold).removeprefix("fate")
            rate = flux * factor
            if choices.exposure is not None:
                seconds = choices.exposure * _KS
                columns["counts" + ending] = rate * seconds
                columns["no_source_probability" + ending] = no_source_probability(
                    (rate + circle) * seconds,
                    np.full(rate.shape, circle * choices.area_ratio * seconds),
                    choices.area_ratio,
                )
            columns["exposure_detection" + ending] = (
                exposure_for_probability(rate, circle, choices.area_ratio, choices.probability)
                / _KS
            )
    return columns


def rank_targets(done: Reached, *, observation: str | None = None) -> Targets:
    """Order galaxies by the odds of success per exposure.

    Parameters
    ----------
    done : Reached
        From `reach_table`, with black-hole masses and ``proposal.exposure``.
    observation : str, optional
        Which observation; the first by default. The threshold is ``screen.headline``.

    Raises
    ------
    RecipeError
        No exposure, or no such observation.
    CatalogueError
        No galaxy has a black-hole mass.
    """
    import pandas as pd

    recipe = done.chain.recipe
    choices = recipe.proposal
    if choices.exposure is None:
        raise RecipeError(
            "ranking needs proposal.exposure, the exposure [ks] that the flux limit belongs to."
        )
    names = [o.name for o in recipe.observation]
    name = observation or names[0]
    if name not in names:
        raise RecipeError(f"there is no observation {name!r}. Known: {', '.join(names)}.")
    threshold = recipe.screen.headline
    found = done.found[name, threshold]
    distribution = read_distribution(choices.distribution)
    if recipe.agn.nh_edges:
        table = NhTable(recipe.agn.nh_edges, recipe.agn.nh_fractions)
        odds = odds_over_nh(
            done.sources, done.chain, distribution, table, mbh=assumed_mass(recipe)
        )[name, threshold]
    else:
        odds = odds_of_success(found, distribution)
    if np.isnan(odds).all():
        raise CatalogueError(
            f"{done.layout.origin}: no galaxy has a black-hole mass, which odds need. "
            "Map a column as mbh, or set proposal.mbh."
        )
    ranking = rank(odds, choices.exposure)
    used = {column.column for column in done.layout.columns.values()}
    id_column = done.layout.columns.get("id")
    ids = np.asarray(done.table[id_column.column]) if id_column else np.arange(1, odds.size + 1)
    # coordinates and whatever else came with the table, in front of what was computed
    passed = {
        column: np.asarray(done.table[column])
        for column in column_names(done.table)
        if column not in used and not column.startswith(_COMPUTED)
    }
    columns = target_table(ranking, found, ids.tolist(), passed)
    return Targets(pd.DataFrame(columns), ranking, name, threshold)


_COMPUTED = (
    "reach_",
    "saturation_flux",
    "exposure_",
    "counts_",
    "no_source_probability",
    "not_monotonic",
    "problem",
)


def sky_yield(screened: Any, recipe: Recipe, *, origin: str = "the table") -> pd.DataFrame:
    """Expected numbers of visible sources on the sky, per bin of the recipe's tally.

    Parameters
    ----------
    screened : DataFrame or Table
        What `embersift.screen` gave.
    recipe : Recipe
        Its recipe, with the section ``survey``.

    Raises
    ------
    RecipeError
        No area or redshift range; neither or both of a box and a volume column.
    CatalogueError
        The table has no fates.
    """
    import pandas as pd

    from embersift.screening import fates_of_table, values_of
    from embersift.survey_yield import survey_yield
    from embersift.tables import units_of
    from embersift.tallying import split_fate_column
    from embersift.verdict import VISIBLE

    choices = recipe.survey
    if choices.area is None or choices.redshifts is None:
        raise RecipeError("a yield needs survey.area [deg2] and survey.redshifts, [low, high].")
    names = column_names(screened)
    fates = fates_of_table(screened, names, origin)
    plan = layout(names, units_of(screened), recipe, origin)
    sources = plan.take(screened)
    volume = plan.read(screened, "volume")
    by, values = values_of(plan, sources, screened, recipe.tally.by)
    rows = []
    for column, codes in fates.items():
        parts = split_fate_column(column)
        assert parts is not None
        found = survey_yield(
            values,
            codes == VISIBLE,
            recipe.tally.edges,
            area=choices.area,
            redshifts=(choices.redshifts[0], choices.redshifts[1]),
            universe=plan.universe,
            box=choices.box,
            volume_per_row=None if volume is None else volume.values,
            weight=sources.weight if "weight" in plan.columns else None,
        )
        for i, (low, high) in enumerate(zip(found.edges[:-1], found.edges[1:], strict=True)):
            rows.append(
                {
                    "observation": parts[0],
                    "threshold": parts[1],
                    "by": by,
                    "bin": f"{low:g}-{high:g}",
                    "low": low,
                    "high": high,
                    "rows": found.rows[i],
                    "expected": found.expected[i],
                    "expected_low": found.low[i],
                    "expected_high": found.high[i],
                }
            )
    return pd.DataFrame(rows)
