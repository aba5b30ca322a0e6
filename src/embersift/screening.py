"""The main job as two functions: screen a table, count what stays hidden."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array
from embersift.catalogue import MISSING_WORDS, Layout, Sources, column_names, layout, numbers
from embersift.chain import Chain, Screened
from embersift.columns import OutputColumn, odds_column, output_columns
from embersift.errors import CatalogueError, RecipeError, did_you_mean
from embersift.plausibility import suspicion
from embersift.poisson_binomial import expected_visible
from embersift.problems import problem_text
from embersift.recipe import Recipe
from embersift.tallying import count, split_fate_column
from embersift.verdict import FATES

_FEW = 1 << 12

if TYPE_CHECKING:
    import pandas as pd
    from astropy.table import Table

    T = TypeVar("T", pd.DataFrame, Table)

__all__ = [
    "Screening",
    "attach",
    "fates_of_table",
    "screen",
    "screen_table",
    "tally",
    "tally_screening",
]


@dataclass(frozen=True)
class Screening:
    """A screened table in memory with all that a summary needs."""

    table: Any  # the user's table with the output columns behind its own
    chain: Chain
    layout: Layout
    sources: Sources
    result: Screened


def screen(table: T, recipe: Recipe | None = None, *, threads: int = 2) -> T:
    """Judge every black hole of a table.

    Parameters
    ----------
    table : pandas.DataFrame or astropy.table.Table
        One row per black hole; columns as in ``docs/columns.md``. It is not changed.
    recipe : Recipe, optional
        Every choice of the run; the defaults without one.
    threads : int
        Threads to use; the result does not depend on it.

    Returns
    -------
    the same kind of table
        A copy with the output columns of ``docs/columns.md`` behind the input's own. Units are in
        ``Table`` columns, or in ``DataFrame.attrs["units"]``.

    Raises
    ------
    CatalogueError
        The table cannot be used: what was found and what to do is in the message.
    RecipeError
        The recipe asks for what cannot be done.

    Examples
    --------
    >>> import pandas as pd
    >>> galaxy = pd.DataFrame(
    ...     {"mstar": [3e9], "sfr": [0.3], "mbh": [1e5], "mdot": [1e-4], "redshift": [0.05]}
    ... )
    >>> screen(galaxy)["fate_any_2"].tolist()
    ['visible']
    """
    chosen = recipe or Recipe()
    plan, chain = _prepared(table, chosen, "the table")
    _, result = _run(table, plan, chain, threads=threads, keep_sources=chain.blends_hosts)
    return attach(table, chain, result)  # type: ignore[no-any-return]


def screen_table(
    table: Any, recipe: Recipe, *, origin: str = "the table", threads: int = 2
) -> Screening:
    """`screen`, keeping what a summary needs besides the table."""
    plan, chain = _prepared(table, recipe, origin)
    sources, result = _run(table, plan, chain, threads=threads, keep_sources=True)
    assert sources is not None
    return Screening(attach(table, chain, result), chain, plan, sources, result)


def _prepared(table: Any, recipe: Recipe, origin: str) -> tuple[Layout, Chain]:
    """The table's layout and the recipe's chain, once it is sure that they can be used."""
    from embersift.tables import units_of

    names = column_names(table)
    plan = layout(names, units_of(table), recipe, origin)
    chain = Chain(recipe)
    added = declared_columns(chain)
    refuse_collisions(names, added, origin)
    if len(table) == 0:
        raise CatalogueError(f"{origin}: the table has columns and no rows; nothing to screen.")
    suspicion(plan, table)
    return plan, chain


def _run(
    table: Any, plan: Layout, chain: Chain, *, threads: int, keep_sources: bool
) -> tuple[Sources | None, Screened]:
    raw = plan.raw_columns(table)
    sources, result = chain.run_catalogue(
        len(table),
        lambda part: plan.take(raw.part(part)),
        threads=threads,
        keep_sources=keep_sources,
    )
    host = host_numbers(table, plan) if chain.blends_hosts else None
    if host is not None and sources is not None:
        chain.blend(sources, host, result)
    return sources, result


def refuse_collisions(names: Sequence[str], added: Sequence[OutputColumn], origin: str) -> None:
    """Stop when an input column has the name of one that would be written."""
    refuse_names(names, [column.name for column in added], origin)


def refuse_names(names: Iterable[str], added: Iterable[str], origin: str) -> None:
    """Stop when a column that would be added is there already."""
    both = sorted(set(names) & set(added))
    if both:
        raise CatalogueError(
            f"{origin}: already has the column{'s' if len(both) > 1 else ''} {', '.join(both)}, "
            "which would be written. Is it an output of embersift? Take the original, "
            "or rename them."
        )


def declared_columns(chain: Chain) -> tuple[OutputColumn, ...]:
    """The output columns of a run in their order."""
    recipe = chain.recipe
    return output_columns(
        [o.name for o in recipe.observation], recipe.screen.thresholds, odds=chain.with_odds
    )


def result_columns(chain: Chain, result: Screened) -> dict[str, Any]:
    """The output columns of a block by name: float arrays, and Categoricals for words."""
    import pandas as pd

    fates = pd.Index(FATES)
    columns: dict[str, Any] = dict(result.luminosities._asdict())
    for name, seen in result.fluxes.items():
        columns[f"flux_agn_{name}"] = seen.agn
        columns[f"flux_background_{name}"] = seen.background
        columns[f"excess_{name}"] = seen.excess
    for name, codes in result.fates.items():
        columns[name] = pd.Categorical.from_codes(codes, categories=fates, validate=False)
    columns |= result.odds
    columns["stretched"] = _words(result.stretched, chain.stretched_text)
    columns["problem"] = _words(result.problems, problem_text)
    return columns


def _words(bits: NDArray[np.unsignedinteger[Any]], text: Callable[[int], str]) -> Any:
    """Bit patterns to text: each pattern that occurs is spelled once."""
    import pandas as pd

    if bits.size and int(bits.max()) < _FEW:
        # small patterns index a table, which is many times faster than hashing a million of them
        patterns = np.flatnonzero(np.bincount(bits.astype(np.intp, copy=False)))
        place = np.zeros(_FEW, dtype=np.int16)
        place[patterns] = np.arange(patterns.size)
        codes = place.take(bits)
    else:
        marked = np.flatnonzero(bits)
        codes = np.zeros(bits.size, dtype=np.int16)
        found, others = pd.factorize(bits[marked])
        codes[marked] = found + 1
        patterns = np.concatenate(([0], others))
    words = pd.Index([text(int(pattern)) for pattern in patterns])
    return pd.Categorical.from_codes(codes, categories=words, validate=False)


def attach(table: Any, chain: Chain, result: Screened) -> Any:
    """A copy of the user's table with the output columns behind its own."""
    import pandas as pd

    declared = declared_columns(chain)
    columns = result_columns(chain, result)
    if isinstance(table, pd.DataFrame):
        ordered = {c.name: columns[c.name] for c in declared}
        added = pd.DataFrame(ordered, index=table.index, copy=False)
        screened = pd.concat([table, added], axis=1)
        units = dict(table.attrs.get("units", {}))
        screened.attrs = {
            **table.attrs,
            "units": units | {c.name: c.unit for c in declared if c.unit},
        }
        return screened
    screened = table.copy()
    for column in declared:
        values = columns[column.name]
        if isinstance(values, pd.Categorical):
            values = np.asarray(values.astype(str)).astype(str)
        screened[column.name] = values
        if column.unit:
            screened[column.name].unit = column.unit
        screened[column.name].description = column.meaning
    return screened


