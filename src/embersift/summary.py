"""What is printed after a command: the answer first, then what it rests on, then every caution."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

import numpy as np

from embersift.catalogue import Layout, Sources, column_names
from embersift.columns import INPUT
from embersift.depths import depth
from embersift.problems import UNUSABLE, problem_counts
from embersift.recipe import Observation, Recipe
from embersift.tallying import lines as tally_table
from embersift.tallying import where_hidden_lines

if TYPE_CHECKING:
    import pandas as pd

    from embersift.chain import Chain
    from embersift.running import Checked, ScreenedFile, TalliedFile

__all__ = [
    "SCREENING_ONLY",
    "aperture_cautions",
    "check_lines",
    "observation_words",
    "problem_sentences",
    "screening_lines",
    "tally_lines",
    "wrapped",
]

SCREENING_ONLY = (
    "A screening estimate: for a submission use the observatory's own tools and handbooks."
)


def wrapped(label: str, text: str, width: int, indent: int = 14) -> list[str]:
    body = textwrap.wrap(text, max(30, width - indent), break_long_words=False) or [""]
    first = f"{label:<{indent}}{body[0]}"
    return [first, *(" " * indent + more for more in body[1:])]


def _rows(count: int) -> str:
    return f"{count:,} row{'' if count == 1 else 's'}"


def screening_lines(done: ScreenedFile, width: int) -> list[str]:
    """The summary of `embersift screen`."""
    screening = done.screening
    recipe = screening.chain.recipe
    sources = screening.sources
    unusable = (sources.problems & UNUSABLE) > 0
    holes = ~unusable & (sources.mbh > 0.0)
    accreting = holes & (sources.mdot > 0.0)
    lines = wrapped(
        "Read",
        f"{done.catalogue}: {_rows(sources.mstar.size)}; {holes.sum():,} black holes, "
        f"{accreting.sum():,} accreting; {_rows(int(unusable.sum()))} unusable",
        width,
    )
    lines += wrapped("Columns", _column_words(screening.layout), width)
    lines += _law_lines(done, width)
    label = "Observed"
    for observation in recipe.observation:
        lines += wrapped(label, f"{observation.name}: {observation_words(observation)}", width)
        label = ""
    lines.append("")
    lines += _count_lines(done, recipe, width)
    lines += ["Cautions"]
    for caution in [*_cautions(done), *done.cautions]:
        lines += textwrap.wrap(
            f"- {caution}", width, subsequent_indent="  ", break_long_words=False
        )
    lines += ["", f"Wrote {done.out}"]
    if done.out.name.endswith(".csv"):
        lines.append(f"  and {done.out}.recipe.toml, the recipe behind it")
    return lines


def _law_lines(done: ScreenedFile, width: int) -> list[str]:
    lines = []
    label = "Laws"
    for law in done.screening.chain.laws:
        source = law.source.citation or "no published source"
        status = "" if law.status in ("V", "V-abs") else f" [{law.status}]"
        lines += wrapped(label, f"{law.name}: {source}{status}", width)
        label = ""
    return lines


def _count_lines(done: ScreenedFile, recipe: Recipe, width: int) -> list[str]:
    """The headline threshold in full for each observation, the others in one line each."""
    counts = done.counts
    headline = recipe.screen.headline
    level = f"{100.0 * recipe.tally.level:.0f} %"
    lines: list[str] = []
    for observation in recipe.observation:
        name = observation.name
        lines.append(f"{name}: hidden at threshold {headline:g}, {recipe.tally.interval} {level}")
        lines += tally_table(counts, name, headline, width)
        lines.append("")
        lines += where_hidden_lines(counts, name, headline, width)
        lines += _expected_lines(counts, name, headline, width)
        others = [t for t in recipe.screen.thresholds if t != headline]
        if others:
            lines += textwrap.wrap(
                "; ".join(_total_words(counts, name, threshold) for threshold in others), width
            )
        lines.append("")
    return lines


def _expected_lines(
    counts: pd.DataFrame, observation: str, threshold: float, width: int
) -> list[str]:
    """What the odds lead to expect, in one sentence; nothing when there are none."""
    if "expected_visible" not in counts:
        return []
    same = np.isclose(counts["threshold"], threshold)
    here = counts[(counts["observation"] == observation) & same]
    expected = float(here["expected_visible"].sum())
    spread = float(np.sqrt((here["expected_spread"] ** 2).sum()))
    return textwrap.wrap(
        f"by the odds: {expected:,.1f} visible expected, +- {spread:,.1f} from row to row "
        "(errors of the laws, shared by all rows, come on top)",
        width,
    )


def _total_words(counts: pd.DataFrame, observation: str, threshold: float) -> str:
    """One threshold in a few words; column names carry ten digits of it."""
    here = counts[
        (counts["observation"] == observation) & np.isclose(counts["threshold"], threshold)
    ]
    holes, visible = float(here["black_holes"].sum()), float(here["visible"].sum())
    share = f"{100.0 * (1.0 - visible / holes):.1f} %" if holes else "none of none"
    number = f"{visible:,.0f}" if visible.is_integer() else f"{visible:,.1f}"
    return f"threshold {threshold:g}: {number} visible, {share} hidden"


def observation_words(observation: Observation) -> str:
    words = (
        f"{observation.band} observed, flux limit {observation.flux_limit:g} erg/s/cm2, "
        f"Galactic column {observation.galactic_nh:g} cm-2"
    )
    if observation.aperture is not None:
        words += f", circle of {observation.aperture:g} arcsec radius"
    if observation.depth is not None:
        words += f"; reference depth {depth(observation.depth)}"
    return words


def _column_words(plan: Layout) -> str:
    words = []
    for quantity, column in plan.columns.items():
        unit = column.unit or INPUT[quantity].unit
        shown = quantity if column.column == quantity else f"{quantity} = {column.column}"
        words.append(f"{shown} [{unit}]" if unit else shown)
    if plan.choices.redshift is not None:
        words.append(f"redshift = {plan.choices.redshift:g} for all")
    return ", ".join(words)


def _cautions(done: ScreenedFile) -> list[str]:
    """What the user must know before quoting a number, most important first."""
    screening = done.screening
    sources, result = screening.sources, screening.result
    cautions = problem_sentences(sources)
    rows = sources.mstar.size
    for i, law in enumerate(screening.chain.laws):
        count = int(np.count_nonzero(result.stretched & np.uint8(1 << i)))
        if count:
            outside = f" {law.outside.rstrip('.')}." if law.outside else ""
            cautions.append(
                f"{law.name} was stretched for {count:,} of {_rows(rows)}: "
                f"outside the range it was calibrated on.{outside}"
            )
    low = int(np.count_nonzero(sources.oh12 < 7.6))
    if low and any(law.name == "lehmer2021" for law in screening.chain.laws):
        cautions.append(
            f"{_rows(low)} with O/H below 7.6, where lehmer2021 rests on few galaxies and falls."
        )
    few = int(np.count_nonzero(sources.sfr < 0.1))
    if few:
        cautions.append(
            f"{_rows(few)} with SFR below 0.1 Msun/yr: the background is a mean, and such a "
            "galaxy holds few bright binaries or none; single verdicts scatter."
        )
    cautions += aperture_cautions(screening.chain, sources)
    table = screening.chain.nh_table
    if table is not None:
        cautions.append("Odds are averaged over the table of columns, fates are not.")
        if table.thick_share > 0.0:
            cautions.append(
                f"{100.0 * table.thick_share:.0f} % of the table of columns lies beyond 1e24 cm-2, "
                "where photoelectric absorption alone is too dark."
            )
    elif not np.any(sources.nh > 0.0):
        cautions.append("No intrinsic column was given: obscured black holes are not modelled.")
    cautions.append("Accretion rates are taken as they stand; real sources vary by factors of few.")
    cautions.append(SCREENING_ONLY)
    return cautions


def aperture_cautions(chain: Chain, sources: Sources) -> list[str]:
    """What an extraction circle does not know of the galaxies."""
    circles = [o.name for o in chain.recipe.observation if o.aperture is not None]
    if not circles:
        return []
    names = ", ".join(circles)
    blind = int(np.count_nonzero(np.isnan(sources.rhalf)))
    cautions = [
        f"Circle of {names}: the host is an exponential disc seen face on, binaries and gas alike."
    ]
    if blind:
        cautions.append(
            f"{_rows(blind)} without rhalf: the whole galaxy's light competes in {names}."
        )
    return cautions


def problem_sentences(sources: Sources) -> list[str]:
    sentences = []
    for problem, count, first in problem_counts(sources.problems):
        fate = "unusable" if problem.unusable else "noted"
        where = ", ".join(str(int(row) + 1) for row in first) + (", ..." if count > 3 else "")
        sentences.append(f"{problem}: {_rows(count)} {fate} (row {where})")
    return sentences


def check_lines(done: Checked, width: int) -> list[str]:
    """The report of `embersift check`."""
    plan, sources = done.layout, done.sources
    lines = [f"{done.catalogue}: {_rows(sources.mstar.size)}", ""]
    rows = [("quantity", "column", "unit", "range after conversion")]
    for quantity, column in plan.columns.items():
        unit = column.unit or INPUT[quantity].unit or "-"
        shown = (_short(column.column, 19), _short(unit, 21))
        rows.append((quantity, *shown, _range(done, quantity)))
    widths = [max(len(row[i]) for row in rows) for i in range(3)]
    for row in rows:
        words = (f"{word:<{room}}" for word, room in zip(row, widths, strict=False))
        lines.append("  " + "  ".join([*words, row[3]]))
    absent = [q for q in INPUT if q not in plan.columns and q != "metallicity"]
    lines += ["", *wrapped("Not there", ", ".join(absent) or "nothing", width)]
    unused = [
        n for n in column_names(done.table) if n not in {c.column for c in plan.columns.values()}
    ]
    lines += wrapped("Passed on", ", ".join(unused) or "nothing", width)
    unusable = int(np.count_nonzero(sources.problems & UNUSABLE))
    lines += ["", f"{_rows(unusable)} unusable"]
    for sentence in [*problem_sentences(sources), *done.cautions]:
        lines += textwrap.wrap(f"- {sentence}", width, subsequent_indent="  ")
    if done.suspicion:
        lines += ["", *textwrap.wrap(f"This would stop a screening: {done.suspicion}", width)]
    return lines


def _range(done: Checked, quantity: str) -> str:
    if not INPUT[quantity].numeric:
        return "text"
    got = done.layout.read(done.table, quantity)
    assert got is not None
    values = got.values[np.isfinite(got.values)]
    if not values.size:
        return "no finite value"
    return f"{values.min():.4g} to {values.max():.4g}, median {np.median(values):.4g}"


def _short(text: str, room: int) -> str:
    return text if len(text) <= room else text[: room - 3] + "..."


def tally_lines(done: TalliedFile, width: int) -> list[str]:
    """The report of `embersift tally`."""
    counts = done.counts
    lines: list[str] = []
    level = f"{100.0 * done.recipe.tally.level:.0f} %"
    keys = ["observation", "threshold", "split"]
    for name, limit, group in counts[keys].drop_duplicates().itertuples(index=False):
        observation, threshold = str(name), float(limit)
        here = counts[
            (counts["observation"] == name)
            & (counts["threshold"] == limit)
            & (counts["split"] == group)
        ]
        if not here["rows"].any():
            continue  # such as holes without an offset, where every hole has one
        title = f"{observation}: hidden at threshold {threshold:g}"
        if group and group != "all":
            title += f", {group}"
        lines.append(f"{title}, {done.recipe.tally.interval} {level}")
        lines += tally_table(here, observation, threshold, width)
        lines.append("")
        lines += where_hidden_lines(here, observation, threshold, width)
        lines += _expected_lines(here, observation, threshold, width)
        lines.append("")
    if done.out is not None:
        lines.append(f"Wrote {done.out}")
    return lines
