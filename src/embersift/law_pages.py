"""Laws as text: the overview, one law in full, BibTeX, and the tables of ``docs/laws.md``."""

from __future__ import annotations

import math
import re
import textwrap
from collections.abc import Sequence

from embersift.laws import all_laws
from embersift.laws.declaration import BackgroundLaw, BolometricLaw, Coefficient, Law

__all__ = ["bibtex_lines", "law_lines", "markdown", "overview_lines"]

_KINDS = {
    "accretion": "Accretion: inflow rate to bolometric luminosity",
    "bolometric": "Bolometric correction: bolometric to X-ray luminosity",
    "binaries": "X-ray binaries",
    "gas": "Hot gas",
    "total": "All of the host's light in one law (never added to a gas law)",
}
_STATUS = {
    "V": "verified in a public place",
    "V-abs": "verified in the paper's abstract",
    "CALC": "computed from the stated formula",
    "MEM": "from memory, not verified against the paper",
    "PRACTICE": "common practice, no source",
}


_CITATION = re.compile(
    r"(?P<author>.+?), \d{4}, (?P<journal>[^,]+), (?P<volume>[^,]+), (?P<pages>[^\s;,]+)"
)


def _band(law: Law) -> str:
    if isinstance(law, BackgroundLaw):
        return str(law.band)
    if isinstance(law, BolometricLaw):
        return "2-10, 0.5-2 keV" if law.soft_coefficients else "2-10 keV"
    return "-"


def _scatter(law: Law) -> str:
    return "-" if law.scatter_dex is None else f"{law.scatter_dex:g} dex"


def _by_kind() -> dict[str, list[Law]]:
    grouped: dict[str, list[Law]] = {kind: [] for kind in _KINDS}
    for law in all_laws():
        grouped[law.kind].append(law)
    return grouped


def overview_lines(width: int = 80) -> list[str]:
    """One line a law: name, source, band, scatter, status."""
    lines: list[str] = []
    widest = max(len(law.name) for law in all_laws())
    for kind, laws in _by_kind().items():
        lines += [_KINDS[kind], ""]
        for law in laws:
            source = _short(law)
            row = f"  {law.name:<{widest}}  {_band(law):<15}  {_scatter(law):<8}  {law.status:<8} "
            room = width - len(row)
            lines.append(f"{row} {source[: room - 1] if room > 12 else source}".rstrip())
        lines.append("")
    lines += [
        *textwrap.wrap(
            "Columns: name, band, scatter, status, source. Status: V verified, V-abs verified in "
            "the abstract, CALC computed, MEM from memory and not verified, PRACTICE common "
            "practice. `embersift laws NAME` shows everything about one law.",
            width,
        ),
    ]
    return lines


def _short(law: Law) -> str:
    """First author and year."""
    first = law.source.citation.split(",")[0].split(" ")[0] if law.source.citation else ""
    return f"{first} {law.source.year}" if law.source.year else (first or "no source")


def _coefficient(name: str, value: Coefficient) -> str:
    number = "set by the recipe" if math.isnan(value.value) else f"{value.value:g}"
    if not math.isnan(value.plus):
        if value.plus == value.minus:
            number += f" +- {value.plus:g}"
        else:
            number += f" (+{value.plus:g} -{value.minus:g})"
        if value.error_status != value.status:
            number += f" [error {value.error_status}]"
    meaning = f"  {value.meaning}" if value.meaning else ""
    return f"{name} = {number}  [{value.status}]{meaning}"


def _span(low: float, high: float) -> str:
    if low == -math.inf:
        return f"up to {high:.4g}"
    if high == math.inf:
        return f"from {low:.4g}"
    return f"{low:.4g} to {high:.4g}"


