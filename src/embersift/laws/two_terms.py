"""The form of most published host laws: a term in stellar mass plus a term in star formation.

====================== =====================================================================
coefficient            meaning (the same with ``sfr`` in place of ``mstar``)
====================== =====================================================================
``per_mstar``          luminosity [erg/s] at M* = 1 Msun, z = 0 and solar O/H
``log_per_mstar``      its log10; one of the two makes the term exist
``mstar_power``        power of M* (1 when left out)
``mstar_redshift``     power of 1 + z (0 when left out)
``mstar_oh12_slope``   dex per dex of O/H above 8.69 (0 when left out)
====================== =====================================================================

Laws that differ in their numbers only share `two_term_law`, and so do the laws of a recipe.

Examples
--------
>>> from embersift.bands import Band
>>> law = two_term_law("mine", coefficients={"log_per_sfr": 39.5, "sfr_oh12_slope": -0.6},
...                    band=Band(0.5, 8.0), imf="kroupa", light=["hmxb"])
>>> law.formula_text
"10^39.5 SFR 10^(-0.6 Z'), Z' = 12 + log(O/H) - 8.69"
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from functools import partial
from typing import Literal, get_args

import numpy as np

from embersift.arrays import Array
from embersift.bands import Band
from embersift.errors import LawError, did_you_mean
from embersift.laws.conversions import SOLAR_OH12
from embersift.laws.declaration import (
    IMF,
    BackgroundLaw,
    Check,
    Coefficient,
    Coefficients,
    Host,
    Part,
    Range,
    Source,
    Status,
)

__all__ = ["AS_SEEN", "OH12_SCALE", "TWO_TERM_COEFFICIENTS", "two_term_law"]

_Term = Literal["mstar", "sfr"]
_WORDS: Mapping[_Term, str] = {"mstar": "M*", "sfr": "SFR"}
AS_SEEN = "Whether corrected for the host's own absorption is not stated; taken as apparent"
OH12_SCALE = f"12 + log(O/H), solar {SOLAR_OH12:g}"


def _meanings() -> dict[str, str]:
    meanings: dict[str, str] = {}
    for term, one in (("mstar", "M* = 1 Msun"), ("sfr", "SFR = 1 Msun/yr")):
        symbol = "M*" if term == "mstar" else "SFR"
        meanings |= {
            f"per_{term}": f"luminosity [erg/s] at {one}",
            f"log_per_{term}": f"log of the luminosity [erg/s] at {one}",
            f"{term}_power": f"power of {symbol}",
            f"{term}_redshift": f"power of 1 + z in the {symbol} term",
            f"{term}_oh12_slope": f"dex per dex of O/H in the {symbol} term",
        }
    return meanings


TWO_TERM_COEFFICIENTS: Mapping[str, str] = _meanings()
"""Every coefficient that the form takes, with its meaning."""


def _has(term: _Term, names: Iterable[str]) -> bool:
    return bool({f"per_{term}", f"log_per_{term}"} & set(names))


def _light(term: _Term, amount: Array, host: Host, c: Coefficients) -> Array:
    # a power of 0 or 1 is skipped, not computed: most laws have several, and pow is what costs
    scale = c[f"per_{term}"] if f"per_{term}" in c else 10.0 ** c[f"log_per_{term}"]
    power = c.get(f"{term}_power", 1.0)
    if power == 0.0:
        light = np.full_like(amount, scale)
    elif power == 1.0:
        light = amount * scale
    else:
        light = amount**power
        light *= scale
    evolution = c.get(f"{term}_redshift", 0.0)
    if evolution == 1.0:
        light *= 1.0 + host.z
    elif evolution != 0.0:
        light *= (1.0 + host.z) ** evolution
    slope = c.get(f"{term}_oh12_slope", 0.0)
    if slope != 0.0:
        light *= np.exp((slope * math.log(10.0)) * (host.oh12 - SOLAR_OH12))
    return light


def _two_terms(
    host: Host, c: Coefficients, *, mstar_part: Part, sfr_part: Part
) -> Mapping[Part, Array]:
    light: dict[Part, Array] = {}
    if _has("mstar", c):
        light[mstar_part] = _light("mstar", host.mstar, host, c)
    if _has("sfr", c):
        term = _light("sfr", host.sfr, host, c)
        light[sfr_part] = light[sfr_part] + term if sfr_part in light else term
    return light


def _text(c: Coefficients) -> str:
    terms: list[str] = []
    for term, symbol in _WORDS.items():
        if not _has(term, c):
            continue
        if f"per_{term}" in c:
            words = [f"{c[f'per_{term}']:g}".replace("e+", "e")]
        else:
            words = [f"10^{c[f'log_per_{term}']:g}"]
        for base, power in (
            (symbol, c.get(f"{term}_power", 1.0)),
            ("(1+z)", c.get(f"{term}_redshift", 0.0)),
        ):
            if power != 0.0:
                words.append(base if power == 1.0 else f"{base}^{power:g}")
        slope = c.get(f"{term}_oh12_slope", 0.0)
        if slope != 0.0:
            words.append(f"10^({slope:g} Z')")
        terms.append(" ".join(words))
    text = " + ".join(terms)
    return f"{text}, Z' = 12 + log(O/H) - {SOLAR_OH12:g}" if "Z'" in text else text


def _refuse(name: str, problem: str, advice: str) -> LawError:
    return LawError(f"The law {name} {problem}. {advice}")


def _check_coefficients(name: str, given: Mapping[str, Coefficient]) -> None:
    for key, one in given.items():
        if key not in TWO_TERM_COEFFICIENTS:
            raise _refuse(
                name, f"has a coefficient {key!r}", did_you_mean(key, TWO_TERM_COEFFICIENTS)
            )
        if not math.isfinite(one.value):
            raise _refuse(name, f"has {key} = {one.value:g}", "A coefficient must be finite.")
    terms = [term for term in _WORDS if _has(term, given)]
    if not terms:
        raise _refuse(
            name, "has no term", "Give log_per_mstar or log_per_sfr (log10 of erg/s), or both."
        )
    for term in _WORDS:
        if f"per_{term}" in given and f"log_per_{term}" in given:
            raise _refuse(
                name, f"has both per_{term} and log_per_{term}", "Give the one or the other."
            )
        stray = [key for key in given if key.startswith(f"{term}_")]
        if stray and term not in terms:
            raise _refuse(
                name, f"has {', '.join(stray)} but no such term", f"Give log_per_{term} as well."
            )


def _parts(name: str, light: Iterable[Part], terms: int) -> tuple[frozenset[Part], Part, Part]:
    """The light, and the part that each of the two terms makes."""
    known = [part for part in get_args(Part) if part != "total"]
    given = list(light)
    for part in given:
        if part not in known:
            raise _refuse(name, f"has light of {part!r}", did_you_mean(part, known))
    if not given:
        raise _refuse(name, "has no light", f"Say which of {', '.join(known)} its number contains.")
    parts = frozenset(given)
    if len(parts) == 1:
        return parts, given[0], given[0]
    if parts == {"hmxb", "lmxb"} and terms == 2:
        return parts, "lmxb", "hmxb"
    return parts, "total", "total"


def two_term_law(
    name: str,
    *,
    coefficients: Mapping[str, Coefficient | float],
    band: Band,
    imf: IMF,
    light: Iterable[Part],
    source: Source | str = "",
    summary: str = "",
    scatter_dex: float | None = None,
    scatter_status: Status = "MEM",
    ranges: tuple[Range, ...] = (),
    status: Status = "MEM",
    status_note: str = "",
    outside: str = "",
    checks: tuple[Check, ...] = (),
    apparent: bool = True,
) -> BackgroundLaw:
    """Declare a law of the common form.

    Parameters
    ----------
    name : str
        The word a recipe uses.
    coefficients : mapping
        By the names of `TWO_TERM_COEFFICIENTS`. A plain number takes the status of the law.
    band : Band
        Rest-frame band of the luminosity [keV].
    imf : {"salpeter", "kroupa", "chabrier"}
        IMF that its M* and SFR are meant in.
    light : iterable of {"hmxb", "lmxb", "gas"}
        What the number contains. High- and low-mass binaries are told apart when there are two
        terms (low-mass binaries follow M*); a single kind of light is the sum of the terms; any
        other mixture cannot be told apart and comes as ``total``.
    source : Source or str
        Where it was published.
    summary, scatter_dex, scatter_status, ranges, status, status_note, outside, checks, apparent
        As in `BackgroundLaw`.

    Raises
    ------
    LawError
        An unknown coefficient or kind of light, no term at all, or a term given twice.
    """
    numbers = {
        key: one if isinstance(one, Coefficient) else Coefficient(float(one), status=status)
        for key, one in coefficients.items()
    }
    _check_coefficients(name, numbers)
    terms = sum(_has(term, numbers) for term in _WORDS)
    parts, mstar_part, sfr_part = _parts(name, light, terms)
    values = {key: one.value for key, one in numbers.items()}
    metals = any(values.get(f"{term}_oh12_slope", 0.0) != 0.0 for term in _WORDS)
    if not outside:
        outside = "Goes on as a power law" + (
            "; the row is marked" if ranges else ". No range is stated, so no row is marked"
        )
    return BackgroundLaw(
        name=name,
        summary=summary or "a law of the recipe",
        source=Source(source, 0, status=status) if isinstance(source, str) else source,
        formula_text=_text(values),
        coefficients={
            key: Coefficient(
                one.value,
                one.minus,
                one.plus,
                one.status,
                one.error_status,
                one.meaning or TWO_TERM_COEFFICIENTS[key],
            )
            for key, one in numbers.items()
        },
        ranges=ranges,
        scatter_dex=scatter_dex,
        scatter_status=scatter_status,
        status=status,
        status_note=status_note,
        outside=outside,
        checks=checks,
        formula=partial(_two_terms, mstar_part=mstar_part, sfr_part=sfr_part),
        band=band,
        imf=imf,
        light=parts,
        separable="total" not in (mstar_part, sfr_part),
        metallicity=OH12_SCALE if metals else "",
        needs_oh12=metals,
        apparent=apparent,
    )