def tally(
    screened: Any,
    recipe: Recipe | None = None,
    *,
    by: str | None = None,
    edges: Sequence[float] | None = None,
    split: str | None = None,
    origin: str = "the table",
) -> pd.DataFrame:
    """Count a screened table: hidden fractions per bin, and where the hidden ones went.

    Parameters
    ----------
    screened : pandas.DataFrame or astropy.table.Table
        What `screen` returned, or such a table read from a file.
    recipe : Recipe, optional
        The recipe it was screened with (it says which column is which, and how to count).
    by : str, optional
        Column whose bins are counted; ``recipe.tally.by`` by default.
    edges : sequence of float, optional
        Bin edges, ascending; log10 for ``mstar`` and ``mbh``.
    split : str, optional
        ``"central"`` counts central and off-centre holes apart, by ``offset``.
    origin : str
        File name, for messages.

    Returns
    -------
    pandas.DataFrame
        Tidy: one row per observation, threshold, group and bin (columns: ``docs/columns.md``).

    Raises
    ------
    CatalogueError
        The table has no fates, or lacks the column that is asked for.
    RecipeError
        Edges that do not ascend, an unknown split, or another column than the recipe's without
        edges of its own.

    Examples
    --------
    >>> import pandas as pd
    >>> galaxy = pd.DataFrame(
    ...     {"mstar": [3e9], "sfr": [0.3], "mbh": [1e5], "mdot": [1e-4], "redshift": [0.05]}
    ... )
    >>> counts = tally(screen(galaxy), edges=[9, 10])
    >>> counts.loc[counts["threshold"] == 2, ["black_holes", "visible"]].sum().tolist()
    [1, 1]
    """
    recipe = recipe or Recipe()
    changes: dict[str, Any] = {}
    if by is not None:
        changes["tally.by"] = by
    if edges is not None:
        changes["tally.edges"] = [float(edge) for edge in edges]
    _check_edges_fit(recipe, changes)
    if changes:
        recipe = recipe.with_settings(changes)
    names = column_names(screened)
    fates = fates_of_table(screened, names, origin)
    from embersift.tables import units_of

    plan = layout(names, units_of(screened), recipe, origin)
    sources = plan.take(screened)
    chances = {
        name: numbers(screened[name]).values for name in map(odds_column, fates) if name in names
    }
    return _count(plan, sources, fates, chances, screened, recipe, split)


