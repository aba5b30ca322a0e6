"""A tally for the terminal: one observation at one threshold, bin by bin, and why holes hide."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np

from embersift.bins import OUTSIDE
from embersift.errors import RecipeError
from embersift.intervals import binomial_interval, effective_number
from embersift.tally_table import CAUSES

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["lines", "where_hidden_lines"]

_GAP = "  "


def lines(frame: pd.DataFrame, observation: str, threshold: float, width: int = 80) -> list[str]:
    """Counts per bin in aligned columns, with the hidden share of the black holes in per cent.

    Parameters
    ----------
    frame : pandas.DataFrame
        From `Tally.table`, or a part of it.
    observation : str
        Which observation.
    threshold : float
        At which threshold.
    width : int
        Columns of the terminal. In a narrow one the interval is left out first, then the
        accreting ones.

    Returns
    -------
    list of str
        Every bin, empty or not; rows outside the edges where there are any; all together. One
        block per group, with its label above, if there are several.

    Raises
    ------
    RecipeError
        The table has no such observation or threshold.
    """
    text: list[str] = []
    for label, here in _groups(frame, observation, threshold):
        if label:
            text += [*([""] if text else []), f"{_GAP}{label}"]
        text += _table(here, width)
    return text


def where_hidden_lines(
    frame: pd.DataFrame, observation: str, threshold: float, width: int = 80
) -> list[str]:
    """Where the hidden black holes went: each cause once, the largest first, over all bins.

    Parameters and errors as for `lines`.
    """
    text: list[str] = []
    for label, here in _groups(frame, observation, threshold):
        if label:
            text += [*([""] if text else []), f"{_GAP}{label}"]
        hidden = float(here["hidden"].sum())
        if hidden == 0.0:
            text.append(f"{_GAP}No black hole is hidden.")
            continue
        found = [(float(here[c].sum()), c) for c in CAUSES if c in here.columns]
        found = sorted(((n, c) for n, c in found if n > 0.0), key=lambda pair: -pair[0])
        rows: list[tuple[str, ...]] = [("where the hidden ones went", "black holes", "% of them")]
        whole = here["hidden"].dtype.kind == "i"
        rows += [(cause, _number(n, whole), _percent(n / hidden)) for n, cause in found]
        text += _aligned(rows, width)
    return text


def _groups(
    frame: pd.DataFrame, observation: str, threshold: float
) -> Iterator[tuple[str, pd.DataFrame]]:
    """The asked-for rows group by group; the label is empty when there is only one."""
    # column names carry ten digits of the threshold
    same = np.isclose(frame["threshold"].to_numpy(float), threshold, rtol=1e-9, atol=0.0)
    here = frame[same & (frame["observation"] == observation).to_numpy(bool)]
    if here.empty:
        known = frame[["observation", "threshold"]].drop_duplicates().to_numpy().tolist()
        raise RecipeError(
            f"Nothing was counted for {observation} at threshold {threshold:g}. "
            f"Counted: {', '.join(f'{name} at {t:g}' for name, t in known) or 'nothing'}."
        )
    labels = here["split"].unique().tolist()
    for label in labels:
        yield (str(label) if len(labels) > 1 else ""), here[here["split"] == label]


def _table(here: pd.DataFrame, width: int) -> list[str]:
    whole = here["black_holes"].dtype.kind == "i"
    shown = here[~here["bin"].isin(OUTSIDE) | (here["rows"] > 0)]
    rows: list[tuple[str, ...]] = [
        (str(here["by"].iloc[0]), "black holes", "accreting", "visible", "hidden %", "interval")
    ]
    for _, row in shown.iterrows():
        rows.append(
            (
                str(row["bin"]),
                _number(row["black_holes"], whole),
                _number(row["accreting"], whole),
                _number(row["visible"], whole),
                *_shares(row["hidden_fraction"], row["hidden_low"], row["hidden_high"]),
            )
        )
    if len(shown) > 1:
        holes, accreting, visible, hidden = (
            float(here[name].sum()) for name in ("black_holes", "accreting", "visible", "hidden")
        )
        share = hidden / holes if holes > 0.0 else np.nan
        low, high = binomial_interval(
            hidden if whole else share * _effective(here),
            _effective(here),
            level=float(here["level"].iloc[0]),
            method=str(here["interval"].iloc[0]),
        )
        counts = (_number(n, whole) for n in (holes, accreting, visible))
        rows.append(("all", *counts, *_shares(share, float(low), float(high))))
    for kept in ((0, 1, 2, 3, 4, 5), (0, 1, 2, 3, 4), (0, 1, 3, 4)):
        text = _aligned([tuple(row[i] for i in kept) for row in rows], width)
        if max(map(len, text)) <= width:
            break
    return text


def _effective(here: pd.DataFrame) -> float:
    """Effective number of all bins together, from those of each."""
    holes, each = here["black_holes"].to_numpy(float), here["n_effective"].to_numpy(float)
    squares = np.divide(holes * holes, each, out=np.zeros(each.shape), where=each > 0.0)
    return float(effective_number(holes.sum(), squares.sum()))


def _number(value: float, whole: bool) -> str:
    if abs(value) >= 1e9 or (not whole and 0.0 < abs(value) < 0.05):
        return format(value, ".3g")
    return f"{int(value):,}" if whole else f"{value:,.1f}"


def _percent(share: float) -> str:
    """One decimal; what is not quite none or all does not look like it."""
    if share > 0.0 and share < 0.0005:
        return "<0.1"
    if share < 1.0 and share >= 0.9995:
        return ">99.9"
    return f"{100.0 * share:.1f}"


def _shares(share: float, low: float, high: float) -> tuple[str, str]:
    if np.isnan(share):
        return "-", ""
    return _percent(share), f"{_percent(low)} - {_percent(high)}"


def _aligned(rows: list[tuple[str, ...]], width: int) -> list[str]:
    """First column to the left and cut to what is left of the width, the others to the right."""
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    room = width - sum(widths[1:]) - len(_GAP) * len(widths)
    widths[0] = min(widths[0], max(room, 8))
    text = []
    for first, *others in rows:
        if len(first) > widths[0]:
            first = first[: widths[0] - 2] + ".."
        cells = [
            first.ljust(widths[0]),
            *(c.rjust(w) for c, w in zip(others, widths[1:], strict=True)),
        ]
        text.append((_GAP + _GAP.join(cells)).rstrip())
    return text
