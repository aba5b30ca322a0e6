"""The host's own X-rays: which law gives which part, in which IMF and band, and for which rows.

This is where a catalogue is converted to a law (never a law's coefficient to the catalogue), and
where light is kept from being counted twice.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from functools import cached_property
from typing import NamedTuple

import numpy as np

from embersift.arrays import Array, Mask
from embersift.bands import HARD, SOFT
from embersift.catalogue import Sources
from embersift.errors import LawError
from embersift.laws import BACKGROUND, background_law
from embersift.laws.conversions import imf_factor
from embersift.laws.declaration import BackgroundLaw, Coefficients, Host, Part
from embersift.laws.from_recipe import laws_of_recipe
from embersift.recipe import Recipe
from embersift.sky.spectrum import GasSpectrum, power_law_ratio

__all__ = ["Background", "HostLight"]


class HostLight(NamedTuple):
    """The host's light of a block; parts that a law cannot tell apart are NaN."""

    hmxb: Array  # rest 2-10 keV [erg/s]
    lmxb: Array
    gas: Array
    background: Array  # all of it, rest 2-10 keV
    point_like: Array  # what has the binaries' power law spectrum, rest 2-10 keV
    gas_soft: Array  # what has the gas spectrum, rest 0.5-2 keV


@dataclass(frozen=True)
class _Role:
    """One law and the part it plays; `parts` are those of its parts that are used."""

    law: BackgroundLaw
    parts: tuple[Part, ...]
    mstar_factor: float
    sfr_factor: float
    to_hard: float  # L(2-10 keV), or L(0.5-2 keV) for gas, over L(the law's band)
    fallback: _Role | None = None

    @cached_property
    def in_catalogue_imf(self) -> BackgroundLaw:
        """The law with its ranges brought to the catalogue's IMF: cheaper than the reverse."""
        factors = {"mstar": self.mstar_factor, "sfr": self.sfr_factor}
        return replace(
            self.law,
            ranges=tuple(
                replace(
                    span,
                    low=span.low / factors.get(span.quantity, 1.0),
                    high=span.high / factors.get(span.quantity, 1.0),
                )
                for span in self.law.ranges
            ),
        )

    def host(self, sources: Sources, age: float) -> Host:
        def scaled(values: Array, factor: float) -> Array:
            return values if factor == 1.0 else values * factor

        return Host(
            scaled(sources.mstar, self.mstar_factor),
            scaled(sources.sfr, self.sfr_factor),
            sources.oh12,
            sources.z,
            age,
        )

    def light(
        self, sources: Sources, age: float, values: Mapping[str, Coefficients]
    ) -> dict[Part, Array]:
        """Luminosities by part, in the wanted band; rows without O/H from the fallback law."""
        given = self.law.formula(
            self.host(sources, age), values.get(self.law.name, self.law.values)
        )
        light: dict[Part, Array] = {}
        for part in self.parts:
            light[part] = given[part]
            light[part] *= self.to_hard  # a formula's arrays are its own: nobody else holds them
        if self.fallback is not None:
            blank = np.flatnonzero(np.isnan(sources.oh12))
            if blank.size:
                few = sources._replace(
                    mstar=sources.mstar[blank],
                    sfr=sources.sfr[blank],
                    oh12=sources.oh12[blank],
                    z=sources.z[blank],
                )
                other = self.fallback.light(few, age, values)
                for part in self.parts:
                    light[part][blank] = other[part]
        return light


