"""The published relations, by kind and name; each is declared once, in the module of its kind."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import TypeVar

from embersift.errors import LawError, did_you_mean
from embersift.laws.accretion import ACCRETION
from embersift.laws.binaries import BINARIES
from embersift.laws.bolometric import BOLOMETRIC
from embersift.laws.declaration import AccretionLaw, BackgroundLaw, BolometricLaw, Law
from embersift.laws.gas import GAS

__all__ = [
    "ACCRETION",
    "BACKGROUND",
    "BOLOMETRIC",
    "accretion_law",
    "all_laws",
    "background_law",
    "bolometric_law",
    "find",
]

BACKGROUND: Mapping[str, BackgroundLaw] = MappingProxyType({**BINARIES, **GAS})

L = TypeVar("L", bound=Law)


def _one(laws: Mapping[str, L], name: str, kind: str) -> L:
    try:
        return laws[name]
    except KeyError:
        raise LawError(f"There is no {kind} law {name!r}. {did_you_mean(name, laws)}") from None


def accretion_law(name: str) -> AccretionLaw:
    return _one(ACCRETION, name, "accretion")


def bolometric_law(name: str) -> BolometricLaw:
    return _one(BOLOMETRIC, name, "bolometric")


def background_law(name: str) -> BackgroundLaw:
    return _one(BACKGROUND, name, "background")


def all_laws() -> tuple[Law, ...]:
    """Every built-in law, in the order of the chain."""
    return (*ACCRETION.values(), *BOLOMETRIC.values(), *BACKGROUND.values())


def find(name: str) -> tuple[Law, ...]:
    """Every law of that name (a name may serve two kinds), or a `LawError` with the nearest."""
    found = tuple(law for law in all_laws() if law.name == name)
    if not found:
        names = [law.name for law in all_laws()]
        raise LawError(f"There is no law {name!r}. {did_you_mean(name, names)}")
    return found
