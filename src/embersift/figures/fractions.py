"""Shares per bin: how many black holes stay hidden, and for which causes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from embersift.bins import OUTSIDE
from embersift.errors import CatalogueError
from embersift.figures.clouds import background_words
from embersift.figures.reading import Reading, View
from embersift.figures.style import (
    FATE_MARKS,
    INK,
    PAPER,
    RULE,
    SOFT_INK,
    Mark,
    dress,
    new_axes,
    plain,
    threshold_mark,
)
from embersift.recipe import Recipe
from embersift.tally_table import CAUSES

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

__all__ = ["causes", "hidden"]

_BY = {
    "log10 mstar": r"Stellar mass,  $\log_{10}\,M_*$ [M$_\odot$]",
    "log10 mbh": r"Black-hole mass,  $\log_{10}\,M_{\rm BH}$ [M$_\odot$]",
    "sfr": r"Star formation rate [M$_\odot$ yr$^{-1}$]",
    "mdot": r"Accretion rate [M$_\odot$ yr$^{-1}$]",
    "oh12": "12 + log(O/H)",
    "redshift": "Redshift",
    "distance": "Luminosity distance [Mpc]",
    "offset": "Offset [kpc]",
    "rhalf": "Half-light radius [kpc]",
    "nh": r"Intrinsic column $N_{\rm H}$ [cm$^{-2}$]",
}
_COMBINED = ("#7f93c9", "#b9c4e2", "#566aa3", "#d7ddf0")
_COMBINED_HATCH = ("xx", "oo", "||", "--")


def hidden(
    screened: Any,
    recipe: Recipe | None = None,
    *,
    observation: str | None = None,
    threshold: float | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Hidden fraction of the black holes per bin, with its interval, for every threshold.

    Parameters and errors as for `embersift.figures.light`; `threshold` is drawn stronger.
    """
    ax = ax or new_axes()
    view = Reading.of(screened, recipe).view(observation, threshold)
    counts = view.reading.counts(view.observation.name)
    bins = _bins(counts, view.threshold)
    centre, thresholds = np.arange(len(bins)), view.thresholds
    handles = []
    for place, factor in enumerate(thresholds):
        mark, strong = threshold_mark(place), factor == view.threshold
        here = _bins(counts, factor)
        share = here["hidden_fraction"].to_numpy(float)
        low, high = here["hidden_low"].to_numpy(float), here["hidden_high"].to_numpy(float)
        shift = 0.0 if len(thresholds) == 1 else 0.5 * (place / (len(thresholds) - 1) - 0.5)
        drawn = ax.errorbar(
            centre + shift,
            share,
            yerr=np.clip([share - low, high - share], 0.0, None),
            fmt=mark.shape,
            color=mark.colour,
            markersize=7.5 if strong else 5.5,
            markeredgecolor=INK,
            markeredgewidth=1.0 if strong else 0.4,
            elinewidth=2.0 if strong else 1.1,
            capsize=2.5,
            label=f"threshold {factor:g}",
            zorder=3.0 + strong,
        )
        handles.append(drawn)
    for i, number in enumerate(bins["black_holes"]):
        ax.annotate(
            _count(number), (i, 1.0), xycoords=("data", "axes fraction"), xytext=(0, -2),
            textcoords="offset points", ha="center", va="top", fontsize=8, color=SOFT_INK,
        )  # fmt: skip
    for edge in centre[1:] - 0.5:
        ax.axvline(edge, color=RULE, linewidth=0.6, zorder=0.5)
    ax.set_ylim(-0.02, 1.14)
    ax.set_yticks(np.linspace(0.0, 1.0, 6))
    _bin_ticks(ax, bins)
    level = f"{100.0 * float(counts['level'].iloc[0]):.0f} %"
    dress(
        ax,
        x=_bin_label(counts, view, background=True),
        y=f"Hidden fraction of black holes\n{counts['interval'].iloc[0]} interval, {level}",
        title=f"{view.words(threshold=False)}\nnumbers at the top: black holes in the bin",
        handles=handles,
    )
    return ax


