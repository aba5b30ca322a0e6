"""One mark per black hole; shading and outlines where marks would run into a black cloud."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, cast

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array
from embersift.constants import MPC
from embersift.figures.reading import GROUPS, Reading, group_of, log10
from embersift.figures.style import (
    FATE_MARKS,
    INK,
    PAPER,
    SOFT_INK,
    Mark,
    dress,
    new_axes,
    plain,
    power,
    threshold_mark,
)
from embersift.recipe import Recipe

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["CROWD", "contrast", "light", "masses"]

CROWD = 5000
"""Above this many points a cloud is shaded by density."""

_ENCLOSED = 0.8  # share of a fate's black holes inside its outline
_FEW = 200  # a fate with fewer is drawn hole by hole, also over shading
_SHADES = ["#f4f1ea", "#d3cabb", "#b5ada3", "#938c86"]
_MSTAR = r"Stellar mass,  $\log_{10}\,M_*$ [M$_\odot$]"


def light(
    screened: Any,
    recipe: Recipe | None = None,
    *,
    observation: str | None = None,
    threshold: float | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Intrinsic L(2-10 keV) of the accreting black holes against stellar mass, with fates.

    Parameters
    ----------
    screened : pandas.DataFrame or astropy.table.Table
        What `embersift.screen` returned, or such a table read from a file.
    recipe : Recipe, optional
        The recipe it was screened with.
    observation, threshold : optional
        Whose verdicts; the recipe's first observation and its headline threshold by default.
    ax : matplotlib Axes, optional
        Where to draw; on a figure of its own by default.

    Returns
    -------
    Axes

    Raises
    ------
    FiguresMissing
        matplotlib is not installed.
    CatalogueError, RecipeError
        The table or the recipe has no such observation or threshold.
    """
    ax = ax or new_axes()
    view = Reading.of(screened, recipe).view(observation, threshold)
    reading, chosen = view.reading, view.reading.recipe
    x, y = log10(reading.sources.mstar), log10(reading.column("lx_agn"))
    handles = _cloud(ax, x, y, np.where(view.accreting, group_of(view.codes), -1))
    background = log10(reading.column("lx_background"))
    handles += _running_median(ax, x, np.where(view.accreting, background, np.nan))
    if chosen.screen.floor > 0.0:
        ax.axhline(np.log10(chosen.screen.floor), color=SOFT_INK, linewidth=0.9, zorder=1.5)
        handles.append(
            _line(f"floor {power(chosen.screen.floor)} erg s$^{{-1}}$", SOFT_INK, "-", 0.9)
        )
    dress(
        ax,
        x=_MSTAR,
        y="Black hole,  $\\log_{10}\\,L$(2-10 keV) [erg s$^{-1}$]\n" + _agn_laws(chosen),
        title=view.words(),
        handles=handles,
        columns=3,
    )
    return ax


