"""From the bolometric luminosity to the X-rays: k = L_bol / L(2-10 keV), or of 0.5-2 keV.

Every formula takes L_bol [erg/s], L_bol / L_Edd and M_BH [Msun], uses what it was published
for, and returns k. L_X is meant as emitted, before any absorption. Published fits take
log10(L_bol / L_sun), called x here, never the log of erg/s.

Dwarf galaxies lie below the range of nearly every relation, where a polynomial or a power law
says nothing and can say nonsense (k of 2e4, or below 1). So each law holds k at the edge of its
range where going on would be wrong, goes on where it is harmless, and says which in `outside`;
the row is marked either way.

Examples
--------
>>> import numpy as np
>>> law = BOLOMETRIC["duras2020"]
>>> lbol = np.array([1e38, 1e42, 1e46])
>>> law.formula(lbol, lbol, lbol, law.values).round(2).tolist()
[10.96, 10.98, 33.29]
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from types import MappingProxyType

import numpy as np

from embersift.errors import LawError
from embersift.laws.declaration import (
    Array,
    BolometricLaw,
    Check,
    Coefficient,
    Coefficients,
    Range,
    Source,
    Status,
)
from embersift.laws.quasars import (
    HOPKINS2007,
    LUSSO2012_TYPE1,
    LUSSO2012_TYPE2,
    MARCONI2004,
    SHEN2020,
)
from embersift.laws.solar import SHEET, checks_at, log_solar, solar

__all__ = ["BOLOMETRIC"]


def _constant(lbol: Array, eddington_ratio: Array, mbh: Array, c: Coefficients) -> Array:
    if math.isnan(c["k"]):
        raise LawError(
            "The bolometric law constant has no value of its own. "
            "Set agn.k to L_bol / L(2-10 keV), or choose a published law."
        )
    return np.full_like(lbol, c["k"])


def _rise(x: Array, c: Coefficients) -> Array:
    k = x / c["b"]
    k **= c["c"]
    k += 1.0
    k *= c["a"]
    return k


def _rise_lbol(lbol: Array, eddington_ratio: Array, mbh: Array, c: Coefficients) -> Array:
    # a negative x has no such power; below 0.5 the rise is lost in rounding, and pow is slow at 0
    return _rise(log_solar(lbol, 0.5), c)


def _rise_eddington(lbol: Array, eddington_ratio: Array, mbh: Array, c: Coefficients) -> Array:
    return _rise(eddington_ratio, c)


def _rise_mbh(lbol: Array, eddington_ratio: Array, mbh: Array, c: Coefficients) -> Array:
    return _rise(np.log10(np.maximum(mbh, 1.0)), c)


def _netzer(lbol: Array, eddington_ratio: Array, mbh: Array, c: Coefficients) -> Array:
    # Published in L_X: k = c (L_X / 1e42)^d. With L_bol = k L_X it turns into a power of L_bol.
    pivot = c["c"] * c["lx_pivot"]
    return np.asarray(c["c"] * (np.maximum(lbol, pivot) / pivot) ** (c["d"] / (1.0 + c["d"])))


def _steps(lbol: Array, eddington_ratio: Array, mbh: Array, c: Coefficients) -> Array:
    low, middle, high = (
        math.sqrt(c[f"{step}_from"] * c[f"{step}_to"]) for step in ("low", "middle", "high")
    )
    return np.select(
        [
            eddington_ratio < c["ratio_middle"],
            eddington_ratio < c["ratio_high"],
            eddington_ratio >= c["ratio_high"],
        ],
        [low, middle, high],
        default=np.nan,
    )


def _rise_coefficients(
    a: tuple[float, float], b: tuple[float, float], c: tuple[float, float], error_status: Status
) -> Mapping[str, Coefficient]:
    return {
        name: Coefficient.symmetric(value, error, error_status=error_status, meaning=meaning)
        for name, (value, error), meaning in (
            ("a", a, "k far below b"),
            ("b", b, "value of X where k has doubled"),
            ("c", c, "exponent"),
        )
    }


_CONSTANT = BolometricLaw(
    name="constant",
    summary="one k for every black hole, given by the recipe",
    source=Source("", 0, status="PRACTICE"),
    formula_text="k = agn.k",
    coefficients={
        "k": Coefficient(math.nan, status="PRACTICE", meaning="L_bol / L(2-10 keV), from agn.k")
    },
    status="PRACTICE",
    status_note="agn.k must be given: the law has no value of its own",
    outside="The same everywhere",
    formula=_constant,
)

_VASUDEVAN2009 = BolometricLaw(
    name="vasudevan2009",
    summary="steps in the Eddington ratio, from massive Seyferts and quasars",
    source=Source(
        "Vasudevan R.V., Fabian A.C., 2009, MNRAS, 392, 1124",
        2009,
        doi="10.1111/j.1365-2966.2008.14108.x",
        arxiv="0810.3777",
        status="V-abs",
    ),
    formula_text=(
        "k in 15-30 for L_bol/L_Edd < 0.1, 20-70 for 0.1-0.2, 70-150 from 0.2; "
        "the geometric centre of each: 21.2, 37.4, 102.5"
    ),
    coefficients={
        name: Coefficient(value, status="V-abs", meaning=meaning)
        for name, value, meaning in (
            ("ratio_middle", 0.1, "Eddington ratio where the middle step begins"),
            ("ratio_high", 0.2, "Eddington ratio where the high step begins"),
            ("low_from", 15.0, "lower end of k in the low step"),
            ("low_to", 30.0, "upper end of k in the low step"),
            ("middle_from", 20.0, "lower end of k in the middle step"),
            ("middle_to", 70.0, "upper end of k in the middle step"),
            ("high_from", 70.0, "lower end of k in the high step"),
            ("high_to", 150.0, "upper end of k in the high step"),
        )
    },
    ranges=(
        Range("mbh", low=1e6, note="black holes with reverberation masses; limit from memory"),
    ),
    scatter_dex=0.15,
    scatter_status="CALC",
    status="V-abs",
    status_note=(
        "the ranges of k are published, their centres are ours. Scatter is half the range in log: "
        "0.15 dex in the low step (declared), 0.27 in the middle, 0.17 in the high"
    ),
    outside=(
        "Never calibrated on dwarfs: the low step holds down to any ratio. L_X falls where a step "
        "is crossed"
    ),
    checks=tuple(
        Check({"eddington_ratio": ratio, "band": "hard"}, "k", centre, 2e-3, source)
        for ratio, centre, source in (
            (0.01, 21.2, "geometric centre of 15-30 (CALC), the range from the abstract"),
            (0.15, 37.4, "geometric centre of 20-70 (CALC), the range from the abstract"),
            (0.5, 102.5, "geometric centre of 70-150 (CALC), the range from the abstract"),
        )
    ),
    formula=_steps,
)

_NETZER2019 = BolometricLaw(
    name="netzer2019",
    summary="theory of thin discs with observed X-rays: power law in L_X",
    source=Source(
        "Netzer H., 2019, MNRAS, 488, 5185", 2019, doi="10.1093/mnras/stz2016", arxiv="1907.09534"
    ),
    formula_text="k = 7 (L_X / 1e42 erg/s)^0.3, so L_X = 1e42 (L_bol / 7e42)^(1/1.3)",
    coefficients={
        "c": Coefficient(7.0, meaning="k at L_X = 1e42 erg/s"),
        "d": Coefficient(0.3, meaning="exponent of L_X"),
        "lx_pivot": Coefficient(1e42, meaning="L_X [erg/s] where k = c; held below"),
    },
    ranges=(
        Range("lbol", low=7e42, status="PRACTICE", note="L_X of 1e42 erg/s"),
        Range("mbh", 1e7, 1e10, note="masses of the discs computed"),
    ),
    status_note="the range in mass is from memory; the author warns of a large uncertainty (spin)",
    outside=(
        "k is held at 7 below L_bol = 7e42 erg/s, and the row is marked: the power law falls below "
        "k = 1 at L_X = 1.5e39 erg/s"
    ),
    checks=tuple(
        Check({"lbol": lbol, "band": "hard"}, "k", k, 1e-3, SHEET)
        for lbol, k in (
            (7e42, 7.0),
            (13.97e43, 13.97),
            (27.87e44, 27.87),
            (1e44, 1e44 / 7.734e42),
        )
    ),
    formula=_netzer,
)

_DURAS = Source(
    "Duras F. et al., 2020, A&A, 636, A73",
    2020,
    doi="10.1051/0004-6361/201936817",
    arxiv="2001.09984",
)
_DURAS_LBOL = (
    Range(
        "lbol",
        solar(7.5),
        solar(14.5),
        note="seven decades, of the whole sample; lower end between 10^7.5 and 10^8 L_sun",
    ),
)
_DURAS_MASS = (
    Range("mbh", low=1e6, note="the sample ends between 1e6 and 1e7; the lower figure is used"),
)
_DURAS_FLAT = (
    "Flat below the range and still rising above it; the row is marked on either side. "
    "L_bol under 1 L_sun gives k = a"
)

_DURAS2020 = BolometricLaw(
    name="duras2020",
    summary="about a thousand AGN of both types over seven decades of L_bol: flat, then rising",
    source=_DURAS,
    formula_text="k = 10.96 [1 + (x / 11.93)^17.79], x = log(L_bol / L_sun)",
    coefficients=_rise_coefficients((10.96, 0.06), (11.93, 0.01), (17.79, 0.10), "V"),
    ranges=_DURAS_LBOL,
    scatter_dex=0.27,
    scatter_status="V",
    status_note="values, errors and scatter verified; range from memory",
    outside=_DURAS_FLAT,
    checks=checks_at("hard", {8: 10.97, 11: 13.55, 12: 23.12, 13: 61.48, 14: 199.8}),
    formula=_rise_lbol,
)

_DURAS2020_TYPE1 = BolometricLaw(
    name="duras2020-type1",
    summary="the type 1 AGN of duras2020",
    source=_DURAS,
    formula_text="k = 12.76 [1 + (x / 12.15)^18.78], x = log(L_bol / L_sun)",
    coefficients=_rise_coefficients((12.76, 0.13), (12.15, 0.01), (18.78, 0.14), "MEM"),
    ranges=_DURAS_LBOL,
    scatter_dex=0.26,
    status_note="values verified; errors, scatter and range from memory",
    outside=_DURAS_FLAT,
    checks=checks_at("hard", {8: 12.76, 11: 14.73, 12: 22.86, 13: 58.19, 14: 195.5}),
    formula=_rise_lbol,
)

_DURAS2020_TYPE2 = BolometricLaw(
    name="duras2020-type2",
    summary="the type 2 AGN of duras2020",
    source=_DURAS,
    formula_text="k = 10.85 [1 + (x / 11.90)^19.93], x = log(L_bol / L_sun)",
    coefficients=_rise_coefficients((10.85, 0.08), (11.90, 0.01), (19.93, 0.29), "V"),
    ranges=_DURAS_LBOL,
    scatter_dex=0.27,
    status_note="values and errors verified; scatter and range from memory",
    outside=_DURAS_FLAT,
    checks=checks_at("hard", {8: 10.85, 11: 13.11, 12: 23.67, 13: 74.04, 14: 287.6}),
    formula=_rise_lbol,
)

_DURAS2020_EDDINGTON = BolometricLaw(
    name="duras2020-eddington",
    summary="duras2020 with the Eddington ratio instead of L_bol",
    source=_DURAS,
    formula_text="k = 7.51 [1 + ((L_bol / L_Edd) / 0.05)^0.61]",
    coefficients=_rise_coefficients((7.51, 1.34), (0.05, 0.03), (0.61, 0.07), "MEM"),
    ranges=_DURAS_MASS,
    scatter_dex=0.31,
    status_note="values verified; errors, scatter and range from memory",
    outside="Flat at low Eddington ratio: 7.5 to 10.3 below 0.01. Marked below 1e6 Msun",
    checks=tuple(
        Check({"eddington_ratio": ratio, "band": "hard"}, "k", k, 1e-3, SHEET)
        for ratio, k in ((1e-3, 8.201), (1e-2, 10.32), (0.1, 18.97), (1.0, 54.2))
    ),
    formula=_rise_eddington,
)

_DURAS2020_MASS = BolometricLaw(
    name="duras2020-mass",
    summary="duras2020 with the black-hole mass instead of L_bol",
    source=_DURAS,
    formula_text="k = 16.75 [1 + (log(M_BH / Msun) / 9.22)^26.14]",
    coefficients=_rise_coefficients((16.75, 0.71), (9.22, 0.08), (26.14, 3.73), "MEM"),
    ranges=_DURAS_MASS,
    status_note="values verified; errors and range from memory; scatter not known",
    outside="Flat below 1e8 Msun, marked below 1e6. M_BH under 1 Msun gives k = a",
    checks=tuple(
        Check({"mbh": mass, "band": "hard"}, "k", k, 1e-3, SHEET)
        for mass, k in ((1e7, 16.76), (1e8, 17.16), (1e9, 25.66))
    ),
    formula=_rise_mbh,
)

_LOPEZ2024 = BolometricLaw(
    name="lopez2024",
    summary="one k from nearby nuclei of low luminosity",
    source=Source(
        "Lopez I.E. et al., 2024, A&A, 692, A209 (eq. 6)",
        2024,
        doi="10.1051/0004-6361/202450510",
        arxiv="2404.16938",
    ),
    formula_text="k = 9.65",
    coefficients={"k": Coefficient.symmetric(9.65, 1.004, meaning="L_bol / L(2-10 keV)")},
    ranges=(Range("lbol", 1e38, 1e43, "V", "about; the black holes are massive ones"),),
    status_note="no scatter known to us; the authors' formula for all luminosities was not found",
    outside="The same everywhere; the row is marked outside 1e38 to 1e43 erg/s",
    checks=(Check({"lbol": 1e40, "band": "hard"}, "k", 9.65, 1e-12, "the paper, eq. 6 (V)"),),
    formula=_constant,
)

BOLOMETRIC: Mapping[str, BolometricLaw] = MappingProxyType(
    {
        law.name: law
        for law in (
            _CONSTANT,
            MARCONI2004,
            HOPKINS2007,
            _VASUDEVAN2009,
            LUSSO2012_TYPE1,
            LUSSO2012_TYPE2,
            _NETZER2019,
            SHEN2020,
            _DURAS2020,
            _DURAS2020_TYPE1,
            _DURAS2020_TYPE2,
            _DURAS2020_EDDINGTON,
            _DURAS2020_MASS,
            _LOPEZ2024,
        )
    }
)
"""The bolometric corrections by name."""