def causes(
    screened: Any,
    recipe: Recipe | None = None,
    *,
    observation: str | None = None,
    threshold: float | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Where the hidden black holes go: the share of each cause per bin, each hole counted once.

    Parameters and errors as for `embersift.figures.light`.
    """
    from matplotlib.patches import Patch

    ax = ax or new_axes()
    view = Reading.of(screened, recipe).view(observation, threshold)
    counts = view.reading.counts(view.observation.name)
    bins = _bins(counts, view.threshold)
    total = bins["hidden"].to_numpy(float)
    base = np.zeros(len(bins))
    handles = []
    for label, names, mark in _cause_marks(bins):
        number = sum((bins[name].to_numpy(float) for name in names), np.zeros(len(bins)))
        share = np.divide(number, total, out=np.zeros(len(bins)), where=total > 0.0)
        look: dict[str, Any] = {
            "facecolor": mark.colour, "edgecolor": PAPER, "hatch": mark.hatch, "linewidth": 0.8,
        }  # fmt: skip
        ax.bar(np.arange(len(bins)), share, 0.78, bottom=base, label=label, **look)
        handles.append(Patch(label=label, **look))
        base += share
    for i, number in enumerate(bins["hidden"]):
        ax.annotate(
            _count(number), (i, 1.0), xytext=(0, 3), textcoords="offset points", ha="center",
            va="bottom", fontsize=8, color=SOFT_INK,
        )  # fmt: skip
    ax.set_ylim(0.0, 1.09)
    ax.set_yticks(np.linspace(0.0, 1.0, 6))
    _bin_ticks(ax, bins)
    dress(
        ax,
        x=_bin_label(counts, view, background=True),
        y="Share of the hidden black holes",
        title=f"{view.words()}\nnumbers at the top: hidden black holes in the bin",
        handles=handles,
        columns=3,
    )
    return ax


def _outside_words(counts: pd.DataFrame, threshold: float) -> str:
    """How many black holes lie outside the bins; empty when none does."""
    here = _at(counts, threshold)
    number = float(here.loc[here["bin"].isin(OUTSIDE), "black_holes"].sum())
    return f"{_count(number)} outside the bins" if number else ""


def _at(counts: pd.DataFrame, threshold: float) -> pd.DataFrame:
    same = np.isclose(counts["threshold"].to_numpy(float), threshold, rtol=1e-9, atol=0.0)
    here: pd.DataFrame = counts[same]
    return here


def _bins(counts: pd.DataFrame, threshold: float) -> pd.DataFrame:
    here = _at(counts, threshold)
    if here.empty:
        raise CatalogueError(
            f"The table has no verdict at threshold {threshold:g}; choose one of "
            f"{', '.join(f'{t:g}' for t in sorted(set(counts['threshold'])))}."
        )
    inside: pd.DataFrame = here[~here["bin"].isin(OUTSIDE)].reset_index(drop=True)
    return inside


def _bin_ticks(ax: Axes, bins: pd.DataFrame) -> None:
    ax.set_xlim(-0.55, len(bins) - 0.45)
    crowded = len(bins) > 9
    ax.set_xticks(
        np.arange(len(bins)), bins["bin"].tolist(),
        rotation=45 if crowded else 0, ha="right" if crowded else "center",
    )  # fmt: skip


def _bin_label(counts: pd.DataFrame, view: View, *, background: bool) -> str:
    by = str(counts["by"].iloc[0])
    chosen = view.reading.recipe
    words = _BY.get(by, plain(by))
    outside = _outside_words(counts, view.threshold)
    laws = f"{chosen.agn.accretion}, {chosen.agn.bolometric}; {background_words(chosen)}"
    return f"{words}{f'  ({outside})' if outside else ''}\n{laws}"


def _cause_marks(bins: pd.DataFrame) -> list[tuple[str, list[str], Mark]]:
    """The causes that occur: single ones in their own marks, then combinations by number."""
    there = [c for c in CAUSES if c in bins.columns and bins[c].sum() > 0]
    found = [(FATE_MARKS[c].label, [c], FATE_MARKS[c]) for c in there if "+" not in c]
    combined = sorted((c for c in there if "+" in c), key=lambda c: -bins[c].to_numpy(float).sum())
    own = combined if len(combined) <= len(_COMBINED) else combined[: len(_COMBINED) - 1]
    for i, cause in enumerate(own):
        found.append((cause, [cause], Mark(cause, _COMBINED[i], "", hatch=_COMBINED_HATCH[i])))
    if rest := combined[len(own) :]:
        label = "other combinations"
        found.append((label, rest, Mark(label, _COMBINED[-1], "", hatch=_COMBINED_HATCH[-1])))
    return found


def _count(number: float) -> str:
    return f"{number:,.0f}" if float(number).is_integer() and number < 1e7 else f"{number:,.3g}"
