"""X-ray binaries of the host, and laws of all the host's light in one number.

========== ========================================= =====================================
light      laws                                      in a recipe
========== ========================================= =====================================
binaries   both terms apart, or one of the two       ``binaries``, or ``hmxb`` and ``lmxb``
total      hot gas included; the parts are not told  ``total``, never with a gas law
           apart
========== ========================================= =====================================

Most share the form of `two_terms`: low-mass binaries follow stellar mass, high-mass ones star
formation, and only the numbers differ. Each law has its own band and IMF.

Examples
--------
>>> import numpy as np
>>> from embersift.laws.declaration import Host
>>> law = BINARIES["lehmer2010"]
>>> law.formula_text
'9.05e28 M* + 1.62e39 SFR'
>>> one = np.ones(1)
>>> host = Host(mstar=3e9 * one, sfr=0.3 * one, oh12=8.2 * one, z=0.05 * one)
>>> {part: f"{light[0]:.4g}" for part, light in law.formula(host, law.values).items()}
{'lmxb': '2.715e+38', 'hmxb': '4.86e+38'}
"""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

from embersift.bands import HARD, SOFT, Band
from embersift.laws.declaration import (
    BackgroundLaw,
    Check,
    Coefficient,
    Part,
    Range,
    Source,
    Status,
)
from embersift.laws.metal_binaries import FRAGOS2013, LEHMER2021
from embersift.laws.total_light import BRORBY2016, MINEO2014, RANALLI2003
from embersift.laws.two_terms import AS_SEEN, TWO_TERM_COEFFICIENTS, two_term_law

__all__ = ["BINARIES", "TWO_TERM_COEFFICIENTS", "two_term_law"]

_BROAD = Band(0.5, 8.0)
_SHEET = "check value of the coefficient sheet (CALC)"
_pm = Coefficient.symmetric


def _memory(**values: float) -> Mapping[str, Coefficient]:
    return {name: Coefficient(value, status="MEM") for name, value in values.items()}


def _worked(expected: float, rtol: float = 1e-3, source: str = _SHEET) -> tuple[Check, ...]:
    """The dwarf that the sheet works every law on."""
    inputs = {"mstar": 3e9, "sfr": 0.3, "oh12": 8.2, "redshift": 0.05}
    return (Check(inputs, "lx", expected, rtol, source),)


def _one_sun_a_year(expected: float, rtol: float, source: str) -> tuple[Check, ...]:
    return (Check({"sfr": 1.0}, "lx", expected, rtol, source),)


_LEHMER2010 = two_term_law(
    "lehmer2010",
    summary="both kinds of binaries of nearby galaxies, in proportion to M* and SFR",
    source=Source(
        "Lehmer B.D. et al., 2010, ApJ, 724, 559", 2010, doi="10.1088/0004-637X/724/1/559"
    ),
    coefficients={
        "per_mstar": _pm(9.05e28, 0.37e28, "MEM"),
        "per_sfr": _pm(1.62e39, 0.22e39, "MEM"),
    },
    band=HARD,
    imf="kroupa",
    light=["hmxb", "lmxb"],
    ranges=(Range("sfr", 0.1, 300.0, "MEM", "0.1 to 'several hundred'"),),
    scatter_dex=0.34,
    status="MEM",
    status_note=f"widely reproduced, all numbers from memory. {AS_SEEN}",
    outside="Goes on in proportion, the same at any redshift; the row is marked",
    checks=_worked(7.575e38),
)

_LEHMER2016_SOURCE = Source(
    "Lehmer B.D. et al., 2016, ApJ, 825, 7",
    2016,
    doi="10.3847/0004-637X/825/1/7",
    arxiv="1604.06461",
)
_LEHMER2016_RANGES = (Range("redshift", 0.0, 2.5, "V"),)


def _lehmer2016(
    log_a: tuple[float, float],
    gamma: tuple[float, float],
    log_b: tuple[float, float],
    delta: tuple[float, float],
) -> Mapping[str, Coefficient]:
    return {
        "log_per_mstar": _pm(*log_a, "V", "MEM"),
        "mstar_redshift": _pm(*gamma, "V", "MEM"),
        "log_per_sfr": _pm(*log_b, "V", "MEM"),
        "sfr_redshift": _pm(*delta, "V", "MEM"),
    }


