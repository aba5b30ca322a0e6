"""High-mass binaries that follow metallicity by more than a power of O/H."""

from __future__ import annotations

import math
from collections.abc import Mapping
from functools import lru_cache

import numpy as np
from numpy.polynomial import Chebyshev
from numpy.polynomial.chebyshev import cheb2poly

from embersift.arrays import Array
from embersift.bands import HARD
from embersift.laws.conversions import SOLAR_OH12
from embersift.laws.declaration import (
    BackgroundLaw,
    Check,
    Coefficient,
    Coefficients,
    Host,
    Part,
    Range,
    Source,
)
from embersift.laws.luminosity_functions import LUMINOSITY_FUNCTIONS
from embersift.laws.two_terms import OH12_SCALE

__all__ = ["FRAGOS2013", "LEHMER2021"]

_FUNCTION = LUMINOSITY_FUNCTIONS["lehmer2021"]
_OH12_LOW, _OH12_HIGH = 7.0, 9.2
_CENTRE, _HALF = 0.5 * (_OH12_LOW + _OH12_HIGH), 0.5 * (_OH12_HIGH - _OH12_LOW)
_CLOSE = 1e-9


@lru_cache(maxsize=16)
def _light_per_sfr(values: tuple[float, ...]) -> tuple[float, ...]:
    """L / SFR [erg/s per Msun/yr] of the luminosity function, as a polynomial in O/H.

    One polynomial is twice as fast as a table of cubics. The published coefficients are well
    within `_CLOSE` with the lowest degree; drawn ones may take more.
    """
    named = dict(zip(_FUNCTION.coefficients, values, strict=True))

    def light(oh12: Array) -> Array:
        return 1e38 * _FUNCTION.moment(1, _FUNCTION.low, _FUNCTION.high, oh12, named)

    between = np.linspace(_OH12_LOW, _OH12_HIGH, 101)
    exact = light(between)
    for degree in (20, 26, 32, 40):
        series = Chebyshev.interpolate(light, degree, domain=(_OH12_LOW, _OH12_HIGH))
        if np.all(np.abs(series(between) - exact) <= _CLOSE * exact):
            break
    return tuple(cheb2poly(series.coef).tolist())


def _lehmer2021(host: Host, c: Coefficients) -> Mapping[Part, Array]:
    *lower, highest = _light_per_sfr(tuple(c[name] for name in _FUNCTION.coefficients))
    x = np.clip(host.oh12, _OH12_LOW, _OH12_HIGH)
    x -= _CENTRE
    x /= _HALF
    light = x * highest
    for one in lower[:0:-1]:
        light += one
        light *= x
    light += lower[0]
    light *= host.sfr
    return {"hmxb": light}


LEHMER2021 = BackgroundLaw(
    name="lehmer2021",
    summary="high-mass binaries with metallicity: the mean of their luminosity function",
    source=_FUNCTION.source,
    formula_text=f"integral of L dN/dL over 1e36 to 1e42 erg/s; {_FUNCTION.formula_text}",
    coefficients=_FUNCTION.coefficients,
    ranges=(
        Range(
            "oh12", _OH12_LOW, _OH12_HIGH, "MEM", "sparsely calibrated below 7.6, where it falls"
        ),
    ),
    status_note=(
        "the function is verified; the range in O/H and the IMF are from memory. Not monotonic: "
        "L / SFR peaks near O/H 7.6 and falls below, where few galaxies calibrate it. The mean of "
        "a galaxy's light; below SFR 0.1 or so most galaxies show less. No scatter known to us. "
        "Whether corrected for the host's own absorption is not stated; taken as apparent"
    ),
    outside="Held at its values at O/H 7.0 and 9.2; the row is marked",
    checks=(
        *(
            Check(
                {"sfr": 1.0, "oh12": oh12, "part": "hmxb"},
                "lx",
                10.0**log_l,
                1.5e-3,
                "coefficient sheet (CALC), rounded to 0.001 dex",
            )
            for oh12, log_l in (
                (7.0, 39.940),
                (7.4, 40.122),
                (7.69, 40.134),
                (8.0, 40.044),
                (8.2, 39.935),
                (8.4, 39.794),
                (8.6, 39.630),
                (8.69, 39.552),
                (9.0, 39.288),
                (9.2, 39.142),
            )
        ),
        *(
            Check(
                {"sfr": 1.0, "oh12": oh12, "part": "hmxb"},
                "lx",
                10.0**log_l,
                0.047,
                "the paper's own table (V), within 0.02 dex",
            )
            for oh12, log_l in ((8.2, 39.94), (8.6, 39.64))
        ),
    ),
    formula=_lehmer2021,
    band=_FUNCTION.band,
    imf="kroupa",
    light=frozenset({"hmxb"}),
    metallicity=OH12_SCALE,
    needs_oh12=True,
)


