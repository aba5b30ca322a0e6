"""Laws of the user's own, from ``[law.NAME]`` sections of a recipe.

They have the form that most published host laws share (`two_terms`): powers of stellar mass, star
formation rate and 1 + z, and a slope in O/H.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from embersift.errors import LawError, RecipeError, did_you_mean
from embersift.laws.binaries import BINARIES
from embersift.laws.declaration import BackgroundLaw, Coefficient, Range
from embersift.laws.gas import GAS
from embersift.laws.two_terms import TWO_TERM_COEFFICIENTS, two_term_law
from embersift.recipe_values import band, choice, list_of, number, text

__all__ = ["laws_of_recipe"]

_FIXED = {
    "light": list_of(choice("hmxb", "lmxb", "gas")),
    "band": band(),
    "imf": choice("kroupa", "chabrier", "salpeter"),
    "source": text(),
    "scatter_dex": number(least=0.0, most=3.0),
}
_RANGES = {f"{quantity}_range": quantity for quantity in ("mstar", "sfr", "oh12", "redshift")}


def laws_of_recipe(sections: Mapping[str, Mapping[str, Any]]) -> dict[str, BackgroundLaw]:
    """Turn ``[law.NAME]`` sections into laws.

    Parameters
    ----------
    sections : mapping
        Keys by law name: ``light``, ``band``, ``imf`` (needed); the coefficients of
        `TWO_TERM_COEFFICIENTS`, each a number or ``[number, error]``; ``scatter_dex``,
        ``source``; ``sfr_range``, ``mstar_range``, ``oh12_range``, ``redshift_range``.

    Raises
    ------
    LawError
        A name that is taken, an unknown key, or a value that is not of its kind.
    """
    laws: dict[str, BackgroundLaw] = {}
    for name, section in sections.items():
        try:
            laws[name] = _law(name, section)
        except RecipeError as error:
            message = str(error)
            prefix = "" if message.startswith((f"law.{name}", "[law")) else f"[law.{name}]: "
            raise LawError(prefix + message) from None
    return laws


def _law(name: str, section: Mapping[str, Any]) -> BackgroundLaw:
    if not re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9_.-]{0,39}", name):
        raise RecipeError("a law's name is made of letters, digits, _ . and -, at most 40.")
    if name in BINARIES or name in GAS:
        raise RecipeError(f"there is a built-in law {name!r}; give yours another name.")
    for needed in ("light", "band", "imf"):
        if needed not in section:
            raise RecipeError(f"the key {needed} is missing; light, band and imf are needed.")
    given: dict[str, Any] = {}
    coefficients: dict[str, Coefficient] = {}
    ranges: list[Range] = []
    for key, value in section.items():
        where = f"law.{name}.{key}"
        if key in _FIXED:
            given[key] = _FIXED[key].read(where, value)
        elif key in TWO_TERM_COEFFICIENTS:
            coefficients[key] = _coefficient(where, value)
        elif key in _RANGES:
            low, high = list_of(number(), length=2).read(where, value)
            ranges.append(Range(_RANGES[key], low, high, "MEM", "stated in the recipe"))
        else:
            known = [*_FIXED, *TWO_TERM_COEFFICIENTS, *_RANGES]
            raise RecipeError(f"{where} is not a key. {did_you_mean(key, known)}")
    return two_term_law(
        name,
        coefficients=coefficients,
        band=given["band"],
        imf=given["imf"],
        light=given["light"],
        source=given.get("source", "the user's recipe"),
        summary="a law of the recipe",
        scatter_dex=given.get("scatter_dex"),
        ranges=tuple(ranges),
        status="MEM",
        status_note="declared in the recipe; not verified by embersift",
    )


def _coefficient(where: str, value: Any) -> Coefficient:
    if isinstance(value, (list, tuple)):
        central, error = list_of(number(), length=2).read(where, value)
        return Coefficient.symmetric(central, error, "MEM")
    return Coefficient(number().read(where, value), status="MEM")