_LEHMER2016 = two_term_law(
    "lehmer2016",
    summary="both kinds of binaries, evolving with redshift, 2-10 keV",
    source=_LEHMER2016_SOURCE,
    coefficients=_lehmer2016((29.37, 0.15), (2.03, 0.60), (39.28, 0.05), (1.31, 0.13)),
    band=HARD,
    imf="kroupa",
    light=["hmxb", "lmxb"],
    ranges=_LEHMER2016_RANGES,
    status="V",
    status_note=f"values verified, errors from memory, scatter not known to us. {AS_SEEN}",
    checks=_worked(1.386e39),
)

_LEHMER2016_SOFT = two_term_law(
    "lehmer2016-soft",
    summary="all of the host's light, evolving with redshift, 0.5-2 keV",
    source=_LEHMER2016_SOURCE,
    coefficients=_lehmer2016((29.04, 0.17), (3.78, 0.82), (39.38, 0.03), (0.99, 0.26)),
    band=SOFT,
    imf="kroupa",
    light=["hmxb", "lmxb", "gas"],
    ranges=_LEHMER2016_RANGES,
    status="V",
    status_note=(
        "values verified, errors from memory, scatter not known to us. Hot gas included: to other "
        f"bands it goes as the binaries' power law, which it is not. {AS_SEEN}"
    ),
    checks=_worked(
        3e9 * 1.0965e29 * 1.2025 + 0.3 * 2.3988e39 * 1.0495,
        2e-4,
        "worked by hand from 10^29.04 = 1.0965e29, 1.05^3.78 = 1.2025, 10^39.38 = 2.3988e39, "
        "1.05^0.99 = 1.0495 (CALC)",
    ),
)

_LEHMER2019 = two_term_law(
    "lehmer2019",
    summary="both kinds of binaries of 38 galaxies at 3.4 to 29 Mpc",
    source=Source(
        "Lehmer B.D. et al., 2019, ApJS, 243, 3",
        2019,
        doi="10.3847/1538-4365/ab22a8",
        arxiv="1905.05197",
    ),
    coefficients={
        "log_per_mstar": Coefficient(29.25, 0.06, 0.07, "V", "MEM"),
        "log_per_sfr": Coefficient(39.71, 0.09, 0.14, "V", "MEM"),
    },
    band=_BROAD,
    imf="kroupa",
    light=["hmxb", "lmxb"],
    status="V",
    status_note=f"values verified, errors from memory, scatter not known to us. {AS_SEEN}",
    outside="Goes on in proportion, the same at any redshift. No range is stated",
    checks=_worked(2.072e39),
)

_MINEO2012 = two_term_law(
    "mineo2012",
    summary="high-mass binaries of nearby star-forming galaxies",
    source=Source(
        "Mineo S., Gilfanov M., Sunyaev R., 2012, MNRAS, 419, 2095", 2012,
        doi="10.1111/j.1365-2966.2011.19862.x",
    ),
    coefficients={"per_sfr": Coefficient(2.61e39, status="MEM")},
    band=_BROAD,
    imf="salpeter",
    light=["hmxb"],
    scatter_dex=0.43,
    status="MEM",
    status_note=(
        "2.61e39 and the scatter are from memory; log L = log SFR + 39.4 is verified in a later "
        f"paper. {AS_SEEN}"
    ),
    outside="Goes on in proportion. No range is stated, so no row is marked",
    checks=_one_sun_a_year(10**39.4, 0.05, "log L = log SFR + 39.4, in a later paper (V)"),
)  # fmt: skip

_AIRD2017 = two_term_law(
    "aird2017",
    summary="both kinds of binaries from deep fields, evolving with redshift",
    source=Source(
        "Aird J., Coil A.L., Georgakakis A., 2017, MNRAS, 465, 3390", 2017, arxiv="1611.03508"
    ),
    coefficients=_memory(
        log_per_mstar=28.81, mstar_redshift=3.90, log_per_sfr=39.50, sfr_redshift=0.67,
        sfr_power=0.86,
    ),
    band=HARD,
    imf="chabrier",
    light=["hmxb", "lmxb"],
    status="MEM",
    status_note=(
        "all numbers and the IMF from memory. The abstract's other fit, to star-forming galaxies "
        f"alone, goes as SFR^0.83 (1+z)^1.3. {AS_SEEN}"
    ),
    checks=(
        Check(
            {"mstar": 0.0, "sfr": 10.0, "redshift": 0.0}, "lx", 10**40.36, 1e-9,
            "39.50 + 0.86 at SFR 10 (CALC)",
        ),
        Check(
            {"mstar": 1e10, "sfr": 0.0, "redshift": 1.0}, "lx", 10**38.81 * 14.9285, 1e-5,
            "2^3.90 = 14.9285 at redshift 1 (CALC)",
        ),
    ),
)  # fmt: skip

