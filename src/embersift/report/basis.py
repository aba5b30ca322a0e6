"""What the numbers of a report rest on: the laws, and what to know before quoting a number."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from embersift.figures.reading import Reading
from embersift.laws import accretion_law, bolometric_law
from embersift.laws.declaration import Law
from embersift.recipe import Recipe
from embersift.verdict import UNUSABLE_ROW

__all__ = ["LawEntry", "cautions", "law_entries", "laws_in_use"]

_STATUS = {
    "V": "verified in a public place",
    "V-abs": "verified in the paper's abstract",
    "CALC": "computed from the stated formula",
    "MEM": "from memory, not verified against the paper",
    "PRACTICE": "common practice, no source",
}
_DOI = re.compile(r"10\.\d{4,9}/[-._;()/:A-Za-z0-9]+")


@dataclass(frozen=True)
class LawEntry:
    role: str
    name: str
    summary: str
    citation: str
    doi: str
    status: str
    outside: str
    stretched: int


def laws_in_use(recipe: Recipe) -> list[tuple[str, Law]]:
    """The laws behind a recipe in the order of the chain, each with its part in it."""
    from embersift.host import Background

    background = [("background", law) for law in Background(recipe).laws]
    return [
        ("accretion", accretion_law(recipe.agn.accretion)),
        ("bolometric correction", bolometric_law(recipe.agn.bolometric)),
        *background,
    ]


def law_entries(laws: Sequence[tuple[str, Law]], reading: Reading) -> list[LawEntry]:
    stretched = _stretched(reading)
    return [
        LawEntry(
            role=role,
            name=law.name,
            summary=law.summary,
            citation=law.source.citation,
            doi=law.source.doi if _DOI.fullmatch(law.source.doi) else "",
            status=_STATUS[law.status],
            outside=law.outside,
            stretched=stretched.get(law.name, 0),
        )
        for role, law in laws
    ]


def _words(reading: Reading, name: str) -> Counter[str]:
    """How often each text of a column occurs; empty cells left out."""
    import pandas as pd

    if name not in reading.names:
        return Counter()
    cells = (
        pd.Series(np.ma.filled(reading.table[name], ""))
        if hasattr(reading.table, "colnames")
        else reading.table[name]
    )
    found = cells.value_counts(dropna=True)
    return Counter(
        {str(k): int(v) for k, v in found.items() if v and str(k) not in ("", "nan", "--")}
    )


def _split_counts(texts: Counter[str], joint: str) -> Counter[str]:
    total: Counter[str] = Counter()
    for text, number in texts.items():
        for part in text.split(joint):
            total[part] += number
    return total


def _stretched(reading: Reading) -> Counter[str]:
    return _split_counts(_words(reading, "stretched"), "|")


def cautions(reading: Reading, laws: Sequence[tuple[str, Law]]) -> list[str]:
    """What a reader must know before quoting a number, most important first."""
    sources, recipe = reading.sources, reading.recipe
    rows = sources.mstar.size
    view = reading.view(None, None)
    unusable = int(np.count_nonzero(view.codes == UNUSABLE_ROW))
    found = []
    if unusable:
        found.append(f"{_rows(unusable)} of {rows:,} could not be used and count in no fraction.")
    problems = _split_counts(_words(reading, "problem"), "; ")
    for text, number in problems.most_common():
        if not text.startswith("oh12: missing"):
            found.append(f"{text}: {_rows(number)}.")
    blank = int(np.count_nonzero(np.isnan(sources.oh12)))
    if blank:
        found.append(f"{_rows(blank)} of {rows:,} without a metallicity{_fallback(laws)}.")
    stretched = _stretched(reading)
    for _, law in laws:
        if number := stretched.get(law.name, 0):
            outside = f" {law.outside.rstrip('.')}." if law.outside else ""
            found.append(
                f"{law.name} was stretched for {number:,} of {_rows(rows)}: outside the range it "
                f"was calibrated on.{outside}"
            )
    few = int(np.count_nonzero(sources.sfr < 0.1))
    if few:
        found.append(
            f"{_rows(few)} with a star formation rate below 0.1 Msun/yr: the background is a mean, "
            "and such a galaxy holds few bright binaries or none; single verdicts scatter."
        )
    if not np.any(sources.nh > 0.0) and recipe.agn.nh == 0.0:
        found.append("No intrinsic column was given: obscured black holes are not modelled.")
    memory = [law.name for _, law in laws if law.status == "MEM"]
    if memory:
        found.append(
            f"Coefficients taken from memory and not verified against the paper: "
            f"{', '.join(dict.fromkeys(memory))}."
        )
    found.append("Accretion rates are taken as they stand; real sources vary by factors of few.")
    found.append(
        "A screening estimate: for a submission use the observatory's own tools and handbooks."
    )
    return found


def _fallback(laws: Sequence[tuple[str, Law]]) -> str:
    names = [law.name for _, law in laws]
    needing = [law.name for _, law in laws if getattr(law, "needs_oh12", False)]
    if not needing:
        return "; no law in use needs one"
    place = names.index(needing[0]) + 1
    return (
        f": their binaries are from {names[place]} instead of {needing[0]}"
        if (place < len(names))
        else ""
    )


def _rows(number: int) -> str:
    return f"{number:,} row{'' if number == 1 else 's'}"
