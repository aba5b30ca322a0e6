"""Corrections fitted on quasars and bright AGN, for 2-10 and 0.5-2 keV.

They are polynomials or sums of powers in log L_bol, and dwarfs lie below all of them.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

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
from embersift.laws.solar import checks_at, log_solar, solar

__all__ = ["HOPKINS2007", "LUSSO2012_TYPE1", "LUSSO2012_TYPE2", "MARCONI2004", "SHEN2020"]


def _cubic(lbol: Array, eddington_ratio: Array, mbh: Array, c: Coefficients) -> Array:
    y = log_solar(lbol, c["x_low"], c["x_high"])
    y -= 12.0
    log_k = ((c["a3"] * y + c["a2"]) * y + c["a1"]) * y + c["b"]
    return np.exp(math.log(10.0) * log_k)  # several times faster than a power of ten


def _double_power(lbol: Array, eddington_ratio: Array, mbh: Array, c: Coefficients) -> Array:
    log_lbol = log_solar(lbol, 0.0)
    log_lbol -= 10.0
    log_lbol *= math.log(10.0)
    return np.asarray(c["c1"] * np.exp(c["k1"] * log_lbol) + c["c2"] * np.exp(c["k2"] * log_lbol))


def _cubic_coefficients(
    a1: float, a2: float, a3: float, b: float, x_low: float, x_high: float, range_status: Status
) -> Mapping[str, Coefficient]:
    return {
        "a1": Coefficient(a1, meaning="log k: coefficient of y = log10(L_bol / L_sun) - 12"),
        "a2": Coefficient(a2, meaning="log k: coefficient of y^2"),
        "a3": Coefficient(a3, meaning="log k: coefficient of y^3"),
        "b": Coefficient(b, meaning="log k at 1e12 L_sun"),
        "x_low": Coefficient(x_low, status=range_status, meaning="k is held below this x"),
        "x_high": Coefficient(x_high, status=range_status, meaning="k is held above this x"),
    }


def _double_power_coefficients(
    c1: float, k1: float, c2: float, k2: float
) -> Mapping[str, Coefficient]:
    return {
        "c1": Coefficient(c1, meaning="first term at 1e10 L_sun"),
        "k1": Coefficient(k1, meaning="exponent of the first term"),
        "c2": Coefficient(c2, meaning="second term at 1e10 L_sun"),
        "k2": Coefficient(k2, meaning="exponent of the second term"),
    }


MARCONI2004 = BolometricLaw(
    name="marconi2004",
    summary="template spectra of quasars: cubic in log L_bol",
    source=Source(
        "Marconi A., Risaliti G., Gilli R., Hunt L.K., Maiolino R., Salvati M., 2004, MNRAS, 351, "
        "169",
        2004,
        doi="10.1111/j.1365-2966.2004.07765.x",
        arxiv="astro-ph/0311619",
        status="MEM",
    ),
    formula_text=(
        "log k = 1.54 + 0.24 y + 0.012 y^2 - 0.0015 y^3 (2-10 keV); "
        "1.65 + 0.22 y + 0.012 y^2 - 0.0015 y^3 (0.5-2 keV); y = log(L_bol / L_sun) - 12"
    ),
    coefficients=_cubic_coefficients(0.24, 0.012, -0.0015, 1.54, 8.0, 13.0, "MEM"),
    soft_coefficients=_cubic_coefficients(0.22, 0.012, -0.0015, 1.65, 8.0, 13.0, "MEM"),
    ranges=(Range("lbol", solar(8.0), solar(13.0), "MEM", "the range of the authors' figure"),),
    scatter_dex=0.1,
    soft_scatter_dex=0.1,
    template_gamma=1.9,
    status_note="coefficients verified; citation, range and scatter from memory",
    outside=(
        "k is held below 1e8 and above 1e13 L_sun, and the row is marked: the polynomial turns "
        "over near 3e40 erg/s and would rise again below"
    ),
    checks=(
        *checks_at("hard", {8: 7.38, 10: 13.18, 12: 34.67, 13: 61.73}),
        *checks_at("soft", {8: 11.43, 10: 18.62, 12: 44.67, 13: 75.95}),
    ),
    formula=_cubic,
)

HOPKINS2007 = BolometricLaw(
    name="hopkins2007",
    summary="observed quasar spectra, with the light of hot dust in L_bol",
    source=Source(
        "Hopkins P.F., Richards G.T., Hernquist L., 2007, ApJ, 654, 731",
        2007,
        doi="10.1086/509629",
        arxiv="astro-ph/0605678",
    ),
    formula_text=(
        "k = 10.83 l^0.28 + 6.08 l^-0.020 (2-10 keV); 17.87 l^0.28 + 10.03 l^-0.020 (0.5-2 keV); "
        "l = L_bol / 1e10 L_sun"
    ),
    coefficients=_double_power_coefficients(10.83, 0.28, 6.08, -0.020),
    soft_coefficients=_double_power_coefficients(17.87, 0.28, 10.03, -0.020),
    ranges=(
        Range("lbol", low=solar(8.0), status="V", note="most of the data lie above 1e43 erg/s"),
    ),
    scatter_dex=0.117,
    scatter_status="CALC",
    soft_scatter_dex=0.069,
    template_gamma=1.8,
    status_note=(
        "the scatter is given at 1e42 erg/s; published as s0 (L_bol / 1e9 L_sun)^beta + s1 dex, "
        "with 0.04, 0.05, 0.080 (2-10 keV) and 0.01, 0.10, 0.060 (0.5-2 keV). L_bol contains the "
        "infrared bump (from memory), so k is about 0.1 dex above definitions without it"
    ),
    outside=(
        "Goes on below 1e8 L_sun, marked: k(2-10 keV) stays between 8 and 10. Held below 1 L_sun, "
        "where the second term would diverge"
    ),
    checks=(
        *checks_at("hard", {8: 9.65, 10: 16.91, 12: 44.87}),
        *checks_at("soft", {8: 15.92, 10: 27.9, 12: 74.03}),
    ),
    formula=_double_power,
)


def _lusso(
    number: int,
    sample: int,
    hard: tuple[float, float, float, float],
    soft: tuple[float, float, float, float],
    span: tuple[float, float],
    edge: str,
    checks: tuple[Check, ...],
) -> BolometricLaw:
    def row(a1: float, a2: float, a3: float, b: float) -> str:
        return f"{b:g} {a1:+g} y {a2:+g} y^2 {a3:+g} y^3"

    low, high = span
    return BolometricLaw(
        name=f"lusso2012-type{number}",
        summary=f"XMM-COSMOS, {sample} type {number} AGN: cubic in log L_bol",
        source=Source(
            "Lusso E. et al., 2012, MNRAS, 425, 623 (table 2)",
            2012,
            doi="10.1111/j.1365-2966.2012.21513.x",
            arxiv="1206.2642",
            status="MEM",
        ),
        formula_text=(
            f"log k = {row(*hard)} (2-10 keV); {row(*soft)} (0.5-2 keV); "
            "y = log(L_bol / L_sun) - 12"
        ),
        coefficients=_cubic_coefficients(*hard, low, high, "V"),
        soft_coefficients=_cubic_coefficients(*soft, low, high, "V"),
        ranges=(Range("lbol", solar(low), solar(high), "V", "the authors' figure 9"),),
        scatter_dex=0.26,
        soft_scatter_dex=0.26,
        status_note="coefficients and range verified; citation and scatter from memory",
        outside=(
            f"k is held below 10^{low:g} and above 10^{high:g} L_sun, and the row is marked: "
            f"{edge}. Nearly all dwarfs lie below"
        ),
        checks=checks,
        formula=_cubic,
    )


LUSSO2012_TYPE1 = _lusso(
    1,
    373,
    (0.288, 0.111, -0.007, 1.308),
    (0.239, 0.059, -0.009, 1.436),
    (10.8, 13.2),
    "left alone, k would be 2e4 at 1e40 erg/s",
    checks_at("hard", {11: 13.74, 12: 20.32, 13: 50.12}),
)
LUSSO2012_TYPE2 = _lusso(
    2,
    488,
    (0.230, 0.050, 0.001, 1.256),
    (0.217, 0.009, -0.010, 1.399),
    (9.8, 12.2),
    "left alone, k would rise to 23 at 1e40 erg/s",
    checks_at("hard", {10: 9.727, 12: 18.03}),
)

SHEN2020 = BolometricLaw(
    name="shen2020",
    summary="quasar spectra of the bolometric luminosity function: double power law",
    source=Source(
        "Shen X., Hopkins P.F., Faucher-Giguere C.-A., Alexander D.M., Richards G.T., Ross N.P., "
        "Hickox R.C., 2020, MNRAS, 495, 3252",
        2020,
        doi="10.1093/mnras/staa1381",
        arxiv="2001.02696",
    ),
    formula_text=(
        "k = 4.073 l^-0.026 + 12.60 l^0.278 (2-10 keV); 5.712 l^-0.026 + 17.67 l^0.278 "
        "(0.5-2 keV); l = L_bol / 1e10 L_sun"
    ),
    coefficients=_double_power_coefficients(4.073, -0.026, 12.60, 0.278),
    soft_coefficients=_double_power_coefficients(5.712, -0.026, 17.67, 0.278),
    ranges=(Range("lbol", 10.0**42.1, 10.0**47.8, "V", "the range of the authors' figure"),),
    scatter_dex=0.124,
    scatter_status="CALC",
    soft_scatter_dex=0.186,
    template_gamma=1.9,
    status_note=(
        "the scatter is given at 1e42 erg/s; published as s2 + s1 (1 + erf((log L_bol - L0) / "
        "(sqrt2 s3))) / 2 dex, with s1, s2, L0, s3 = 0.193, 0.066, 42.99, 1.883 (2-10 keV) and "
        "0.080, 0.180, 44.16, 1.496 (0.5-2 keV). Template slope from memory"
    ),
    outside=(
        "Goes on below 10^42.1 erg/s, marked: k(2-10 keV) stays between 6 and 9.3. Held below "
        "1 L_sun, where the first term would diverge"
    ),
    checks=(
        *checks_at("hard", {8: 8.094, 10: 16.67, 12: 48.94}),
        *checks_at("soft", {8: 11.35, 10: 23.38, 12: 68.64}),
    ),
    formula=_double_power,
)
