"""Commands on files: read, run, write, and hand back what a summary needs."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from embersift import __version__
from embersift.catalogue import Layout, Sources, column_names, layout
from embersift.errors import CatalogueError, OutputError
from embersift.plausibility import suspicion
from embersift.problems import UNUSABLE
from embersift.recipe import ColumnChoice, Recipe
from embersift.recipe_text import to_toml
from embersift.screening import Screening, declared_columns, screen_table, tally, tally_screening
from embersift.spread import CHOICES, SpreadResult, spread
from embersift.tables import (
    Provenance,
    ReadOptions,
    check_output,
    read_provenance,
    read_table,
    units_of,
    write_table,
    write_text,
)
from embersift.targets import Reached, Targets, rank_targets, reach_table, sky_yield

if TYPE_CHECKING:
    import pandas as pd

    from embersift.chain import Chain

__all__ = [
    "Checked",
    "ReachedFile",
    "ScreenedFile",
    "SpreadFile",
    "TalliedFile",
    "YieldFile",
    "check_file",
    "mock_file",
    "reach_file",
    "screen_file",
    "spread_file",
    "tally_file",
    "yield_file",
]


@dataclass(frozen=True)
class ScreenedFile:
    """What `screen_file` did."""

    catalogue: Path
    out: Path
    screening: Screening
    counts: pd.DataFrame
    cautions: tuple[str, ...]

    @property
    def unusable(self) -> int:
        return int(np.count_nonzero(self.screening.sources.problems & UNUSABLE))


@dataclass(frozen=True)
class Checked:
    """What `check_file` found."""

    catalogue: Path
    table: Any
    layout: Layout
    sources: Sources
    suspicion: str
    cautions: tuple[str, ...]


@dataclass(frozen=True)
class TalliedFile:
    """What `tally_file` counted."""

    screened: Path
    recipe: Recipe
    counts: pd.DataFrame
    out: Path | None


def screen_file(
    catalogue: Path, recipe: Recipe, *, out: Path | None = None, overwrite: bool = False
) -> ScreenedFile:
    """Screen a catalogue file and write the result.

    Parameters
    ----------
    catalogue : Path
        The table to read; it is never changed.
    recipe : Recipe
        Every choice of the run.
    out : Path, optional
        Output, format by its ending; beside the catalogue as ``STEM.screened.ecsv`` by default.
    overwrite : bool
        Replace an existing output.

    Raises
    ------
    EmbersiftError
        The input, the recipe or the output cannot be used; nothing was written.
    """
    target = out or catalogue.with_name(f"{_stem(catalogue)}.screened.ecsv")
    check_output(target, overwrite=overwrite, protect=[catalogue])
    table = read_table(catalogue, _options(recipe))
    screening = screen_table(table, recipe, origin=str(catalogue))
    ids = [
        screening.layout.columns[q].column
        for q in ("id", "host_id")
        if q in screening.layout.columns
    ]
    declared = declared_columns(screening.chain)
    units = units_of(table) | {
        c.column: c.unit for c in screening.layout.columns.values() if c.unit
    }
    write_table(
        screening.table,
        target,
        provenance=provenance(recipe, screening.chain, screening.layout),
        units=units | {c.name: c.unit for c in declared if c.unit},
        ucds={c.name: c.ucd for c in declared if c.ucd},
        text_columns=ids,
        overwrite=overwrite,
        protect=[catalogue],
    )
    return ScreenedFile(
        catalogue=catalogue,
        out=target,
        screening=screening,
        counts=tally_screening(screening),
        cautions=(*screening.layout.cautions, *id_cautions(table, screening.layout)),
    )


def provenance(recipe: Recipe, chain: Chain, plan: Layout) -> Provenance:
    """What is written into an output so that it can be understood and repeated.

    The recipe names every column and unit that was used: not every format carries units, and a
    tally of the output must read the same masses.
    """
    columns = {
        quantity: ColumnChoice(column.column, column.unit)
        for quantity, column in plan.columns.items()
    }
    recipe = replace(recipe, catalogue=replace(recipe.catalogue, columns=columns))
    return Provenance(
        version=__version__,
        recipe_toml=to_toml(recipe),
        laws=tuple((law.name, law.source.citation) for law in chain.laws),
    )


def tally_file(
    screened: Path,
    settings: Mapping[str, Any],
    *,
    split: str | None = None,
    out: Path | None = None,
    overwrite: bool = False,
) -> TalliedFile:
    """Count a screened file; `settings` change keys of the recipe that it carries."""
    if out is not None:
        if out.suffix not in (".csv", ".ecsv", ".json"):
            raise OutputError(f"{out}: counts are written as .csv, .ecsv or .json.")
        check_output(out, overwrite=overwrite, protect=[screened])
    changes = dict(settings)
    by, edges = changes.pop("tally.by", None), changes.pop("tally.edges", None)
    recipe = recipe_of(screened).with_settings(changes)
    # the mapping of columns is the catalogue's, the format that of the screened file itself
    table = read_table(screened, ReadOptions())
    counts = tally(table, recipe, by=by, edges=edges, split=split, origin=str(screened))
    if out is not None and out.suffix == ".json":
        from embersift.tallying import to_records

        text = json.dumps(to_records(counts), indent=1, allow_nan=False)
        write_text(text + "\n", out, overwrite=overwrite)
    elif out is not None:
        write_table(counts, out, provenance=None, units={}, overwrite=overwrite)
    return TalliedFile(screened, recipe, counts, out)


@dataclass(frozen=True)
class ReachedFile:
    """What `reach_file` did."""

    catalogue: Path
    out: Path
    reached: Reached
    targets: Targets | None
    cautions: tuple[str, ...]


def reach_file(
    catalogue: Path,
    recipe: Recipe,
    *,
    ranked: bool = False,
    observation: str | None = None,
    out: Path | None = None,
    overwrite: bool = False,
) -> ReachedFile:
    """Find what can be reached in each galaxy of a file, and write it.

    Parameters
    ----------
    catalogue : Path
        Galaxies to be observed; it is never changed.
    recipe : Recipe
        The chain, the observations and the section ``proposal``.
    ranked : bool
        Write the target list, best first, instead of the whole table.
    observation : str, optional
        Which observation the ranking is for.
    out : Path, optional
        Output; ``STEM.reach.ecsv`` or ``STEM.targets.ecsv`` beside the catalogue by default.
    """
    kind = "targets" if ranked else "reach"
    target = out or catalogue.with_name(f"{_stem(catalogue)}.{kind}.ecsv")
    check_output(target, overwrite=overwrite, protect=[catalogue])
    table = read_table(catalogue, _options(recipe))
    reached = reach_table(table, recipe, origin=str(catalogue))
    targets = rank_targets(reached, observation=observation) if ranked else None
    written = reached.table if targets is None else targets.table
    columns = reached.layout.columns
    ids = ["id", *(columns[q].column for q in ("id", "host_id") if q in columns)]
    write_table(
        written,
        target,
        provenance=provenance(recipe, reached.chain, reached.layout),
        units=units_of(table)
        | {c.column: c.unit for c in columns.values() if c.unit}
        | {name: unit for name in column_names(written) if (unit := reach_unit(name))},
        text_columns=[name for name in ids if name in column_names(written)],
        overwrite=overwrite,
        protect=[catalogue],
    )
    return ReachedFile(
        catalogue,
        target,
        reached,
        targets,
        (*reached.layout.cautions, *id_cautions(table, reached.layout)),
    )


def reach_unit(column: str) -> str:
    """Unit of a column that `reach` writes; empty for plain numbers and words."""
    for start, unit in (
        ("reach_lx_", "erg / s"),
        ("reach_lbol_", "erg / s"),
        ("reach_mdot_", "Msun / yr"),
        ("reach_mbh_", "Msun"),
        ("saturation_flux_", "erg / (s cm2)"),
        ("exposure", "ks"),
    ):
        if column.startswith(start):
            return unit
    return ""


@dataclass(frozen=True)
class YieldFile:
    """What `yield_file` counted: one row per observation, threshold and bin."""

    screened: Path
    recipe: Recipe
    expected: pd.DataFrame
    out: Path | None


def yield_file(
    screened: Path,
    settings: Mapping[str, Any],
    *,
    out: Path | None = None,
    overwrite: bool = False,
) -> YieldFile:
    """Expected numbers of visible sources on the sky, from a screened file."""
    if out is not None:
        check_output(out, overwrite=overwrite, protect=[screened])
    recipe = recipe_of(screened).with_settings(settings)
    expected = sky_yield(read_table(screened, ReadOptions()), recipe, origin=str(screened))
    if out is not None:
        write_table(expected, out, provenance=None, units={}, overwrite=overwrite)
    return YieldFile(screened, recipe, expected, out)


@dataclass(frozen=True)
class SpreadFile:
    """What `spread_file` found."""

    catalogue: Path
    recipe: Recipe
    result: SpreadResult
    out: Path


def spread_file(
    catalogue: Path,
    recipe: Recipe,
    *,
    out: Path | None = None,
    overwrite: bool = False,
    progress: Callable[[int, int], None] | None = None,
) -> SpreadFile:
    """Repeat a screening with every combination of laws, and write the tidy table.

    Parameters
    ----------
    catalogue : Path
        The table to read.
    recipe : Recipe
        Its section ``spread`` restricts the laws.
    out : Path, optional
        Output; ``STEM.spread.csv`` beside the catalogue by default.
    progress : callable, optional
        Told steps done and steps in all.
    """
    target = out or catalogue.with_name(f"{_stem(catalogue)}.spread.csv")
    check_output(target, overwrite=overwrite, protect=[catalogue])
    choices = recipe.spread
    wanted = {kind: list(laws) for kind in CHOICES if (laws := getattr(choices, kind)) is not None}
    result = spread(
        read_table(catalogue, _options(recipe)),
        recipe,
        choices=wanted,
        draws=choices.draws,
        progress=progress,
        origin=str(catalogue),
    )
    write_table(result.table(), target, provenance=None, units={}, overwrite=overwrite)
    return SpreadFile(catalogue, recipe, result, target)


def recipe_of(screened: Path) -> Recipe:
    """The recipe that a screened file carries; the defaults when it carries none."""
    import tomllib

    found = read_provenance(screened)
    if found is None or not found.recipe_toml:
        return Recipe()
    return Recipe.from_dict(tomllib.loads(found.recipe_toml))


def check_file(catalogue: Path, recipe: Recipe) -> Checked:
    """Read a catalogue and judge its columns and rows, without computing anything."""
    table = read_table(catalogue, _options(recipe))
    plan = layout(column_names(table), units_of(table), recipe, str(catalogue))
    if len(table) == 0:
        raise CatalogueError(f"{catalogue}: the table has columns and no rows.")
    doubt = ""
    try:
        suspicion(plan, table)
    except CatalogueError as error:
        doubt = str(error)
    return Checked(
        catalogue=catalogue,
        table=table,
        layout=plan,
        sources=plan.take(table),
        suspicion=doubt,
        cautions=(*plan.cautions, *id_cautions(table, plan)),
    )


def mock_file(out: Path, rows: int, seed: int, *, overwrite: bool = False) -> None:
    """Write an invented population (see `embersift.mock`)."""
    from embersift.mock import INVENTED, UNITS, population

    check_output(out, overwrite=overwrite, protect=[])
    write_table(
        population(rows, seed),
        out,
        provenance=None
        if out.suffix == ".csv"
        else Provenance(__version__, "", (), invented=INVENTED),
        units=UNITS,
        text_columns=["id", "host_id"],
        overwrite=overwrite,
    )


def id_cautions(table: Any, plan: Layout) -> list[str]:
    """Sentences about ids that stand more than once."""
    import pandas as pd

    if "id" not in plan.columns:
        return []
    ids = pd.Series(np.asarray(table[plan.columns["id"].column]))
    twice = ids[ids.duplicated(keep="first")]
    if twice.empty:
        return []
    shown = ", ".join(str(v)[:40] for v in twice.unique()[:3])
    return [
        f"id: {len(twice):,} row{'s repeat' if len(twice) > 1 else ' repeats'} an id that stands "
        f"above ({shown}{', ...' if twice.nunique() > 3 else ''}); each was judged by itself."
    ]


def _options(recipe: Recipe) -> ReadOptions:
    choices = recipe.catalogue
    return ReadOptions(format=choices.format, separator=choices.separator, table=choices.table)


def _stem(path: Path) -> str:
    name = path.name
    for ending in (".gz",):
        name = name.removesuffix(ending)
    return Path(name).stem