def law_lines(laws: Sequence[Law], width: int = 80) -> list[str]:
    """Everything about each law, for a terminal."""
    lines: list[str] = []
    for law in laws:
        facts: list[tuple[str, str]] = [
            ("kind", _KINDS[law.kind]),
            ("source", law.source.citation or "none"),
        ]
        if law.source.doi:
            facts.append(("doi", law.source.doi))
        if law.source.arxiv:
            facts.append(("arXiv", law.source.arxiv))
        facts.append(("formula", law.formula_text))
        if isinstance(law, BackgroundLaw):
            facts += [
                ("band", f"{law.band}, rest frame, {'apparent' if law.apparent else 'intrinsic'}"),
                ("light", " + ".join(sorted(law.light))),
                ("IMF", law.imf),
            ]
            if law.metallicity:
                facts.append(("metallicity", law.metallicity))
        elif isinstance(law, BolometricLaw):
            facts.append(("band", _band(law)))
        for span in law.ranges:
            note = f" ({span.note})" if span.note else ""
            facts.append(
                ("range", f"{span.quantity} {_span(span.low, span.high)} [{span.status}]{note}")
            )
        if law.outside:
            facts.append(("outside", law.outside))
        if law.scatter_dex is not None:
            facts.append(("scatter", f"{law.scatter_dex:g} dex [{law.scatter_status}]"))
        for name, value in law.coefficients.items():
            facts.append(("coefficient", _coefficient(name, value)))
        if isinstance(law, BolometricLaw):
            for name, value in law.soft_coefficients.items():
                facts.append(("soft band", _coefficient(name, value)))
        facts.append(("status", f"{law.status}: {_STATUS[law.status]}"))
        if law.status_note:
            facts.append(("note", law.status_note))
        for one in law.checks:
            given = ", ".join(f"{k} {_number(v)}" for k, v in one.inputs.items())
            facts.append(("check", f"{given}: {one.quantity} {one.expected:g} ({one.source})"))
        lines += [*textwrap.wrap(f"{law.name}: {law.summary}", width), ""]
        last = ""
        for label, words in facts:
            shown = label if label != last else ""
            wrapped = textwrap.wrap(words, max(30, width - 16)) or [""]
            lines.append(f"  {shown:<12}  {wrapped[0]}")
            lines += [f"  {'':<12}  {more}" for more in wrapped[1:]]
            last = label
        lines.append("")
    return lines[:-1]


def _number(value: object) -> str:
    return f"{value:.6g}" if isinstance(value, (int, float)) else str(value)


def bibtex_lines(laws: Sequence[Law]) -> list[str]:
    """One BibTeX entry per source; fields that are not known for sure are left out."""
    lines: list[str] = []
    seen: set[str] = set()
    for law in laws:
        source = law.source
        if not source.citation or not source.year or source.citation in seen:
            continue
        seen.add(source.citation)
        key = source.bibcode or re.sub(r"[^a-z0-9]", "", law.name.lower())
        lines.append(f"@article{{{key},")
        parts = _CITATION.match(source.citation)
        if parts:
            authors = re.sub(r"(?<=\.), (?=\S)", " and ", parts["author"])
            authors = authors.replace(" et al.", " and others")
            lines.append(f"  author = {{{authors}}},")
            lines += [f"  {name} = {{{parts[name]}}}," for name in ("journal", "volume", "pages")]
        else:
            lines.append(f"  note = {{{source.citation}}},")
        lines.append(f"  year = {{{source.year}}},")
        if source.doi:
            lines.append(f"  doi = {{{source.doi}}},")
        if source.arxiv:
            lines.append(f"  eprint = {{{source.arxiv}}},")
            lines.append("  archivePrefix = {arXiv},")
        lines += ["}", ""]
    return lines[:-1] if lines else ["% no published source"]


def markdown() -> str:
    """The whole of ``docs/laws.md``."""
    lines = [
        "# The laws",
        "",
        "Made from the declarations in `src/embersift/laws/` by `python -m embersift.docs_pages`; ",
        "a test fails when this page is stale. Do not edit it by hand.",
        "",
        "Status: "
        + "; ".join(f"**{name}** {words}" for name, words in _STATUS.items())
        + ". A value marked MEM may be right; nobody here has held it against the paper.",
    ]
    for kind, laws in _by_kind().items():
        lines += ["", f"## {_KINDS[kind]}", ""]
        lines.append("| name | source | band | IMF | scatter | calibrated range | status |")
        lines.append("|---|---|---|---|---|---|---|")
        for law in laws:
            imf = law.imf if isinstance(law, BackgroundLaw) and law.name != "none" else "-"
            spans = "; ".join(
                f"{r.quantity} {_span(r.low, r.high)} [{r.status}]" for r in law.ranges
            )
            lines.append(
                f"| `{law.name}` | {law.source.citation or '-'} | {_band(law)} | {imf} "
                f"| {_scatter(law)} | {spans or 'not stated'} | {law.status} |"
            )
        for law in laws:
            lines += ["", f"### `{law.name}`", "", law.summary, ""]
            lines.append(f"- Formula: {law.formula_text}")
            if law.outside:
                lines.append(f"- Outside the range: {law.outside}")
            values = [_coefficient(n, c) for n, c in law.coefficients.items()]
            if values:
                lines.append(f"- Coefficients: {'; '.join(values)}")
            if isinstance(law, BolometricLaw) and law.soft_coefficients:
                soft = [_coefficient(n, c) for n, c in law.soft_coefficients.items()]
                lines.append(f"- Soft band: {'; '.join(soft)}")
            if law.status_note:
                lines.append(f"- Note: {law.status_note}")
    return "\n".join(lines) + "\n"
