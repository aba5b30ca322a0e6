"""Writes the pages of ``docs/`` that are made from declarations: laws, columns, recipe keys.

Run ``python -m embersift.docs_pages docs`` after changing a declaration; a test compares.
"""

from __future__ import annotations

import sys
from collections.abc import Mapping
from pathlib import Path

from embersift.columns import INPUT, OUTPUT
from embersift.law_pages import markdown
from embersift.problems import PROBLEMS
from embersift.recipe_text import key_table, starter

__all__ = ["pages"]

_MADE = (
    "Made from the declarations in `src/embersift/{home}` by `python -m embersift.docs_pages docs`;"
    "\na test fails when this page is stale. Do not edit it by hand."
)


def columns_page() -> str:
    lines = ["# Columns", "", _MADE.format(home="columns.py"), "", "## Input", ""]
    lines += [
        "One row per black hole; a galaxy with two holes has two rows and one `host_id`. Other",
        "names, units and logarithms are mapped in the recipe (`recipe.md`). Columns that are not",
        "listed here pass through untouched.",
        "",
        "| column | unit | needed | meaning |",
        "|---|---|---|---|",
    ]
    lines += [f"| `{c.name}` | {c.unit or '-'} | {c.need} | {c.meaning} |" for c in INPUT.values()]
    lines += [
        "",
        "Units come from the file where the format carries them (ECSV, FITS, VOTable, Parquet and",
        "HDF5 attributes), from the recipe otherwise, and default to the table above.",
        '`unit = "dex(Msun)"` is a column of log10; `littleh` in a unit needs `catalogue.h`.',
        "",
        "## Output",
        "",
        "The input's own columns first, then these. NAME is an observation, T a threshold. A",
        "missing number is NaN (null in Parquet, an empty field in CSV), never 0 or -99.",
        "",
        "| column | unit | meaning |",
        "|---|---|---|",
    ]
    lines += [f"| `{c.name}` | {c.unit or '-'} | {c.meaning} |" for c in OUTPUT]
    lines += [
        "",
        "## Fates",
        "",
        "`unusable`, else `no_black_hole`, else `dormant` (rate 0), else `visible` when nothing",
        "fails, else the criteria that failed joined by `+` in the order `faint`, `underfloor`,",
        "`outshone`.",
        "",
        "## Problems",
        "",
        "| column | reason | the row is |",
        "|---|---|---|",
    ]
    lines += [
        f"| `{p.column}` | {p.reason} | {'unusable' if p.unusable else 'judged, and noted'} |"
        for p in PROBLEMS
    ]
    lines += [
        "",
        "## Tally",
        "",
        "`embersift tally --out` and `embersift.tally` give one row per observation, threshold,",
        "group and bin; the slots below, above and without a value are there too. In a weighted",
        "tally every count but `rows` is a sum of weights.",
        "",
        *(line.strip() for line in _tally_table()),
    ]
    return "\n".join(lines) + "\n"


def _tally_table() -> list[str]:
    """The table of columns in the docstring of `Tally.table`."""
    from embersift.tallying import Tally

    text = (Tally.table.__doc__ or "").splitlines()
    return [line for line in text if line.strip().startswith("|")]


def recipe_page() -> str:
    return (
        "# The recipe\n\n"
        + _MADE.format(home="recipe_sections.py")
        + "\n\nA recipe is a TOML file; every key has a default, and an unknown key is an error"
        "\nthat names the nearest known one. `--set section.key=value` changes it for one run.\n\n"
        + key_table()
        + "\n## A starter\n\n`embersift recipe` prints this:\n\n```toml\n"
        + starter()
        + "```\n"
    )


def pages() -> Mapping[str, str]:
    """File name to content."""
    return {"laws.md": markdown(), "columns.md": columns_page(), "recipe.md": recipe_page()}


if __name__ == "__main__":
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else "docs")
    for name, content in pages().items():
        (folder / name).write_text(content, encoding="utf-8")
