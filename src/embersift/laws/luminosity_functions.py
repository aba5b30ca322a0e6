"""X-ray luminosity functions of binaries: how many sources of which luminosity a galaxy has.

================ =====================================================================
luminosity       L38 = L / 1e38 erg/s, in the band of the function
density          dN / dL38, for one Msun/yr (``sfr``) or for 1e11 Msun (``mstar``)
moment n         integral of L38^n dN/dL38, so n = 0 counts sources, n = 1 adds their light
lower limit      L38 = 0.01 (1e36 erg/s), where every function here is cut
upper limit      the published cut, or 1e42 erg/s for `lehmer2021`; always finite
================ =====================================================================

A function is a chain of power laws without jumps, ended by a sharp cut or by an exponential one.
By Campbell's theorem its moments 1 and 2 are the mean and the variance of a galaxy's total light.

Examples
--------
>>> function = LUMINOSITY_FUNCTIONS["grimm2003"]
>>> round(float(function.moment(1, function.low, function.high)), 1)  # 1e38 erg/s per Msun/yr
66.7
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

import numpy as np

from embersift.arrays import Array
from embersift.bands import HARD, Band
from embersift.laws.conversions import SOLAR_OH12
from embersift.laws.declaration import Coefficient, Coefficients, Source, Status
from embersift.laws.power_laws import LuminosityFunction, PowerLaws

__all__ = ["LUMINOSITY_FUNCTIONS", "LuminosityFunction"]


def _sharp_cut(coefficients: Coefficients, oh12: Array) -> PowerLaws:
    pieces = sum(name.startswith("slope_") for name in coefficients)
    slopes = tuple(coefficients[f"slope_{i + 1}"] for i in range(pieces))
    norm = coefficients["norm"] * coefficients.get("pivot", 1.0) ** slopes[0]
    return PowerLaws(norm, slopes, tuple(coefficients[f"break_{i + 1}"] for i in range(pieces - 1)))


def _exponential_cut(coefficients: Coefficients, oh12: Array) -> PowerLaws:
    dex = oh12 - SOLAR_OH12
    c = coefficients
    return PowerLaws(
        c["norm"],
        (c["slope_1"], c["slope_2"] + c["slope_2_per_dex"] * dex),
        (10.0 ** (c["log_break"] - 38.0),),
        np.asarray(10.0 ** (c["log_fold"] - 38.0 + c["log_fold_per_dex"] * dex)),
    )


def _numbers(status: Status, **values: float) -> Mapping[str, Coefficient]:
    meanings = {
        "norm": "dN/dL38 of the first piece at the pivot",
        "pivot": "L38 where the norm is meant",
    }
    return {
        name: Coefficient(value, status=status, meaning=meanings.get(name, ""))
        for name, value in values.items()
    }


_BROAD = Band(0.5, 8.0)
_CUT_2019 = 10.0**2.7
_LEHMER2019 = Source("Lehmer B.D. et al., 2019, ApJS, 243, 3", 2019, arxiv="1905.05197")

_GRIMM2003 = LuminosityFunction(
    name="grimm2003",
    summary="high-mass binaries of nearby star-forming galaxies, one power law",
    source=Source(
        "Grimm H.-J., Gilfanov M., Sunyaev R., 2003, MNRAS, 339, 793", 2003, status="MEM"
    ),
    per="sfr",
    band=HARD,
    formula_text="dN/dL38 = 3.3 SFR L38^-1.61, cut at L38 = 210",
    coefficients=_numbers("MEM", norm=3.3, slope_1=1.61),
    shape=_sharp_cut,
    high=210.0,
    status="MEM",
    status_note="from memory; the integral agrees with the quoted 6.7e39 erg/s per Msun/yr",
)

_LEHMER2019_HMXB = LuminosityFunction(
    name="lehmer2019-hmxb",
    summary="high-mass binaries of 38 nearby galaxies, one power law",
    source=_LEHMER2019,
    per="sfr",
    band=_BROAD,
    formula_text="dN/dL38 = 1.96 SFR L38^-1.65, cut at L38 = 10^2.7",
    coefficients=_numbers("V", norm=1.96, slope_1=1.65),
    shape=_sharp_cut,
    high=_CUT_2019,
    status_note=(
        "integrates to 4.82e39 erg/s per Msun/yr, 6 % below the paper's own total of 10^39.71; "
        "2.06 L38^-1.66 for all galaxies is in use too (from memory, 4.89e39)"
    ),
)

_LEHMER2019_LMXB = LuminosityFunction(
    name="lehmer2019-lmxb",
    summary="low-mass binaries of 38 nearby galaxies, two power laws",
    source=_LEHMER2019,
    per="mstar",
    band=_BROAD,
    formula_text=(
        "dN/dL38 = 33.8 (M*/1e11) L38^-1.28 below L38 = 1.48, 1.48^1.05 L38^-2.33 above, "
        "cut at L38 = 10^2.7"
    ),
    coefficients=_numbers("V", norm=33.8, slope_1=1.28, break_1=1.48, slope_2=2.33),
    shape=_sharp_cut,
    high=_CUT_2019,
)

_GILFANOV2004 = LuminosityFunction(
    name="gilfanov2004",
    summary="low-mass binaries of nearby galaxies, three power laws",
    source=Source("Gilfanov M., 2004, MNRAS, 349, 146", 2004),
    per="mstar",
    band=_BROAD,
    formula_text=(
        "dN/dL38 = 440.4 (M*/1e11) (L38/0.19)^-1.0 below L38 = 0.19, slope 1.86 to 5, "
        "slope 4.8 to the cut at 500"
    ),
    coefficients=_numbers(
        "V", norm=440.4, pivot=0.19, slope_1=1.0, break_1=0.19, slope_2=1.86, break_2=5.0,
        slope_3=4.8,
    ),
    shape=_sharp_cut,
    high=500.0,
    status_note=(
        "integrates to 9.0e28 erg/s per Msun; about 8e28 is quoted (from memory). "
        "The band is from memory"
    ),
)  # fmt: skip

_MINEO2012 = LuminosityFunction(
    name="mineo2012",
    summary="high-mass binaries of nearby star-forming galaxies, two power laws",
    source=Source("Mineo S., Gilfanov M., Sunyaev R., 2012, MNRAS, 419, 2095", 2012),
    per="sfr",
    band=_BROAD,
    formula_text="dN/dL38 = 1.49 SFR L38^-1.58 below L38 = 110, slope 2.73 to the cut at 5e3",
    coefficients=_numbers("V", norm=1.49, slope_1=1.58, break_1=110.0, slope_2=2.73),
    shape=_sharp_cut,
    high=5e3,
    for_totals=False,
    status_note=(
        "does not agree with itself: integrates to 3.88e39 erg/s per Msun/yr where 2.61e39 is "
        "quoted. Not for totals"
    ),
)

_LEHMER2021 = LuminosityFunction(
    name="lehmer2021",
    summary="high-mass binaries with metallicity: two power laws with an exponential cut",
    source=Source("Lehmer B.D. et al., 2021, ApJ, 907, 17", 2021, arxiv="2011.09476"),
    per="sfr",
    band=_BROAD,
    formula_text=(
        "dN/dL38 = 1.29 SFR exp(-L38/Lc) L38^-1.74 below Lb, Lb^(g2-1.74) L38^-g2 above; "
        "log Lb = 38.54, g2 = 1.16 + 1.34 Z', log Lc = 39.98 + 0.60 Z' (erg/s), "
        "Z' = 12 + log(O/H) - 8.69; taken from 1e36 to 1e42 erg/s"
    ),
    coefficients={
        "norm": Coefficient.symmetric(1.29, 0.185, meaning="dN/dL38 at L38 = 1 without the cut"),
        "slope_1": Coefficient.symmetric(1.74, 0.04, meaning="slope below the break"),
        "log_break": Coefficient.symmetric(38.54, 0.2, meaning="log of the break [erg/s]"),
        "slope_2": Coefficient.symmetric(1.16, 0.17, meaning="slope above the break, solar O/H"),
        "slope_2_per_dex": Coefficient.symmetric(1.34, 0.5, meaning="its change per dex of O/H"),
        "log_fold": Coefficient(
            39.98, 0.24, 0.42, meaning="log of the exponential cut [erg/s], solar O/H"
        ),
        "log_fold_per_dex": Coefficient.symmetric(0.60, 0.3, meaning="its change per dex of O/H"),
    },
    shape=_exponential_cut,
    high=1e4,
    oh12_range=(7.0, 9.2),
    status_note="held at its edges outside 12 + log(O/H) of 7 to 9.2",
)

LUMINOSITY_FUNCTIONS: Mapping[str, LuminosityFunction] = MappingProxyType(
    {
        function.name: function
        for function in (
            _GRIMM2003,
            _LEHMER2019_HMXB,
            _LEHMER2019_LMXB,
            _GILFANOV2004,
            _MINEO2012,
            _LEHMER2021,
        )
    }
)
"""The luminosity functions by name."""