def contrast(
    screened: Any,
    recipe: Recipe | None = None,
    *,
    observation: str | None = None,
    threshold: float | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Light of the black hole against the expected background, with a line per threshold.

    Both are 4 pi d_L^2 times the flux in the observed band, so that the lines are exactly where
    the verdicts change. Parameters and errors as for `light`.
    """
    ax = ax or new_axes()
    view = Reading.of(screened, recipe).view(observation, threshold)
    reading, chosen, name = view.reading, view.reading.recipe, view.observation.name
    sphere = np.log10(4.0 * np.pi) + 2.0 * log10(reading.sources.distance * MPC)
    x = log10(reading.column(f"flux_background_{name}")) + sphere
    y = log10(reading.column(f"flux_agn_{name}")) + sphere
    handles = _cloud(ax, x, y, np.where(view.accreting, group_of(view.codes), -1))
    span, height = np.array(ax.get_xlim()), ax.get_ylim()
    for place, factor in enumerate(view.thresholds):
        # (agn + background) / background >= t is agn >= (t - 1) background
        least = factor - 1.0 if chosen.screen.criterion == "total" else factor
        if least <= 0.0:
            continue
        mark = threshold_mark(place)
        width = 1.6 if factor == view.threshold else 1.0
        ax.plot(span, span + np.log10(least), color=INK, ls=mark.line, lw=width, zorder=3.5)
        handles.append(_line(f"threshold {factor:g}", INK, mark.line, width))
    ax.set_xlim(*span)
    ax.set_ylim(height)
    dress(
        ax,
        x="Expected background,  $\\log_{10}\\,4\\pi d_L^2 F$"
        f"({view.observation.band}) [erg s$^{{-1}}$]\n{background_words(chosen)}",
        y=f"Black hole,  $\\log_{{10}}\\,4\\pi d_L^2 F$({view.observation.band}) [erg s$^{{-1}}$]\n"
        + _agn_laws(chosen),
        title=view.words(),
        handles=handles,
        columns=3,
    )
    return ax


def masses(
    screened: Any,
    recipe: Recipe | None = None,
    *,
    observation: str | None = None,
    threshold: float | None = None,
    ax: Axes | None = None,
) -> Axes:
    """Black-hole mass against stellar mass, with fates. Parameters and errors as for `light`."""
    ax = ax or new_axes()
    view = Reading.of(screened, recipe).view(observation, threshold)
    sources = view.reading.sources
    handles = _cloud(ax, log10(sources.mstar), log10(sources.mbh), group_of(view.codes))
    dress(
        ax,
        x=_MSTAR,
        y=r"Black-hole mass,  $\log_{10}\,M_{\rm BH}$ [M$_\odot$]",
        title=view.words(),
        handles=handles,
        columns=3,
    )
    return ax


def background_words(recipe: Recipe) -> str:
    """The background laws by name."""
    chosen = recipe.background
    if chosen.total is not None:
        return plain(chosen.total)
    binaries = (chosen.hmxb, chosen.lmxb) if chosen.binaries is None else (chosen.binaries,)
    names = dict.fromkeys(n for n in (*binaries, chosen.gas) if n != "none")
    return plain(" + ".join(names) or "no background")


def _agn_laws(recipe: Recipe) -> str:
    return f"{recipe.agn.accretion}, {recipe.agn.bolometric}"


def _line(label: str, colour: str, line: Any, width: float, **more: Any) -> Any:
    from matplotlib.lines import Line2D

    return Line2D([], [], color=colour, linestyle=line, linewidth=width, label=label, **more)


def _running_median(ax: Axes, x: Array, y: Array) -> list[Any]:
    """Median of `y` in slices of `x` that hold enough rows to have one."""
    good = np.isfinite(x) & np.isfinite(y)
    x, y = x[good], y[good]
    if x.size < 30:
        return []
    edges = np.linspace(x.min(), x.max(), 13)
    place = np.clip(np.searchsorted(edges, x, side="right") - 1, 0, 11)
    points = [
        (0.5 * (edges[i] + edges[i + 1]), float(np.median(y[place == i])))
        for i in range(12)
        if np.count_nonzero(place == i) >= 5
    ]
    if len(points) < 2:
        return []
    line = (0, (3.0, 1.5))
    ax.plot(*zip(*points, strict=True), color=INK, linestyle=line, linewidth=1.3, zorder=3.5)
    return [_line("median background", INK, line, 1.3)]


def _cloud(ax: Axes, x: Array, y: Array, group: NDArray[np.int8]) -> list[Any]:
    """Draw the rows of each group (-1: none) and return what the legend shows."""
    keep = (group >= 0) & np.isfinite(x) & np.isfinite(y)
    x, y, group = x[keep], y[keep], group[keep]
    if not x.size:
        ax.text(0.5, 0.5, "no black hole to show", transform=ax.transAxes, ha="center", color=INK)
        return []
    crowded = x.size > CROWD
    if crowded:
        _shade(ax, x, y)
    handles = []
    for i, name in enumerate(GROUPS):
        rows = np.flatnonzero(group == i)
        if not rows.size:
            continue
        mark = FATE_MARKS[name]
        outlined = crowded and rows.size >= _FEW
        if outlined:
            _outline(ax, x[rows], y[rows], mark, (x.min(), x.max()), (y.min(), y.max()))
        else:
            _marks(ax, x[rows], y[rows], mark, name)
        handles.append(_legend_mark(mark, rows.size, outlined))
    return handles[::-1]


def _legend_mark(mark: Mark, number: int, outlined: bool) -> Any:
    return _line(
        f"{mark.label} ({number:,})",
        mark.colour if mark.label != "dormant" else SOFT_INK,
        mark.line if outlined else "none",
        1.7,
        marker=mark.shape,
        markersize=5.5,
        markerfacecolor=PAPER if mark.open else mark.colour,
        markeredgecolor=SOFT_INK if mark.open else INK,
        markeredgewidth=0.5,
    )


def _marks(ax: Axes, x: Array, y: Array, mark: Mark, name: str) -> None:
    few = x.size <= 300
    ax.scatter(
        x,
        y,
        s=20.0 if few else 12.0,
        marker=mark.shape,
        c=PAPER if mark.open else mark.colour,
        edgecolors=SOFT_INK if mark.open else INK,
        linewidths=0.5 if mark.open else 0.25,
        alpha=0.95 if few else 0.8,
        zorder=2.0 + 0.1 * GROUPS.index(name),
        label=mark.label,
    )


def _shade(ax: Axes, x: Array, y: Array) -> None:
    from matplotlib.colors import LinearSegmentedColormap, LogNorm

    # stays light, so that outlines and marks show on top; above 50 steps the bar would be an image
    ramp = LinearSegmentedColormap.from_list("ember", _SHADES, N=32)
    cells = ax.hexbin(
        x, y, gridsize=(46, 30), mincnt=1, cmap=ramp, norm=LogNorm(), linewidths=0.15, zorder=1.0
    )
    bar = ax.figure.colorbar(cells, ax=ax, pad=0.015, fraction=0.035, aspect=32)
    bar.set_label("black holes per cell", fontsize=8.5, color=INK)
    bar.ax.tick_params(labelsize=8, colors=INK)
    bar.outline.set_visible(False)


def _outline(
    ax: Axes,
    x: Array,
    y: Array,
    mark: Mark,
    wide: tuple[float, float],
    high: tuple[float, float],
) -> None:
    """The contour that holds most of the points, and the mark at their densest place."""
    from matplotlib.patheffects import AbstractPathEffect, withStroke
    from scipy.ndimage import gaussian_filter

    n = 70
    pad = [max(0.04 * (b - a), 1e-3) for a, b in (wide, high)]
    spans = ((wide[0] - pad[0], wide[1] + pad[0]), (high[0] - pad[1], high[1] + pad[1]))
    number, xe, ye = np.histogram2d(x, y, bins=n, range=spans)
    smooth = gaussian_filter(number, 1.6, mode="constant")
    ranked = np.sort(smooth, axis=None)[::-1]
    level = ranked[np.searchsorted(np.cumsum(ranked), _ENCLOSED * ranked.sum())]
    xc, yc = 0.5 * (xe[1:] + xe[:-1]), 0.5 * (ye[1:] + ye[:-1])
    colour = SOFT_INK if mark.open else mark.colour
    casing: list[AbstractPathEffect] = [withStroke(linewidth=3.4, foreground=PAPER)]
    lines = ax.contour(
        xc, yc, smooth.T, levels=[level], colors=[colour], linewidths=1.7, zorder=3.0
    )
    lines.set_linestyle(cast(Any, mark.line))
    lines.set_path_effects(casing)
    i, j = np.unravel_index(np.argmax(smooth), smooth.shape)
    ax.plot(
        xc[i], yc[j], marker=mark.shape, markersize=7.0, color=PAPER if mark.open else mark.colour,
        markeredgecolor=INK, markeredgewidth=0.8, linestyle="none", zorder=3.2,
    )  # fmt: skip