def tally_screening(done: Screening, *, split: str | None = None) -> pd.DataFrame:
    """`tally` of a screening that is still in memory."""
    return _count(
        done.layout,
        done.sources,
        done.result.fates,
        done.result.odds,
        done.table,
        done.chain.recipe,
        split,
    )


def fates_of_table(table: Any, names: Sequence[str], origin: str) -> dict[str, Any]:
    """The fate columns of a screened table as codes, by column name."""
    import pandas as pd

    known = {fate: code for code, fate in enumerate(FATES)}
    found: dict[str, Any] = {}
    for name in names:
        if split_fate_column(name) is None:
            continue
        column = pd.Series(np.asarray(table[name]).astype(str))
        codes, words = pd.factorize(column)
        strange = [word for word in words if word not in known]
        if strange:
            raise CatalogueError(
                f"{origin}: column {name!r} holds {strange[0]!r}, which is no fate. "
                f"Known: {', '.join(FATES[:8])}, ..."
            )
        found[name] = np.array([known[word] for word in words], dtype=np.int8)[codes]
    if not found:
        raise CatalogueError(
            f"{origin}: no column is named fate_NAME_T, so this is not a screened table. "
            "`embersift screen` writes one."
        )
    return found


def _check_edges_fit(recipe: Recipe, changes: Mapping[str, Any]) -> None:
    by = changes.get("tally.by", recipe.tally.by)
    if by != recipe.tally.by and "tally.edges" not in changes:
        raise RecipeError(
            f"counting by {by} needs edges for it (--edges A,B,C); the recipe's are for "
            f"{recipe.tally.by}."
        )


