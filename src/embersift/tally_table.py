"""A tally as a tidy table: counts, fractions, intervals; the columns are in `Tally.table`."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array
from embersift.bins import slot_limits, slot_names
from embersift.exact_sums import Exact, as_floats, exact_sums
from embersift.galaxies import OCCUPIED, USABLE, Members
from embersift.intervals import ONE_SIGMA_INSIDE, binomial_interval, effective_number
from embersift.verdict import DORMANT, FATES, NO_BLACK_HOLE, UNUSABLE_ROW, VISIBLE

if TYPE_CHECKING:
    import pandas as pd

    from embersift.tallying import Tally

__all__ = ["CAUSES", "tally_frame", "to_records"]

CAUSES = tuple(fate for code, fate in enumerate(FATES) if code == DORMANT or code > VISIBLE)
"""Why a black hole is hidden: exclusive, one column each."""


def tally_frame(
    tally: Tally,
    looks: Sequence[tuple[str, float]],
    interval: str = "wilson",
    level: float | None = None,
) -> pd.DataFrame:
    """The table of `Tally.table`; `looks` are the observation and threshold of its columns."""
    import pandas as pd

    level = ONE_SIGMA_INSIDE if level is None else level

    def limits(part: Array, whole: Array, effective: Array) -> tuple[Array, Array, Array]:
        share = np.divide(part, whole, out=np.full(whole.shape, np.nan), where=whole > 0.0)
        # unweighted, the share times the number would miss the integer by a rounding
        k = part if tally.weights is None else share * effective
        return share, *binomial_interval(k, effective, level=level, method=interval)

    n, n2 = tally.rows if tally.weights is None else tally.weights, tally.squares
    slots = len(tally.edges) + 2
    shape = n.shape[:-1]
    holes, accreting = n[..., DORMANT:].sum(axis=-1), n[..., VISIBLE:].sum(axis=-1)
    visible = n[..., VISIBLE]
    hidden, hidden_accreting = holes - visible, accreting - visible
    effective_holes, effective_accreting = (
        _floats(total)
        if n2 is None
        else effective_number(_floats(total), _floats(n2[..., first:].sum(axis=-1)))
        for total, first in ((holes, DORMANT), (accreting, VISIBLE))
    )
    share, low, high = limits(_floats(hidden), _floats(holes), effective_holes)
    share_accreting, low_accreting, high_accreting = limits(
        _floats(hidden_accreting), _floats(accreting), effective_accreting
    )
    galaxies = _galaxies(tally)
    number: Any = tally.rows.sum(axis=-1) if tally.weights is None else _floats(n.sum(axis=-1))
    if galaxies is not None:
        number = np.broadcast_to(galaxies["galaxies"], shape)
        if tally.weights is None:
            number = number.astype(np.int64)
        usable, occupied = galaxies["usable"], galaxies["occupied"]
        occupation = (occupied, *limits(occupied, usable, galaxies["effective"]))
    else:
        occupation = (np.full(shape[1:], np.nan),) * 4
    lower, upper = slot_limits(tally.edges)
    columns: dict[str, Any] = {
        "observation": np.repeat([name for name, _ in looks], shape[1] * slots),
        "threshold": np.repeat([threshold for _, threshold in looks], shape[1] * slots),
        "split": np.tile(np.repeat(tally.groups, slots), shape[0]),
        "by": np.full(number.size, tally.by),
        "bin": np.tile(slot_names(tally.edges), shape[0] * shape[1]),
        "low": np.tile(lower, shape[0] * shape[1]),
        "high": np.tile(upper, shape[0] * shape[1]),
        "rows": tally.rows.sum(axis=-1),
        "galaxies": number,
        "unusable": _numbers(n[..., UNUSABLE_ROW]),
        "no_black_hole": _numbers(n[..., NO_BLACK_HOLE]),
        "black_holes": _numbers(holes),
        "accreting": _numbers(accreting),
        "visible": _numbers(visible),
        "hidden": _numbers(hidden),
        "hidden_fraction": share,
        "hidden_low": low,
        "hidden_high": high,
        "hidden_fraction_accreting": share_accreting,
        "hidden_accreting_low": low_accreting,
        "hidden_accreting_high": high_accreting,
        **{
            name: np.broadcast_to(values, shape)
            for name, values in zip(
                ("occupied", "occupation", "occupation_low", "occupation_high"),
                occupation,
                strict=True,
            )
        },
        "n_effective": effective_holes,
    }
    for code, cause in enumerate(FATES):
        if cause in CAUSES and ("blended" not in cause or tally.rows[..., code].any()):
            columns[cause] = _numbers(n[..., code])
    columns |= {"interval": np.full(number.size, interval), "level": np.full(number.size, level)}
    return pd.DataFrame({name: np.ravel(values) for name, values in columns.items()})


def to_records(frame: pd.DataFrame) -> list[dict[str, object]]:
    """The table as JSON-ready records: plain numbers and text, None for what is no number.

    Examples
    --------
    >>> import pandas as pd
    >>> to_records(pd.DataFrame({"bin": ["below"], "low": [-np.inf], "rows": [3]}))
    [{'bin': 'below', 'low': None, 'rows': 3}]
    """
    plain = {
        str(name): [
            None if isinstance(value, float) and not np.isfinite(value) else value
            for value in frame[name].tolist()
        ]
        for name in frame.columns
    }
    return [dict(zip(plain, row, strict=True)) for row in zip(*plain.values(), strict=True)]


def _numbers(values: Exact | NDArray[np.int64]) -> Array | NDArray[np.int64]:
    """Integers as they are, exact sums as the nearest float64."""
    return as_floats(values) if values.dtype == object else values


def _floats(values: Exact | NDArray[np.int64]) -> Array:
    return _numbers(values).astype(float)


def _galaxies(tally: Tally) -> dict[str, Array] | None:
    """Galaxies by group and slot: all, with a usable row, occupied, and effective number."""
    if tally.galaxies is None:
        return None
    cells = np.array([_of_members(cell) for cell in tally.galaxies.members()]).T
    names = ("galaxies", "usable", "occupied", "effective")
    return {n: c.reshape(tally.rows.shape[1:3]) for n, c in zip(names, cells, strict=True)}


def _of_members(members: Members) -> tuple[float, float, float, float]:
    known, occupied = members.level >= USABLE, members.level == OCCUPIED
    if members.weight is None:
        some = float(np.count_nonzero(known))
        return float(members.host.size), some, float(np.count_nonzero(occupied)), some
    weight = members.weight
    total, usable, with_hole, squares = (
        float(as_floats(exact_sums(values, np.zeros(values.size, np.intp), 1))[0])
        for values in (weight, weight[known], weight[occupied], weight[known] ** 2)
    )
    return total, usable, with_hole, float(effective_number(usable, squares))
