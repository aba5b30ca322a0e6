"""The answer of a report: how many stay hidden, in words and per bin, and why."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from embersift.bins import OUTSIDE
from embersift.figures.reading import View
from embersift.intervals import binomial_interval, effective_number
from embersift.recipe import Recipe
from embersift.tally_table import CAUSES

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Answer", "Bin", "answer_of"]


@dataclass(frozen=True)
class Bin:
    """One line of the answer."""

    name: str
    holes: str
    accreting: str
    visible: str
    share: str
    interval: str
    width: float  # of the bar [%]
    reason: str


@dataclass(frozen=True)
class Answer:
    """What one observation says at the headline threshold."""

    name: str
    seen: str
    sentences: tuple[str, ...]
    by: str
    bins: tuple[Bin, ...]
    others: tuple[tuple[str, str, str, str], ...]


def answer_of(view: View) -> Answer:
    recipe, name = view.reading.recipe, view.observation.name
    counts = view.reading.counts(name)
    here = _at(counts, view.threshold)
    whole = here["black_holes"].dtype.kind == "i"
    shown = here[~here["bin"].isin(OUTSIDE) | (here["rows"] > 0)]
    limit, column = view.observation.flux_limit, view.observation.galactic_nh
    seen = f"{view.observation.band} observed, " + (
        f"flux limit {limit:g} erg/s/cm²" if limit > 0.0 else "no flux limit"
    )
    seen += f", Galactic column {column:g} cm⁻²" if column > 0.0 else ""
    others = []
    for threshold in view.thresholds:
        total = _total(_at(counts, threshold), recipe)
        others.append(
            (
                f"{threshold:g}",
                _count(total.visible, whole),
                _percent(total.share) + " %",
                f"{_percent(total.low)}–{_percent(total.high)} %",
            )
        )
    return Answer(
        name=name,
        seen=seen,
        sentences=_sentences(here, view, whole),
        by=str(here["by"].iloc[0]).replace("log10 ", "log₁₀ "),
        bins=tuple(_bin(row, whole) for _, row in shown.iterrows()),
        others=tuple(others),
    )


@dataclass(frozen=True)
class _Total:
    holes: float
    visible: float
    hidden: float
    share: float
    low: float
    high: float


def _total(here: pd.DataFrame, recipe: Recipe) -> _Total:
    """All bins together, those outside the edges included."""
    holes, visible, hidden = (float(here[n].sum()) for n in ("black_holes", "visible", "hidden"))
    if not holes:
        return _Total(0.0, 0.0, 0.0, np.nan, np.nan, np.nan)
    effective = holes
    if here["black_holes"].dtype.kind != "i":
        each, n = here["n_effective"].to_numpy(float), here["black_holes"].to_numpy(float)
        squares = np.divide(n * n, each, out=np.zeros(n.size), where=each > 0.0)
        effective = float(effective_number(holes, squares.sum()))
    low, high = binomial_interval(
        hidden if effective == holes else hidden / holes * effective,
        effective,
        level=recipe.tally.level,
        method=recipe.tally.interval,
    )
    return _Total(holes, visible, hidden, hidden / holes, float(low), float(high))


def _sentences(here: pd.DataFrame, view: View, whole: bool) -> tuple[str, ...]:
    total = _total(here, view.reading.recipe)
    if not total.holes:
        return ("There is no black hole in the table that could be judged.",)
    level = f"{100.0 * view.reading.recipe.tally.level:.0f} %"
    first = (
        f"Of {_count(total.holes, whole)} black holes, {_count(total.visible, whole)} are visible "
        f"and {_percent(total.share)} % stay hidden "
        f"({level} interval {_percent(total.low)}–{_percent(total.high)} %)."
    )
    found = _reasons(here)
    if not found:
        return (first, "None is hidden.")
    words = [f"{cause} ({_percent(number / total.hidden)} %)" for cause, number in found[:4]]
    more = f"; {len(found) - 4} more in the figure" if len(found) > 4 else ""
    return (first, f"Why they are hidden: {', '.join(words)}{more}.")


def _reasons(rows: pd.DataFrame) -> list[tuple[str, float]]:
    found = [(c, float(rows[c].sum())) for c in CAUSES if c in rows.columns]
    return sorted(((c, n) for c, n in found if n > 0.0), key=lambda pair: -pair[1])


def _bin(row: pd.Series[Any], whole: bool) -> Bin:
    hidden, share = float(row["hidden"]), float(row["hidden_fraction"])
    found = _reasons(row.to_frame().T)
    empty = np.isnan(share)
    return Bin(
        name=str(row["bin"]),
        holes=_count(row["black_holes"], whole),
        accreting=_count(row["accreting"], whole),
        visible=_count(row["visible"], whole),
        share="–" if empty else _percent(share),
        interval=""
        if empty
        else f"{_percent(float(row['hidden_low']))}–{_percent(float(row['hidden_high']))}",
        width=0.0 if empty else round(100.0 * share, 1),
        reason=f"{found[0][0]} ({_percent(found[0][1] / hidden)}\u00a0%)" if found else "",
    )


def _at(counts: pd.DataFrame, threshold: float) -> pd.DataFrame:
    same = np.isclose(counts["threshold"].to_numpy(float), threshold, rtol=1e-9, atol=0.0)
    here: pd.DataFrame = counts[same]
    return here


def _count(number: float, whole: bool) -> str:
    if number >= 1e9 or (not whole and 0.0 < number < 0.05):
        return f"{number:.3g}"
    return f"{int(number):,}" if whole else f"{number:,.1f}"


def _percent(share: float) -> str:
    """One decimal; what is not quite none or all does not look like it."""
    if np.isnan(share):
        return "–"
    if 0.0 < share < 0.0005:
        return "<0.1"
    if 0.9995 <= share < 1.0:
        return ">99.9"
    return f"{100.0 * share:.1f}"
