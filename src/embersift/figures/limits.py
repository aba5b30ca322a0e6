"""Fluxes against the limit, and what another limit would do: judged again from the fluxes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from embersift.arrays import Array
from embersift.figures.clouds import background_words
from embersift.figures.reading import GROUPS, Reading, View, group_of, log10
from embersift.figures.style import (
    FATE_MARKS,
    INK,
    PAPER,
    dress,
    new_axes,
    power,
    threshold_mark,
)
from embersift.recipe import Recipe

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["curve", "depth", "fluxes"]


def fluxes(
    screened: Any,
    recipe: Recipe | None = None,
    *,
    observation: str | None = None,
    threshold: float | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Distribution of the flux that counts, by fate, with the flux limit.

    Parameters and errors as for `embersift.figures.light`.
    """
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    ax = ax or new_axes()
    view = Reading.of(screened, recipe).view(observation, threshold)
    chosen, name, limit = view.reading.recipe, view.observation.name, view.observation.flux_limit
    seen = view.accreting
    flux = log10(view.flux_counted)
    background = log10(view.reading.column(f"flux_background_{name}"))
    weight = view.reading.sources.weight if view.reading.weighted else np.ones(flux.size)
    group = group_of(view.codes)
    known = flux[seen & np.isfinite(flux)]
    handles: list[Any] = []
    if known.size:
        ends = [known.min(), known.max()] + ([np.log10(limit)] if limit > 0.0 else [])
        low, high = np.floor(4.0 * min(ends)) / 4.0, np.ceil(4.0 * max(ends) + 0.01) / 4.0
        step = 0.25 if high - low > 3.0 else 0.125
        edges = np.arange(low, high + 0.5 * step, step)
        base = np.zeros(edges.size - 1)
        for i in range(len(GROUPS) - 1, -1, -1):  # visible at the bottom, on a common base line
            rows = seen & (group == i) & np.isfinite(flux)
            if not rows.any():
                continue
            mark = FATE_MARKS[GROUPS[i]]
            number = np.histogram(flux[rows], edges, weights=weight[rows])[0]
            look: dict[str, Any] = {
                "facecolor": mark.colour, "edgecolor": PAPER, "hatch": mark.hatch, "linewidth": 0.4,
            }  # fmt: skip
            ax.bar(edges[:-1], number, step, bottom=base, align="edge", label=mark.label, **look)
            handles.append(Patch(label=mark.label, **look))
            base += number
        rows = seen & np.isfinite(background)
        if rows.any():
            number = np.histogram(background[rows], edges, weights=weight[rows])[0]
            line = (0, (3.0, 1.5))
            ax.stairs(number, edges, color=INK, linewidth=1.4, linestyle=line, zorder=4)
            handles.append(Line2D([], [], color=INK, lw=1.4, ls=line, label="their background"))
    else:
        ax.text(0.5, 0.5, "no accreting black hole", transform=ax.transAxes, ha="center")
    if limit > 0.0:
        ax.axvline(np.log10(limit), color=INK, linewidth=1.6, zorder=5)
        handles.append(Line2D([], [], color=INK, linewidth=1.6, label=f"flux limit {power(limit)}"))
    counted = "Black hole" if chosen.screen.flux_of == "agn" else "Black hole + background"
    dress(
        ax,
        x=f"{counted},  $\\log_{{10}}\\,F$({view.observation.band}) "
        f"[erg s$^{{-1}}$ cm$^{{-2}}$]\n{chosen.agn.accretion}, {chosen.agn.bolometric}; "
        f"{background_words(chosen)}",
        y="Accreting black holes" + (", weighted" if view.reading.weighted else ""),
        title=view.words(),
        handles=handles,
        columns=3,
    )
    return ax


def depth(
    screened: Any,
    recipe: Recipe | None = None,
    *,
    observation: str | None = None,
    threshold: float | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Hidden fraction against the flux limit, one curve per threshold, from the stored fluxes.

    Parameters and errors as for `embersift.figures.light`; `threshold` is drawn stronger.
    """
    from matplotlib.lines import Line2D

    ax = ax or new_axes()
    view = Reading.of(screened, recipe).view(observation, threshold)
    chosen, limit = view.reading.recipe, view.observation.flux_limit
    known = log10(view.flux_counted[view.accreting])
    known = known[np.isfinite(known)]
    handles: list[Any] = []
    if known.size:
        ends = [np.percentile(known, 10.0), known.max()]
        if limit > 0.0:
            ends += [np.log10(limit) - 0.5, np.log10(limit) + 0.5]
        grid = np.linspace(np.floor(min(ends)), np.ceil(max(ends)), 161)
        for place, factor in enumerate(view.thresholds):
            mark, strong = threshold_mark(place), factor == view.threshold
            ax.plot(
                grid,
                curve(view, 10.0**grid, factor),
                color=mark.colour,
                linestyle=mark.line,
                linewidth=2.4 if strong else 1.5,
                marker=mark.shape,
                markevery=(4 + 3 * place, 20),
                markersize=5.0,
                markeredgecolor=INK,
                markeredgewidth=0.4,
                label=f"threshold {factor:g}",
                zorder=3.0 + strong,
            )
        handles = list(ax.get_lines())
        ax.set_xlim(grid[0], grid[-1])
    else:
        ax.text(0.5, 0.5, "no accreting black hole", transform=ax.transAxes, ha="center")
    if limit > 0.0:
        ax.axvline(np.log10(limit), color=INK, linewidth=1.0, zorder=2)
        handles.append(Line2D([], [], color=INK, linewidth=1.0, label=f"flux limit {power(limit)}"))
    ax.set_ylim(-0.02, 1.02)
    dress(
        ax,
        x=f"Flux limit,  $\\log_{{10}}\\,F$({view.observation.band}) "
        f"[erg s$^{{-1}}$ cm$^{{-2}}$]\n{chosen.agn.accretion}, {chosen.agn.bolometric}; "
        f"{background_words(chosen)}",
        y="Hidden fraction of all black holes",
        title=f"{view.observation.name}: {view.observation.band} observed, judged again at each "
        "limit",
        handles=handles,
    )
    return ax


def curve(view: View, limits: Array, threshold: float) -> Array:
    """Hidden fraction of all black holes at each flux limit, for one threshold.

    Parameters
    ----------
    view : View
        Which observation of which table.
    limits : array
        Flux limits [erg/s/cm2].
    threshold : float
        Any factor above the background, whether the table was screened at it or not.

    Returns
    -------
    array
        NaN where there is no black hole at all. Equality passes, as in a verdict.
    """
    weight = view.reading.sources.weight if view.reading.weighted else np.ones(view.codes.size)
    holes = weight[view.holes].sum()
    if holes == 0.0:
        return np.full(np.shape(limits), np.nan)
    passing = view.accreting & ~view.blended & (view.excess >= threshold)
    passing &= view.reading.column("lx_agn") >= view.reading.recipe.screen.floor
    flux, weight = view.flux_counted[passing], weight[passing]
    order = np.argsort(flux)
    fainter = np.concatenate([[0.0], np.cumsum(weight[order])])
    below = fainter[np.searchsorted(flux[order], limits, side="left")]
    return np.asarray(1.0 - (fainter[-1] - below) / holes)
