"""The rows of a report whose verdict would change first."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from embersift.arrays import Array
from embersift.figures.reading import View
from embersift.verdict import FATES

__all__ = ["Near", "nearest"]

_ROWS = 5  # per criterion


@dataclass(frozen=True)
class Near:
    """A row close to a criterion."""

    row: int
    id: str
    mstar: str
    mbh: str
    lx: str
    value: str
    ratio: str
    fate: str


def nearest(views: Sequence[View]) -> list[tuple[str, str, list[Near]]]:
    """For each criterion the accreting rows whose verdict would change first."""
    found: list[tuple[str, str, list[Near]]] = []
    floor = views[0].reading.recipe.screen.floor
    if floor > 0.0:
        lx = views[0].reading.column("lx_agn")
        found.append(_near("Floor", f"L(2-10 keV) against {floor:g} erg/s", views[0], lx, floor))
    for view in views:
        name, limit = view.observation.name, view.observation.flux_limit
        if limit > 0.0:
            found.append(
                _near(
                    f"Flux limit of {name}",
                    f"flux against {limit:g} erg/s/cm²",
                    view,
                    view.flux_counted,
                    limit,
                )
            )
        found.append(
            _near(
                f"Threshold in {name}",
                f"excess against {view.threshold:g}",
                view,
                view.excess,
                view.threshold,
            )
        )
    return [entry for entry in found if entry[2]]


def _near(
    title: str, what: str, view: View, value: Array, limit: float
) -> tuple[str, str, list[Near]]:
    reading, codes = view.reading, view.codes
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = value / limit
        away = np.abs(np.log10(ratio))
    away[~(view.accreting & np.isfinite(away))] = np.inf
    places = np.argsort(away, kind="stable")[:_ROWS]
    ids = reading.plan.columns.get("id")
    lines = []
    for i in (int(place) for place in places if np.isfinite(away[place])):
        cell = "" if ids is None else _cell(reading.table[ids.column], i)
        lines.append(
            Near(
                row=i + 1,
                id=cell,
                mstar=f"{reading.sources.mstar[i]:.3g}",
                mbh=f"{reading.sources.mbh[i]:.3g}",
                lx=f"{reading.column('lx_agn')[i]:.3g}",
                value=f"{value[i]:.3g}",
                ratio=f"{ratio[i]:.3f}",
                fate=FATES[int(codes[i])],
            )
        )
    return title, what, lines


def _cell(column: Any, place: int) -> str:
    value = column.iloc[place] if hasattr(column, "iloc") else column[place]
    if isinstance(value, bytes):
        value = value.decode("utf-8", "replace")
    return str(value)
