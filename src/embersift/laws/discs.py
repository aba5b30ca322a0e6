"""Discs: one efficiency, a fading disc, a disc down to the last stable orbit, a slim disc."""

from __future__ import annotations

import math

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

__all__ = [
    "CONSTANT",
    "ISCO",
    "MADAU2014",
    "MERLONI2008",
    "SHEET",
    "THIN_DISC",
    "THIN_OUTSIDE",
    "TWO_REGIME",
    "isco_efficiency",
    "isco_radius",
]

SHEET = "check value of the coefficient sheet (CALC)"

# A thin disc puffs up near the Eddington limit, whichever formula gave its luminosity.
THIN_DISC = Range(
    "eddington_ratio",
    high=1.0,
    status="PRACTICE",
    note="above the Eddington limit the disc is no longer thin",
)
THIN_OUTSIDE = "Not capped: above L_Edd it goes on with the same efficiency, and the row is marked"


def isco_radius(spin: float) -> float:
    """Radius of the innermost stable circular orbit, in units of G M / c2.

    Parameters
    ----------
    spin : float
        Dimensionless spin, -1 to 1; negative where the disc turns against the hole.

    Raises
    ------
    LawError
        If the spin is not between -1 and 1.

    Notes
    -----
    Bardeen, Press & Teukolsky 1972, ApJ, 178, 347, eq. 2.21.

    Examples
    --------
    >>> isco_radius(0.0), isco_radius(1.0), isco_radius(-1.0)
    (6.0, 1.0, 9.0)
    """
    if not -1.0 <= spin <= 1.0:
        raise LawError(
            f"The spin is {spin:g}, but the spin of a black hole lies between -1 and 1. "
            "Set agn.spin to a number in that range."
        )
    z1 = 1.0 + math.cbrt(1.0 - spin**2) * (math.cbrt(1.0 + spin) + math.cbrt(1.0 - spin))
    z2 = math.sqrt(3.0 * spin**2 + z1**2)
    # At small spin, rounding can push z1 a hair above 3.
    step = math.sqrt(max(0.0, (3.0 - z1) * (3.0 + z1 + 2.0 * z2)))
    return 3.0 + z2 - math.copysign(step, spin)


def isco_efficiency(spin: float) -> float:
    """Share of the rest energy released down to the innermost stable orbit.

    Parameters
    ----------
    spin : float
        Dimensionless spin, -1 to 1.

    Raises
    ------
    LawError
        If the spin is not between -1 and 1.

    Examples
    --------
    >>> round(isco_efficiency(0.0), 4), round(isco_efficiency(0.998), 4)
    (0.0572, 0.321)
    """
    return 1.0 - math.sqrt(1.0 - 2.0 / (3.0 * isco_radius(spin)))


def _constant(rate: Array, coefficients: Coefficients, disc: Disc) -> Array:
    return rate * disc.efficiency


def _fading(rate: Array, coefficients: Coefficients, disc: Disc) -> Array:
    f_critical = coefficients["f_critical"]
    f = rate * disc.efficiency
    # The share is exactly 1 above f_critical, so the thin disc is untouched to the last bit.
    share = np.minimum(f, f_critical)
    share /= f_critical
    share *= f
    return share


def _isco(rate: Array, coefficients: Coefficients, disc: Disc) -> Array:
    return rate * isco_efficiency(disc.spin)


def _madau2014(rate: Array, coefficients: Coefficients, disc: Disc) -> Array:
    thin = rate * isco_efficiency(disc.spin)  # refuses an impossible spin
    c = coefficients

    def of_spin(letter: str) -> float:
        base = c[f"{letter}_constant"] - c[f"{letter}_spin"] * disc.spin
        return float(base ** c[f"{letter}_power"])

    with np.errstate(divide="ignore", over="ignore"):  # no inflow: an infinite inverse, L = 0
        inverse = 16.0 / rate
    slim = of_spin("a") * (
        c["share_b"] / (inverse + of_spin("b")) + c["share_c"] / (inverse + of_spin("c"))
    )
    return np.minimum(thin, slim)


CONSTANT = AccretionLaw(
    name="constant",
    summary="one radiative efficiency at every rate",
    source=Source("Soltan A., 1982, MNRAS, 200, 115", 1982, status="MEM"),
    formula_text="L = eps Mdot c^2, eps = agn.efficiency",
    ranges=(THIN_DISC,),
    status="PRACTICE",
    status_note="the usual assumption of a thin disc; eps = 0.1 is common practice",
    outside=THIN_OUTSIDE,
    checks=(Check({"mdot": 0.4505, "efficiency": 0.1}, "eddington_ratio", 0.04505, 1e-3, SHEET),),
    formula=_constant,
)