def _polynomial(x: Array, c: Coefficients, name: str) -> Array:
    return np.asarray(
        c[f"{name}_0"]
        + x * (c[f"{name}_1"] + x * (c[f"{name}_2"] + x * (c[f"{name}_3"] + x * c[f"{name}_4"])))
    )


def _fragos2013(host: Host, c: Coefficients) -> Mapping[Part, Array]:
    # far above any real metallicity the polynomial overflows; infinite light is no surprise there
    with np.errstate(over="ignore", invalid="ignore"):
        z = c["solar"] * np.exp(math.log(10.0) * (host.oh12 - SOLAR_OH12))
        hmxb = host.sfr * np.exp(math.log(10.0) * _polynomial(z, c, "hmxb"))
    t = np.asarray(math.log10(host.age) if host.age > 0.0 else math.nan)
    lmxb = host.mstar * float(10.0 ** (_polynomial(t, c, "lmxb") - 10.0))
    return {"hmxb": hmxb, "lmxb": lmxb}


FRAGOS2013 = BackgroundLaw(
    name="fragos2013",
    summary="population synthesis: high-mass binaries by metallicity, low-mass ones by age",
    source=Source(
        "Fragos T. et al., 2013, ApJ, 776, L31",
        2013,
        doi="10.1088/2041-8205/776/2/L31",
        arxiv="1306.1405",
    ),
    formula_text=(
        "HMXB: log(L/SFR) = 40.28 - 62.12 Z + 569.44 Z^2 - 1833.80 Z^3 + 1968.33 Z^4, "
        "Z = 0.02 10^(12 + log(O/H) - 8.69); LMXB: log(L/1e10 Msun) = 40.276 - 1.503 t - 0.423 t^2 "
        "+ 0.425 t^3 + 0.136 t^4, t = log10(mean stellar age / Gyr)"
    ),
    coefficients={
        "solar": Coefficient(0.02, status="MEM", meaning="solar mass fraction in metals"),
        **{
            f"hmxb_{i}": Coefficient(value, meaning=f"coefficient of Z^{i}, high-mass binaries")
            for i, value in enumerate((40.28, -62.12, 569.44, -1833.80, 1968.33))
        },
        **{
            f"lmxb_{i}": Coefficient(
                value, status="MEM", meaning=f"coefficient of t^{i}, low-mass binaries"
            )
            for i, value in enumerate((40.276, -1.503, -0.423, 0.425, 0.136))
        },
    },
    status="MEM",
    status_note=(
        "the polynomial of the high-mass binaries is verified; that of the low-mass ones, the "
        "solar value and the IMF are from memory. No scatter known to us. Whether corrected for "
        "the host's own absorption is not stated; taken as apparent"
    ),
    outside=(
        "Not held, and no range is stated, so no row is marked: the polynomial in Z stops falling "
        "at four times solar (O/H 9.32) and rises from there, which means nothing"
    ),
    checks=(
        Check(
            {"sfr": 1.0, "oh12": SOLAR_OH12, "part": "hmxb"},
            "lx",
            10.0**39.251,
            1.5e-3,
            "coefficient sheet (CALC), Z = 0.02",
        ),
        Check(
            {"sfr": 1.0, "oh12": SOLAR_OH12 - 1.0, "part": "hmxb"},
            "lx",
            10.0**40.158,
            1.5e-3,
            "coefficient sheet (CALC), Z = 0.002",
        ),
        Check(
            {"mstar": 1e10, "age": 1.0, "part": "lmxb"},
            "lx",
            10.0**40.276,
            1e-12,
            "the constant term, at 1 Gyr",
        ),
    ),
    formula=_fragos2013,
    band=HARD,
    imf="kroupa",
    light=frozenset({"hmxb", "lmxb"}),
    metallicity="mass fraction in metals, solar 0.02",
    needs_oh12=True,
    needs_age=True,
)
