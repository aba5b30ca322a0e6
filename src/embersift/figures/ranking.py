"""Hidden fractions under one law after the other, ranked: which choice matters most."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from embersift.errors import CatalogueError
from embersift.figures.style import INK, RULE, SOFT_INK, Mark, dress, new_axes, plain
from embersift.recipe import Recipe

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes

__all__ = ["ranking"]

_KINDS = {
    "accretion": Mark("accretion", "#0b1f3f", "o"),
    "bolometric": Mark("bolometric correction", "#a8321f", "^"),
    "binaries": Mark("binaries", "#1f8079", "s"),
    "gas": Mark("gas", "#e0a63a", "v"),
}
_NEEDED = ("observation", "threshold", "bin", "hidden_fraction", "spread_low", "spread_high")


def ranking(
    spread: Any,
    recipe: Recipe | None = None,
    *,
    observation: str | None = None,
    threshold: float | None = None,
    ax: Axes | None = None,
    bin: str | None = None,
) -> Axes:
    """Hidden fraction by law, ranked, from the table of a spread.

    Parameters
    ----------
    spread : pandas.DataFrame or astropy.table.Table
        One row per combination of laws, observation, threshold and bin; columns ``accretion``,
        ``bolometric``, ``binaries``, ``gas``, ``observation``, ``threshold``, ``bin``,
        ``hidden_fraction``, ``spread_low``, ``spread_high``.
    recipe : Recipe, optional
        Says which threshold is the headline.
    observation, threshold : optional
        The first observation of the table, and the recipe's headline (or the first threshold).
    ax : matplotlib Axes, optional
        Where to draw; on a figure of its own by default.
    bin : str, optional
        Which bin; the one named ``all``, or else the mean over the bins.

    Returns
    -------
    Axes
        One line per law. The mark is the median over the combinations with that law, the thick bar
        spans them, and the thin one reaches to the ends of their own spreads.

    Raises
    ------
    CatalogueError
        The table is no spread, or has no such observation, threshold or bin.
    """
    ax_given = ax is not None
    frame, words = _selected(_frame(spread), recipe or Recipe(), observation, threshold, bin)
    kinds = [k for k in _KINDS if k in frame.columns and frame[k].nunique() > 1]
    kinds = kinds or [k for k in _KINDS if k in frame.columns]
    rows = []
    for kind in kinds:
        for law, here in frame.groupby(kind, sort=False):
            share = here["hidden_fraction"]
            rows.append(
                (share.median(), str(law), kind, share.min(), share.max(),
                 here["spread_low"].min(), here["spread_high"].max())
            )  # fmt: skip
    rows.sort()
    ax = ax if ax is not None else new_axes(6.2, max(2.6, 1.5 + 0.26 * len(rows)))
    for place, (middle, _, kind, low, high, least, most) in enumerate(rows):
        mark = _KINDS[kind]
        if np.isfinite([least, most]).all():
            ax.plot([least, most], [place, place], color=SOFT_INK, linewidth=0.9, zorder=2)
        ax.plot(
            [low, high], [place, place], color=mark.colour, linewidth=4.0, alpha=0.45, zorder=2.5
        )
        ax.plot(
            middle, place, marker=mark.shape, color=mark.colour, markersize=7.0,
            markeredgecolor=INK, markeredgewidth=0.5, linestyle="none", zorder=3,
        )  # fmt: skip
    ax.set_yticks(np.arange(len(rows)), [plain(law) for _, law, *_ in rows])
    ax.set_ylim(-0.7, len(rows) - 0.3)
    ax.set_xlim(-0.02, 1.02)
    from matplotlib.lines import Line2D

    handles = [
        Line2D([], [], marker=_KINDS[k].shape, color=_KINDS[k].colour, linewidth=3.0,
               markersize=6.5, markeredgecolor=INK, markeredgewidth=0.5, label=_KINDS[k].label)
        for k in kinds
    ]  # fmt: skip
    dress(
        ax,
        x="Hidden fraction of black holes\n"
        "mark: median over the other laws; bar: their range; line: with each one's spread",
        y="" if ax_given else "Law",
        title=words,
        handles=handles,
    )
    ax.grid(axis="x", color=RULE, linewidth=0.6)
    return ax


def _frame(spread: Any) -> pd.DataFrame:
    import pandas as pd

    frame = spread if isinstance(spread, pd.DataFrame) else spread.to_pandas()
    absent = [name for name in _NEEDED if name not in frame.columns]
    if absent or not any(kind in frame.columns for kind in _KINDS):
        raise CatalogueError(
            "This is not the table of a spread: "
            f"{'it lacks ' + ', '.join(absent) if absent else 'no column names a law'}. "
            "`embersift spread` writes one."
        )
    return frame


def _selected(
    frame: pd.DataFrame,
    recipe: Recipe,
    observation: str | None,
    threshold: float | None,
    bin: str | None,
) -> tuple[pd.DataFrame, str]:
    """The rows of one observation and threshold, one per combination of laws."""

    def only(part: pd.DataFrame, column: str, wanted: Any) -> pd.DataFrame:
        values = part[column]
        same = np.isclose(values, wanted) if column == "threshold" else values == wanted
        if not same.any():
            known = ", ".join(str(v) for v in values.unique())
            raise CatalogueError(f"The spread has no {column} {wanted}; it has {known}.")
        return part[same]

    name = frame["observation"].iloc[0] if observation is None else observation
    here = only(frame, "observation", name)
    if threshold is None:
        first, headline = here["threshold"].iloc[0], recipe.screen.headline
        threshold = headline if np.isclose(here["threshold"], headline).any() else first
    here = only(here, "threshold", threshold)
    where = "all bins"
    if bin is None and "all" in set(here["bin"]):
        here = only(here, "bin", "all")
    elif bin is None:
        kinds = [k for k in _KINDS if k in here.columns]
        shares = ["hidden_fraction", "spread_low", "spread_high"]
        here = here.groupby(kinds, sort=False, dropna=False)[shares].mean().reset_index()
        where = "mean over the bins"
    else:
        here, where = only(here, "bin", bin), f"bin {bin}"
    return here, f"{name}: threshold {threshold:g}, {where}"