TWO_REGIME = AccretionLaw(
    name="two-regime",
    summary="thin disc above 0.1 of the Eddington limit, fading with the rate squared below",
    source=Source(
        "Hirschmann M. et al., 2014, MNRAS, 442, 2304 (eqs 6-7); "
        "after Churazov E. et al., 2005, MNRAS, 363, L91",
        2014,
        status="MEM",
    ),
    formula_text="f = eps Mdot c^2 / L_Edd; L / L_Edd = f for f >= 0.1, else f (f / 0.1)",
    coefficients={
        "f_critical": Coefficient(0.1, status="MEM", meaning="f below which the disc fades")
    },
    ranges=(THIN_DISC,),
    status="MEM",
    status_note=(
        "both branches verified; the threshold 0.1 and the page numbers from memory. The authors "
        "write eps/(1-eps) for rates of growth; here that factor belongs to "
        "catalogue.rate = growth, and the two branches meet without a step"
    ),
    outside=THIN_OUTSIDE,
    checks=(
        *(
            Check({"mdot": 10.0 * f, "efficiency": 0.1}, "eddington_ratio", light, 1e-3, SHEET)
            for f, light in ((1e-4, 1e-7), (1e-3, 1e-5), (1e-2, 1e-3), (0.0999, 0.0998))
        ),
        Check(
            {"mdot": 10.0 / (1.0 - 0.1), "efficiency": 0.1},
            "eddington_ratio",
            1.111,
            1e-3,
            f"{SHEET}; f = 1 there is a rate of growth, here turned into inflow",
        ),
    ),
    formula=_fading,
)

MERLONI2008 = AccretionLaw(
    name="merloni2008",
    summary="thin disc above 0.03 of the Eddington limit, fading with the rate squared below",
    source=Source(
        "Merloni A., Heinz S., 2008, MNRAS, 388, 1011", 2008, bibcode="2008MNRAS.388.1011M"
    ),
    formula_text="f = eps Mdot c^2 / L_Edd; L / L_Edd = f for f >= 0.03, else f (f / 0.03)",
    coefficients={
        "f_critical": Coefficient(3e-2, status="MEM", meaning="f below which the disc fades")
    },
    ranges=(THIN_DISC,),
    status="MEM",
    status_note="form verified; that the paper has f_critical = 0.03 is from memory",
    outside=THIN_OUTSIDE,
    checks=(Check({"mdot": 1e-2, "efficiency": 0.1}, "efficiency", 3.33e-3, 2e-3, SHEET),),
    formula=_fading,
)

ISCO = AccretionLaw(
    name="isco",
    summary="thin disc down to the innermost stable orbit, by spin",
    source=Source(
        "Bardeen J.M., Press W.H., Teukolsky S.A., 1972, ApJ, 178, 347",
        1972,
    ),
    formula_text="eps = 1 - sqrt(1 - 2 / (3 r_isco)), r_isco by agn.spin; L = eps Mdot c^2",
    ranges=(THIN_DISC,),
    outside=THIN_OUTSIDE + ". A spin outside -1 to 1 is refused",
    checks=tuple(
        Check({"mdot": 1.0, "spin": spin}, "efficiency", eps, 2e-3, SHEET)
        for spin, eps in (
            (-1.0, 0.0377),
            (-0.5, 0.0451),
            (0.0, 0.0572),
            (0.5, 0.0821),
            (0.9, 0.1558),
            (0.998, 0.3210),
            (1.0, 0.4226),
        )
    ),
    formula=_isco,
)

MADAU2014 = AccretionLaw(
    name="madau2014",
    summary="slim disc above the Eddington limit, thin disc (isco) at low rates, by spin",
    source=Source(
        "Madau P., Haardt F., Dotti M., 2014, ApJ, 784, L38",
        2014,
        doi="10.1088/2041-8205/784/2/L38",
        arxiv="1402.6995",
    ),
    formula_text=(
        "L / L_Edd = min(thin disc of isco, A [0.985 / (1/m + B) + 0.015 / (1/m + C)]), "
        "m = Mdot / (16 L_Edd/c^2), A = (0.9663 - 0.9292 a)^-0.5639, "
        "B = (4.627 - 4.445 a)^-0.5524, C = (827.3 - 718.1 a)^-0.7060, a = agn.spin"
    ),
    coefficients={
        "share_b": Coefficient(0.985, meaning="weight of the term with B"),
        "share_c": Coefficient(0.015, meaning="weight of the term with C"),
        "a_constant": Coefficient(0.9663, meaning="A at spin 0, before the power"),
        "a_spin": Coefficient(0.9292, meaning="A: change with spin"),
        "a_power": Coefficient(-0.5639, meaning="A: exponent"),
        "b_constant": Coefficient(4.627, meaning="B at spin 0, before the power"),
        "b_spin": Coefficient(4.445, meaning="B: change with spin"),
        "b_power": Coefficient(-0.5524, meaning="B: exponent"),
        "c_constant": Coefficient(827.3, meaning="C at spin 0, before the power"),
        "c_spin": Coefficient(718.1, meaning="C: change with spin"),
        "c_power": Coefficient(-0.7060, meaning="C: exponent"),
    },
    ranges=(
        Range("spin", low=0.0, note="the slim discs fitted (Sadowski 2009) turn with the hole"),
    ),
    status_note="fit verified; that its discs all have a >= 0 is from memory",
    outside=(
        "At low rates the fit shines brighter than a thin disc can (by 11 per cent at a = 0, 27 at "
        "0.9), so the fainter of the two is taken: continuous, and never falling with the rate. "
        "They cross at L / L_Edd = 0.25, 0.27, 0.53 for a = 0, 0.5, 0.9; at a = 1 the fit is "
        "always the fainter. A spin outside -1 to 1 is refused"
    ),
    checks=tuple(
        Check({"mdot": 16.0 * m, "spin": spin}, "eddington_ratio", light, 1e-3, SHEET)
        for spin, values in (
            (0.0, (0.7179, 2.039, 3.105)),
            (0.9, (1.402, 2.609, 3.721)),
            (0.99, (1.783, 2.975, 4.331)),
        )
        for m, light in zip((1.0, 10.0, 100.0), values, strict=True)
    ),
    formula=_madau2014,
)