def _count(
    plan: Layout,
    sources: Sources,
    fates: Mapping[str, Any],
    chances: Mapping[str, Array],
    table: Any,
    recipe: Recipe,
    split: str | None,
) -> pd.DataFrame:

    by, values = values_of(plan, sources, table, recipe.tally.by)
    groups = None
    if split is not None:
        if split != "central":
            raise RecipeError(f"--split {split}: only central is known (by the column offset).")
        if "offset" not in plan.columns:
            raise CatalogueError(f"{plan.origin}: --split central needs the column offset.")
        limit = recipe.tally.central_within
        code = np.where(np.isnan(sources.offset), 2, (sources.offset > limit).astype(int))
        labels = (f"offset up to {limit:g} kpc", f"offset above {limit:g} kpc", "offset unknown")
        groups = (code.astype(np.int8), labels)
    host = host_numbers(table, plan)
    tallied = count(
        values,
        fates,
        np.asarray(recipe.tally.edges),
        by=by,
        weight=sources.weight if "weight" in plan.columns else None,
        host=host,
        split=groups,
    )
    frame = tallied.table(interval=recipe.tally.interval, level=recipe.tally.level)
    return _with_expected(frame, values, chances, recipe, groups, sources, plan)


def _with_expected(
    frame: pd.DataFrame,
    values: Array,
    chances: Mapping[str, Array],
    recipe: Recipe,
    groups: tuple[NDArray[np.int8], Sequence[str]] | None,
    sources: Sources,
    plan: Layout,
) -> pd.DataFrame:
    """Add what the odds lead to expect: number visible per slot, and its spread."""
    if not chances:
        return frame
    from embersift.bins import checked_edges, slots

    edges = checked_edges(recipe.tally.edges)
    size = len(edges) + 2
    code, labels = groups if groups is not None else (np.zeros(values.size, np.int8), ("all",))
    index = code.astype(np.intp) * size + slots(values, edges)
    weight = sources.weight if "weight" in plan.columns else None
    frame["expected_visible"] = np.nan
    frame["expected_spread"] = np.nan
    for name, chance in chances.items():
        look = split_fate_column("fate" + name.removeprefix("odds"))
        assert look is not None
        found = expected_visible(chance, index, size * len(labels), weight)
        here = (frame["observation"] == look[0]) & (frame["threshold"] == look[1])
        frame.loc[here, "expected_visible"] = found.mean
        frame.loc[here, "expected_spread"] = found.spread
    return frame


def host_numbers(table: Any, plan: Layout) -> NDArray[np.uint64] | None:
    """One number per galaxy from `host_id`; None without that column."""
    import pandas as pd

    if "host_id" not in plan.columns:
        return None
    column = pd.Series(np.asarray(table[plan.columns["host_id"].column]).astype(str))
    codes = np.asarray(pd.util.hash_array(column.to_numpy(dtype=object)), dtype=np.uint64)
    # rows without a host are galaxies of their own, not one galaxy called nothing
    alone = np.flatnonzero(column.str.strip().str.lower().isin(MISSING_WORDS))
    codes[alone] = pd.util.hash_array(np.array([f"\0row {i}" for i in alone], dtype=object))
    return codes


def values_of(plan: Layout, sources: Sources, table: Any, by: str) -> tuple[str, Array]:
    """The quantity that is counted by, log10 for masses."""
    held = {
        "mstar": sources.mstar, "sfr": sources.sfr, "oh12": sources.oh12, "mbh": sources.mbh,
        "mdot": sources.mdot, "redshift": sources.z, "distance": sources.distance,
        "offset": sources.offset, "rhalf": sources.rhalf, "nh": sources.nh,
    }  # fmt: skip
    if by in ("mstar", "mbh"):
        with np.errstate(divide="ignore", invalid="ignore"):
            values = np.log10(held[by])
        return f"log10 {by}", np.where(np.isfinite(values), values, np.nan)
    if by in held:
        return by, held[by]
    names = column_names(table)
    if by not in names:
        raise CatalogueError(
            f"{plan.origin}: there is no column {by!r} to count by. "
            f"{did_you_mean(by, [*held, *names])}"
        )
    values = numbers(table[by]).values
    return by, np.where(np.isfinite(values), values, np.nan)