_FORNASINI2018 = two_term_law(
    "fornasini2018",
    summary="both kinds of binaries from a stack of deep fields, evolving with redshift",
    source=Source("Fornasini F.M. et al., 2018, ApJ, 865, 43", 2018),
    coefficients=_memory(
        log_per_mstar=29.98, mstar_redshift=0.62, log_per_sfr=39.78, sfr_redshift=0.2,
        sfr_power=0.84,
    ),
    band=HARD,
    imf="chabrier",
    light=["hmxb", "lmxb"],
    status="MEM",
    status_note=f"all numbers and the IMF from memory. {AS_SEEN}",
    checks=(
        Check(
            {"mstar": 0.0, "sfr": 10.0, "redshift": 0.0}, "lx", 10**40.62, 1e-9,
            "39.78 + 0.84 at SFR 10 (CALC)",
        ),
        Check(
            {"mstar": 1e10, "sfr": 0.0, "redshift": 1.0}, "lx", 10**39.98 * 1.53688, 1e-5,
            "2^0.62 = 1.53688 at redshift 1 (CALC)",
        ),
    ),
)  # fmt: skip


def _proportional(
    name: str,
    summary: str,
    source: Source,
    key: str,
    per_unit: float,
    status: Status,
    note: str,
    checks: tuple[Check, ...],
    *,
    band: Band,
) -> BackgroundLaw:
    """An early law of one number, without errors, scatter or range."""
    part: Part = "hmxb" if key == "per_sfr" else "lmxb"
    return two_term_law(
        name,
        summary=summary,
        source=source,
        coefficients={key: Coefficient(per_unit, status=status)},
        band=band,
        imf="salpeter" if key == "per_sfr" else "kroupa",
        light=[part],
        status=status,
        status_note=f"{note}. {AS_SEEN}",
        outside="Goes on in proportion. No range is stated, so no row is marked",
        checks=checks,
    )


_GRIMM2003 = _proportional(
    "grimm2003",
    "high-mass binaries of nearby star-forming galaxies",
    Source("Grimm H.-J., Gilfanov M., Sunyaev R., 2003, MNRAS, 339, 793", 2003, status="MEM"),
    "per_sfr",
    6.7e39,
    "MEM",
    "from memory, as is the IMF; agrees with the integral of its luminosity function, 6.67e39",
    _one_sun_a_year(6.67e39, 0.01, "integral of 3.3 L38^-1.61, 0.01 to 210 (CALC)"),
    band=HARD,
)

_GILFANOV2004 = _proportional(
    "gilfanov2004",
    "low-mass binaries of nearby galaxies",
    Source("Gilfanov M., 2004, MNRAS, 349, 146", 2004),
    "per_mstar",
    9.0e28,
    "CALC",
    "computed from its luminosity function (about 8e28 is quoted, from memory). The band and the "
    "IMF are from memory",
    (Check({"mstar": 1e11}, "lx", 8.9973e39, 5e-3, "integral of its luminosity function (CALC)"),),
    band=_BROAD,
)

BINARIES: Mapping[str, BackgroundLaw] = MappingProxyType(
    {
        law.name: law
        for law in (
            _LEHMER2010,
            _LEHMER2016,
            _LEHMER2016_SOFT,
            _LEHMER2019,
            LEHMER2021,
            BRORBY2016,
            _MINEO2012,
            MINEO2014,
            FRAGOS2013,
            _AIRD2017,
            _FORNASINI2018,
            _GRIMM2003,
            RANALLI2003,
            _GILFANOV2004,
        )
    }
)
"""The laws of binaries, and of all the host's light, by name."""