class Background:
    """The background of a recipe, ready to run.

    Raises
    ------
    LawError
        An unknown law; a law in a role that it cannot play; a fallback law that needs O/H too.
    """

    def __init__(self, recipe: Recipe) -> None:
        choices = recipe.background
        self._recipe = recipe
        self._known = {**BACKGROUND, **laws_of_recipe(recipe.law)}
        self._spectrum = GasSpectrum((choices.gas_kt[0], choices.gas_kt[1]), choices.gas_hot_share)
        self._age = float("nan") if choices.stellar_age is None else choices.stellar_age
        roles: list[_Role] = []
        if choices.total is not None:
            roles.append(self._role("total", choices.total))
        else:
            if choices.binaries is not None:
                roles.append(self._role("binaries", choices.binaries))
            else:
                roles.append(self._role("hmxb", choices.hmxb))
                roles.append(self._role("lmxb", choices.lmxb))
            if choices.gas != "none":
                roles.append(self._role("gas", choices.gas))
        self._roles = tuple(role for role in roles if role.law.name != "none")
        self.has_gas = any("gas" in role.parts for role in self._roles)
        laws: dict[str, BackgroundLaw] = {}
        for role in self._roles:
            for one in (role, role.fallback):
                if one is not None:
                    laws[one.law.name] = one.law
        self.laws = tuple(laws.values())

    def _find(self, key: str, name: str) -> BackgroundLaw:
        if name not in self._known:
            try:
                background_law(name)
            except LawError as error:
                raise LawError(f"background.{key}: {error}") from None
        return self._known[name]

    def _role(self, key: str, name: str, *, is_fallback: bool = False) -> _Role:
        law = self._find("without_metallicity" if is_fallback else key, name)
        parts = self._parts(key, law, is_fallback)
        if law.needs_age and "lmxb" in parts and np.isnan(self._age):
            raise LawError(
                f"background.{key}: {name} needs the mean stellar age. "
                "Set background.stellar_age in Gyr."
            )
        fallback = None
        # low-mass binaries never depend on O/H here, whatever the other half of their law does
        if law.needs_oh12 and parts != ("lmxb",):
            if is_fallback:
                raise LawError(
                    f"background.without_metallicity: {name} needs O/H itself; choose a law "
                    "that does not, such as lehmer2019."
                )
            other = self._recipe.background.without_metallicity or (
                "mineo2014" if key == "total" else "lehmer2019"
            )
            fallback = self._role(key, other, is_fallback=True)
        imf = self._recipe.catalogue.imf
        gamma = self._recipe.background.gamma
        return _Role(
            law=law,
            parts=parts,
            mstar_factor=imf_factor("mstar", imf, law.imf),
            sfr_factor=imf_factor("sfr", imf, law.imf),
            to_hard=(
                self._spectrum.ratio(SOFT, law.band)
                if key == "gas"
                else power_law_ratio(gamma, HARD, law.band)
            ),
            fallback=fallback,
        )

    def _parts(self, key: str, law: BackgroundLaw, is_fallback: bool) -> tuple[Part, ...]:
        where = "background.without_metallicity" if is_fallback else f"background.{key}"
        wanted: dict[str, tuple[Part, ...]] = {
            "hmxb": ("hmxb",),
            "lmxb": ("lmxb",),
            "gas": ("gas",),
            "binaries": ("hmxb", "lmxb"),
            "total": ("hmxb", "lmxb", "gas"),
        }
        if law.name == "none":
            return ()
        if not set(wanted[key]) <= law.light:
            fitting = sorted(
                name for name, one in self._known.items() if set(wanted[key]) <= one.light
            )
            raise LawError(
                f"{where}: {law.name} gives {' + '.join(sorted(law.light))}, not "
                f"{' + '.join(wanted[key])}. Laws that do: {', '.join(fitting)}."
            )
        if not law.separable:
            if set(wanted[key]) != law.light:
                if law.kind == "total":
                    raise LawError(
                        f"{where}: {law.name} is a law of all the host's light, hot gas included; "
                        f'use it as background.total = "{law.name}", alone.'
                    )
                raise LawError(
                    f"{where}: the parts of {law.name} cannot be told apart; "
                    f"it can only serve as background.{law.kind}."
                )
            return ("total",)
        return wanted[key]

    def light(
        self, sources: Sources, values: Mapping[str, Coefficients] | None = None
    ) -> HostLight:
        """The host's light of a block.

        Parameters
        ----------
        sources : Sources
            The block.
        values : mapping, optional
            Coefficients by law name, in place of the central ones (`spread` draws them).
        """
        parts: dict[Part, Array] = {}
        for role in self._roles:
            parts.update(role.light(sources, self._age, values or {}))
        whole = parts.get("total")
        if "gas" in parts:
            gas_soft = parts["gas"]
        else:
            # a part that is left out is dark, but only in galaxies that are known at all
            gas_soft = np.where(np.isfinite(sources.mstar) & np.isfinite(sources.sfr), 0.0, np.nan)
        if whole is None:
            gas = gas_soft * self._spectrum.ratio(HARD, SOFT)
            dark = np.zeros_like(gas_soft) if len(parts) < 3 else gas_soft
            hmxb, lmxb = parts.get("hmxb", dark), parts.get("lmxb", dark)
            point_like = hmxb + lmxb
            return HostLight(hmxb, lmxb, gas, point_like + gas, point_like, gas_soft)
        unknown = np.full(whole.shape, np.nan)
        if "gas" in parts or not self._recipe.background.total:
            # a law of both binaries in one number, beside a gas law
            gas = gas_soft * self._spectrum.ratio(HARD, SOFT)
            return HostLight(unknown, unknown, gas, whole + gas, whole, gas_soft)
        return HostLight(unknown, unknown, unknown, whole, whole, gas_soft)

    def stretched(self, sources: Sources) -> Iterator[tuple[BackgroundLaw, Mask]]:
        """Each law with the rows in which it served outside its calibrated range."""
        blank = np.isnan(sources.oh12)
        for role in self._roles:
            for one, where in ((role, ~blank), (role.fallback, blank)):
                if one is None or not one.law.ranges:
                    continue
                if role.fallback is None:
                    where = np.ones(blank.shape, dtype=bool)
                mark = one.in_catalogue_imf.stretched(
                    mstar=sources.mstar, sfr=sources.sfr, oh12=sources.oh12, redshift=sources.z
                )
                yield one.law, mark & where
