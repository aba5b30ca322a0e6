"""Hot accretion flows: efficiencies that fall towards low rates."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from embersift.errors import LawError
from embersift.laws.declaration import (
    AccretionLaw,
    Array,
    Check,
    Coefficient,
    Coefficients,
    Disc,
    Range,
    Source,
)
from embersift.laws.discs import SHEET, THIN_DISC, THIN_OUTSIDE

__all__ = ["INAYOSHI2019", "XIE2012"]

_XIE_PIVOT = 0.01  # rate, in units of 10 L_Edd/c2, at which eps = eps0
_XIE_DELTAS = (0.5, 0.1, 1e-3)


def _xie_name(delta: float, segment: int, which: str) -> str:
    return f"delta{delta:g}_segment{segment}_{which}"


def _xie2012(rate: Array, coefficients: Coefficients, disc: Disc) -> Array:
    if disc.delta not in _XIE_DELTAS:
        raise LawError(
            f"xie2012 has no fit for delta = {disc.delta:g}; it was published for "
            f"{', '.join(f'{delta:g}' for delta in _XIE_DELTAS)}. Set agn.delta to one of them."
        )

    def column(which: str) -> list[float]:
        return [coefficients[_xie_name(disc.delta, segment, which)] for segment in (1, 2, 3)]

    eps0 = np.array([*column("eps0"), disc.efficiency])
    slope = np.array([*column("slope"), 0.0])
    mdot = rate / 10.0
    segment = np.searchsorted(column("upper"), mdot, side="left")
    return np.asarray(eps0[segment] * (mdot / _XIE_PIVOT) ** slope[segment] * rate)


def _inayoshi2019(rate: Array, coefficients: Coefficients, disc: Disc) -> Array:
    c = coefficients
    mdot = np.maximum(rate / 10.0, c["mdot_lowest"])
    log_mdot = np.log10(mdot)
    high = c["high_constant"] - (c["high_scale"] / mdot) ** c["high_power"]
    middle = c["middle_constant"] + c["middle_slope"] * log_mdot
    low = c["low_constant"] + (c["low_slope"] + c["low_curve"] * log_mdot) * log_mdot
    log_eps = np.where(
        mdot >= c["mdot_high"], high, np.where(mdot >= c["mdot_middle"], middle, low)
    )
    return np.asarray(np.exp(math.log(10.0) * log_eps) * rate)


def _xie_coefficients() -> Mapping[str, Coefficient]:
    table = {  # Xie & Yuan 2012, table 1: upper bound of the segment, eps0, exponent
        0.5: ((2.9e-5, 1.58, 0.65), (3.3e-3, 0.055, 0.076), (5.3e-3, 0.17, 1.12)),
        0.1: ((9.4e-5, 0.12, 0.59), (5.0e-3, 0.026, 0.27), (6.6e-3, 0.50, 4.53)),
        1e-3: ((7.6e-5, 0.065, 0.71), (4.5e-3, 0.020, 0.47), (7.1e-3, 0.26, 3.67)),
    }
    declared = {}
    for delta, segments in table.items():
        for number, (upper, eps0, slope) in enumerate(segments, start=1):
            where = f"delta = {delta:g}, segment {number}"
            from_memory = (delta, number) == (0.5, 3)
            declared[_xie_name(delta, number, "upper")] = Coefficient(
                upper, meaning=f"{where}: largest rate, in units of 10 L_Edd/c2"
            )
            declared[_xie_name(delta, number, "eps0")] = Coefficient(
                eps0,
                status="MEM" if from_memory else "V",
                meaning=f"{where}: efficiency at a rate of 0.01 x 10 L_Edd/c2",
            )
            declared[_xie_name(delta, number, "slope")] = Coefficient(
                slope, meaning=f"{where}: exponent of the rate"
            )
    return declared


def _xie_checks() -> tuple[Check, ...]:
    expected = {
        0.5: (0.003969, 0.01773, 0.03876, 0.04617),
        0.1: (5.238e-4, 2.038e-3, 7.498e-3, 0.01396),
        1e-3: (9.395e-5, 4.819e-4, 2.296e-3, 6.777e-3),
    }
    return tuple(
        Check({"mdot": 10.0 * mdot, "delta": delta}, "efficiency", eps, 1e-3, SHEET)
        for delta, values in expected.items()
        for mdot, eps in zip((1e-6, 1e-5, 1e-4, 1e-3), values, strict=True)
    )


XIE2012 = AccretionLaw(
    name="xie2012",
    summary="hot accretion flow: three power laws of the net rate, by electron heating delta",
    source=Source("Xie F.-G., Yuan F., 2012, MNRAS, 427, 1580", 2012, arxiv="1207.3113"),
    formula_text=(
        "eps = eps0 (mdot / 0.01)^a by segment of mdot = Mdot / (10 L_Edd/c^2), for agn.delta = "
        "0.5, 0.1 or 0.001; above the last segment eps = agn.efficiency. L = eps Mdot c^2"
    ),
    coefficients=_xie_coefficients(),
    ranges=(THIN_DISC,),
    status_note=(
        "delta = 0.1 and 0.001 verified; of delta = 0.5 the eps0 of the third segment is from "
        "memory. The rate is the net one that reaches the hole, not a Bondi rate"
    ),
    outside=(
        "Above the last segment (5.3e-3, 6.6e-3, 7.1e-3 of 10 L_Edd/c2 for delta = 0.5, 0.1, "
        "0.001) the efficiency is agn.efficiency, a step up from 0.083, 0.076, 0.074; the "
        "published joints step by up to 4 per cent. Below: the first power law goes on. "
        + THIN_OUTSIDE
    ),
    checks=_xie_checks(),
    formula=_xie2012,
)

INAYOSHI2019 = AccretionLaw(
    name="inayoshi2019",
    summary="one smooth efficiency from hot flow to thin disc",
    source=Source(
        "Inayoshi K., Ostriker J.P., Haiman Z., Kuiper R., 2019, MNRAS, 484, 5724",
        2019,
        status="MEM",
    ),
    formula_text=(
        "m = Mdot / (10 L_Edd/c^2); log eps = -1.0 - (0.0162 / m)^4 for m >= 0.023, "
        "-0.807 + 0.27 log m for 1e-4 <= m < 0.023, -1.749 - 0.267 log m - 0.07492 (log m)^2 "
        "below. L = eps Mdot c^2"
    ),
    coefficients={
        name: Coefficient(value, status="MEM", meaning=meaning)
        for name, value, meaning in (
            ("mdot_high", 0.023, "lowest m of the thin-disc branch"),
            ("high_constant", -1.0, "thin-disc branch: log eps far above it"),
            ("high_scale", 0.0162, "thin-disc branch: m at which eps has dropped tenfold"),
            ("high_power", 4.0, "thin-disc branch: exponent"),
            ("mdot_middle", 1e-4, "lowest m of the middle branch"),
            ("middle_constant", -0.807, "middle branch: constant"),
            ("middle_slope", 0.27, "middle branch: slope in log m"),
            ("low_constant", -1.749, "low branch: constant"),
            ("low_slope", -0.267, "low branch: slope in log m"),
            ("low_curve", -0.07492, "low branch: curvature in log m"),
            ("mdot_lowest", 1e-8, "lowest m of the low branch"),
        )
    },
    ranges=(
        Range("mdot", low=1e-7, note="1e-8 of the 10 L_Edd/c2 that the authors use"),
        THIN_DISC,
    ),
    status="MEM",
    status_note="the whole fit is from memory; its branches meet within 2 per cent. Read the paper",
    outside=(
        "Below m = 1e-8 the efficiency is held at its value there and the row is marked; above, it "
        "tends to 0.1 whatever agn.efficiency says. " + THIN_OUTSIDE
    ),
    checks=tuple(
        Check({"mdot": 10.0 * m}, "efficiency", eps, rtol, SHEET)
        for m, eps, rtol in (
            (1e-6, 1.43e-3, 4e-3),
            (1e-5, 5.16e-3, 1e-3),
            (1e-3, 0.02415, 1e-3),
            (1e-2, 0.0450, 2e-3),
            (0.1, 0.0998, 1e-3),
        )
    ),
    formula=_inayoshi2019,
)
