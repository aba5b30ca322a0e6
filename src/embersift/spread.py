"""How far published laws, and their errors, move the hidden fraction.

Two errors are shared by every row of a catalogue and do not average out: the errors of a law's
coefficients, and the choice of the law. `spread` repeats the screening with every combination of
laws (accretion x bolometric x binaries x gas), and for each with coefficients drawn from their
published errors.

Combinations share their parts. The black holes' light is worked out once per accretion law,
correction and draw, the host's once per law and draw; a combination is then a comparison of two
arrays, so the cost is the sum of the laws, not their product. Draw i of a coefficient is the same
number wherever its law is used (`embersift.draws`): what differs between two combinations is the
laws, never the luck of the draw.
"""

from __future__ import annotations

import copy
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array, Mask
from embersift.bins import checked_edges, slots
from embersift.catalogue import Sources, column_names, layout
from embersift.chain import Chain, View, circle_radius
from embersift.constants import MPC
from embersift.draws import coefficient_draws, drawn_coefficients, undrawn_coefficients
from embersift.errors import CatalogueError, LawError, RecipeError, did_you_mean
from embersift.host import Background, HostLight
from embersift.laws import BACKGROUND, background_law
from embersift.laws.declaration import Coefficient, Coefficients, Law
from embersift.laws.from_recipe import laws_of_recipe
from embersift.plausibility import suspicion
from embersift.problems import UNUSABLE
from embersift.recipe import Recipe
from embersift.screening import host_numbers, values_of
from embersift.sky.blending import blends
from embersift.tallying import Tally, count

if TYPE_CHECKING:
    import pandas as pd

__all__ = [
    "ALL",
    "CHOICES",
    "DEFAULT_CHOICES",
    "DRAWS",
    "Combination",
    "Combinations",
    "SpreadResult",
    "combinations",
    "default_combinations",
    "own_combination",
    "spread",
    "spread_of_sources",
]

CHOICES = ("accretion", "bolometric", "binaries", "gas")
"""What a combination fixes, in the order of the chain."""

DEFAULT_CHOICES: Mapping[str, tuple[str, ...]] = {
    "accretion": ("two-regime", "merloni2008", "inayoshi2019", "xie2012", "constant"),
    "bolometric": ("duras2020", "shen2020", "hopkins2007", "lopez2024", "marconi2004"),
    "binaries": ("lehmer2021+lehmer2019", "lehmer2019", "lehmer2016", "lehmer2010"),
    "gas": ("mineo2012gas", "none"),
}
"""The laws that are compared unless the user says otherwise: 200 combinations."""

DRAWS = 200
"""Draws of the coefficients by default: 16 and 84 per cent to about a tenth of a sigma."""

ALL = "all"
"""Label of the bin that holds every black hole."""

PERCENTILES = (16.0, 50.0, 84.0)

CHUNK = 1 << 15
"""Accreting rows per step."""
_CARRIER = "lehmer2010"  # any law of binaries: a gas law is evaluated beside one
_LEAST = np.nextafter(0.0, 1.0)


@dataclass(frozen=True)
class Combination:
    """One law for each choice; `binaries` is one law, or ``HMXB+LMXB``."""

    accretion: str
    bolometric: str
    binaries: str
    gas: str

    def recipe(self, recipe: Recipe) -> Recipe:
        """The recipe with these laws in place of its own."""
        hmxb, plus, lmxb = self.binaries.partition("+")
        laws: dict[str, Any]
        if plus:
            laws = {"hmxb": hmxb, "lmxb": lmxb, "binaries": None, "total": None}
        elif _holds_gas(recipe, self.binaries):
            laws = {"binaries": None, "total": self.binaries}
        else:
            laws = {"binaries": self.binaries, "total": None}
        return replace(
            recipe,
            agn=replace(recipe.agn, accretion=self.accretion, bolometric=self.bolometric),
            background=replace(recipe.background, gas=self.gas, **laws),
        )


@dataclass(frozen=True)
class Combinations:
    """The combinations of a run, in order; `skipped` says which were left out, and why."""

    recipe: Recipe
    own: Combination
    choices: Mapping[str, tuple[str, ...]]
    every: tuple[Combination, ...]
    skipped: tuple[str, ...]

    @property
    def reference(self) -> Combination:
        """The recipe's own laws; for a choice that excludes them, the first law that is left."""
        return Combination(
            **{
                kind: mine if (mine := getattr(self.own, kind)) in names else names[0]
                for kind, names in self.choices.items()
            }
        )


def _holds_gas(recipe: Recipe, name: str) -> bool:
    known = {**BACKGROUND, **laws_of_recipe(recipe.law)}
    law = known[name] if name in known else background_law(name)
    return law.kind == "total"


def own_combination(recipe: Recipe) -> Combination:
    """The laws that the recipe itself names."""
    host = recipe.background
    if host.total is not None:
        binaries, gas = host.total, "none"
    else:
        binaries, gas = host.binaries or f"{host.hmxb}+{host.lmxb}", host.gas
    return Combination(recipe.agn.accretion, recipe.agn.bolometric, binaries, gas)


def _listed(choices: Mapping[str, Any], own: Combination) -> dict[str, tuple[str, ...]]:
    """The laws of each choice: the user's, or the recipe's own and the default ones."""
    for kind in choices:
        if kind not in CHOICES:
            raise RecipeError(f"spread.{kind} is no choice. {did_you_mean(kind, CHOICES)}")
    listed: dict[str, tuple[str, ...]] = {}
    for kind in CHOICES:
        given = choices.get(kind)
        if given is None:
            given = (getattr(own, kind), *DEFAULT_CHOICES[kind])
        names = (given,) if isinstance(given, str) else tuple(given)
        if not names:
            raise RecipeError(f"spread.{kind}: name at least one law, or leave the key out.")
        listed[kind] = tuple(dict.fromkeys(names))
    return listed


def combinations(recipe: Recipe, choices: Mapping[str, Any] | None = None) -> Combinations:
    """Every combination of laws that the recipe allows.

    Parameters
    ----------
    recipe : Recipe
        Its own laws come first in each choice that is not restricted.
    choices : mapping, optional
        Law names by ``accretion``, ``bolometric``, ``binaries``, ``gas``; `DEFAULT_CHOICES` for
        those left out. Binaries are one law, or two as ``HMXB+LMXB``.

    Raises
    ------
    LawError
        A law that the user names is unknown, or cannot do what the recipe asks of it.
    RecipeError
        An unknown choice, an empty one, or no combination is left.
    """
    own = own_combination(recipe)
    named = {kind: given for kind, given in (choices or {}).items() if given is not None}
    listed = _listed(named, own)
    skipped: list[str] = []
    for kind, names in listed.items():
        kept: list[str] = []
        for name in names:
            try:
                parts = {kind: name}
                if kind == "binaries":
                    parts["gas"] = "none"
                elif kind == "gas":
                    parts["binaries"] = _CARRIER
                Chain(replace(own, **parts).recipe(recipe))
            except LawError as error:
                if kind in named or name == getattr(own, kind):
                    raise
                skipped.append(f"{kind} {name}: {error}")
            else:
                kept.append(name)
        listed[kind] = tuple(kept)
    every: list[Combination] = []
    for accretion in listed["accretion"]:
        for bolometric in listed["bolometric"]:
            for binaries in listed["binaries"]:
                for gas in listed["gas"]:
                    if gas == "none" or not _is_total(recipe, binaries):
                        every.append(Combination(accretion, bolometric, binaries, gas))
    for binaries in listed["binaries"]:
        overlaps = [gas for gas in listed["gas"] if gas != "none"]
        if overlaps and _is_total(recipe, binaries):
            skipped.append(
                f"{binaries} with {', '.join(overlaps)}: {binaries} already contains the hot gas, "
                "which would be counted twice"
            )
    if not every:
        raise RecipeError(f"No combination of laws is left: {'; '.join(skipped)}.")
    return Combinations(recipe, own, listed, tuple(every), tuple(skipped))


def _is_total(recipe: Recipe, binaries: str) -> bool:
    return "+" not in binaries and _holds_gas(recipe, binaries)


def default_combinations(recipe: Recipe) -> tuple[Combination, ...]:
    """The combinations of `DEFAULT_CHOICES` and the recipe's own laws."""
    return combinations(recipe).every


# --- the parts that combinations share ------------------------------------------------------


class _Side(NamedTuple):
    """The black holes' light in one observation, or the host's, and rows without a number."""

    light: Array  # flux; of black holes, -inf where it cannot count
    counted: Array | None  # of black holes: flux that meets the limit with the host's
    lost: Mask | None


@dataclass(frozen=True)
class _Rows:
    """Accreting rows in the order of their bins, and what an observation makes of unit light."""

    sources: Sources
    host: NDArray[np.uint64] | None
    shared: NDArray[np.intp]  # rows whose galaxy has another one
    weight: Array | None
    ends: tuple[tuple[int, int, int], ...]  # slot, first row, end
    agn: tuple[Array, ...]  # by observation: flux of 1 erg/s of a black hole's 2-10 keV light,
    point_like: tuple[Array, ...]  # of the binaries' light,
    gas: tuple[Array, ...]  # and of the gas's 0.5-2 keV light

    def total(self, mask: Mask) -> Iterator[tuple[int, float]]:
        """Rows that are marked, or their weight, by slot."""
        for slot, first, end in self.ends:
            if self.weight is None:
                yield slot, float(np.count_nonzero(mask[first:end]))
            else:
                yield slot, float(self.weight[first:end] @ mask[first:end])


def _taken(sources: Sources, rows: NDArray[np.intp]) -> Sources:
    return Sources._make(values[rows] for values in sources)


class _Screen:
    """The laws of every combination, made ready once."""

    def __init__(self, plan: Combinations, draws: int, seed: int) -> None:
        recipe = plan.recipe
        self.plan = plan
        self.draws = draws
        self.reference = Chain(plan.reference.recipe(recipe))
        self.views: tuple[View, ...] = self.reference.views
        self.thresholds = recipe.screen.thresholds
        self.agn = {
            (c.accretion, c.bolometric): Chain(replace(plan.reference, accretion=c.accretion,
                                                       bolometric=c.bolometric).recipe(recipe))
            for c in plan.every
        }  # fmt: skip
        self.binaries = {
            c.binaries: Background(replace(plan.reference, binaries=c.binaries, gas="none")
                                   .recipe(recipe))
            for c in plan.every
        }  # fmt: skip
        self.gas = {
            c.gas: Background(replace(plan.reference, binaries=_CARRIER, gas=c.gas).recipe(recipe))
            for c in plan.every
            if c.gas != "none"
        }
        self.totals = frozenset(name for name in self.binaries if _is_total(recipe, name))
        anchor = recipe.agn.anchor
        self.laws: dict[tuple[str, str], tuple[Law, str]] = {}
        for chain in self.agn.values():
            for law, band in ((chain.accretion_law, "hard"), (chain.bolometric_law, anchor)):
                self.laws[law.kind, law.name] = (law, band)
        for host in self.binaries.values():
            for one in host.laws:
                self.laws[one.kind, one.name] = (one, "hard")
        for name, host in self.gas.items():
            self.laws["gas", name] = next((one, "hard") for one in host.laws if one.name == name)
        self.values: dict[tuple[str, str], list[dict[str, float]]] = {
            key: coefficient_draws(law, draws, seed, band=band)
            for key, (law, band) in self.laws.items()
            if drawn_coefficients(law, band=band)
        }
        self.host_kinds = [key for key in self.values if key[0] not in ("accretion", "bolometric")]
        # a law with an error of zero, or none, gives the same light in every draw
        self.agn_varies = {
            key: any(
                (law.kind, law.name) in self.values
                for law in (chain.accretion_law, chain.bolometric_law)
            )
            for key, chain in self.agn.items()
        }
        self.binaries_vary = {
            name: any((law.kind, law.name) in self.values for law in host.laws)
            for name, host in self.binaries.items()
        }
        self.gas_varies = {name: ("gas", name) in self.values for name in self.gas}
        self.pairs = sorted({(c.binaries, c.gas) for c in plan.every})
        self.index = {c: i for i, c in enumerate(plan.every)}
        self.varies = [
            self.agn_varies[c.accretion, c.bolometric]
            or self.binaries_vary[c.binaries]
            or self.gas_varies.get(c.gas, False)
            for c in plan.every
        ]

    def host_values(self, draw: int | None) -> Mapping[str, Coefficients] | None:
        if draw is None:
            return None
        return {key[1]: self.values[key][draw] for key in self.host_kinds}

    def rows(
        self, sources: Sources, host: NDArray[np.uint64] | None, weight: Array | None,
        slot: NDArray[np.intp],
    ) -> _Rows:  # fmt: skip
        """A chunk made ready; an observation's fluxes are linear in all three kinds of light."""
        size = sources.mstar.size
        one, none = np.ones(size), np.zeros(size)
        u, area = np.log1p(sources.z), 4.0 * np.pi * (sources.distance * MPC) ** 2
        with_gas = self.reference
        if self.gas:
            name = next(iter(self.gas))
            with_gas = Chain(
                replace(self.plan.reference, binaries=_CARRIER, gas=name).recipe(self.plan.recipe)
            )
        binaries = HostLight(one, none, none, one, one, none)
        gas = HostLight(none, none, one, one, none, one)
        seen = [with_gas.fluxes(view, sources, one, binaries, u, area) for view in with_gas.views]
        glow = [with_gas.fluxes(view, sources, one, gas, u, area) for view in with_gas.views]
        shared = np.empty(0, dtype=np.intp)
        if host is not None:
            _, place, number = np.unique(host, return_inverse=True, return_counts=True)
            shared = np.flatnonzero(number[place] > 1)
        found, first = np.unique(slot, return_index=True)
        ends = zip(found.tolist(), first.tolist(), [*first[1:].tolist(), size], strict=True)
        return _Rows(
            sources=sources,
            host=host,
            shared=shared,
            weight=weight,
            ends=tuple(ends),
            agn=tuple(flux.agn for flux in seen),
            point_like=tuple(flux.background for flux in seen),
            gas=tuple(flux.background for flux in glow),
        )

    def agn_sides(
        self, rows: _Rows, draw: int | None, varying: bool
    ) -> dict[tuple[str, str], list[_Side]]:
        """The black holes' light by pair of laws: those that vary with the draw, or the others."""
        sides: dict[tuple[str, str], list[_Side]] = {}
        inflow: dict[str, tuple[Array, Array]] = {}
        for key, central in self.agn.items():
            if self.agn_varies[key] != varying:
                continue
            chain = central if draw is None else self._drawn(central, draw)
            if key[0] not in inflow:
                lbol, ratio, _ = chain.accretion(rows.sources)
                inflow[key[0]] = lbol, ratio
            lx = chain.agn_light(*inflow[key[0]], rows.sources.mbh)
            sides[key] = [self._agn_side(rows, i, lx) for i in range(len(self.views))]
        return sides

    def _drawn(self, central: Chain, draw: int) -> Chain:
        chain = copy.copy(central)
        law = chain.accretion_law
        if (law.kind, law.name) in self.values:
            fixed = {n: Coefficient(v) for n, v in self.values[law.kind, law.name][draw].items()}
            chain.accretion_law = replace(law, coefficients=fixed)
        correction = chain.bolometric_law
        if (correction.kind, correction.name) in self.values:
            chain.correction = self.values[correction.kind, correction.name][draw]
        return chain

    def _agn_side(self, rows: _Rows, i: int, lx: Array) -> _Side:
        screen, observation = self.plan.recipe.screen, self.views[i].observation
        flux = lx * rows.agn[i]
        known = np.isfinite(flux)
        known &= np.isfinite(lx)
        can = known & (lx >= screen.floor) if screen.floor > 0.0 else known.copy()
        counted = flux
        if observation.aperture is not None and rows.host is not None:
            counted = flux.copy()
            fainter = np.zeros(flux.size, dtype=bool)
            shared = rows.shared
            radius = circle_radius(_taken(rows.sources, shared), observation.aperture)
            found = blends(
                rows.host[shared], rows.sources.offset[shared], radius, flux[shared],
                known[shared],
            )  # fmt: skip
            counted[shared], fainter[shared] = found.summed, found.fainter
            can &= ~fainter
        if screen.flux_of == "agn":
            can &= counted >= observation.flux_limit
        lost = None if known.all() else ~known
        light = np.where(can, flux, -np.inf)
        return _Side(light, counted if screen.flux_of == "total" else None, lost)

    def host_lights(
        self, rows: _Rows, draw: int | None, varying: bool
    ) -> tuple[dict[str, HostLight], dict[str, Array]]:
        """Light of the binaries and of the gas: of laws that vary, or of the others."""
        values = self.host_values(draw)
        binaries = {
            name: host.light(rows.sources, values)
            for name, host in self.binaries.items()
            if self.binaries_vary[name] == varying
        }
        gas = {
            name: host.light(rows.sources, values).gas_soft
            for name, host in self.gas.items()
            if self.gas_varies[name] == varying
        }
        return binaries, gas

    def host_sides(
        self, rows: _Rows, binaries: Mapping[str, HostLight], gas: Mapping[str, Array]
    ) -> Iterator[tuple[tuple[str, str], list[_Side]]]:
        for pair in self.pairs:
            light = binaries[pair[0]]
            soft = light.gas_soft if pair[0] in self.totals else gas.get(pair[1])
            sides = []
            for i in range(len(self.views)):
                flux = light.point_like * rows.point_like[i]
                if soft is not None and (pair[1] != "none" or pair[0] in self.totals):
                    flux += soft * rows.gas[i]
                unknown = np.isnan(flux)
                sides.append(_Side(flux, None, unknown if unknown.any() else None))
            yield pair, sides

    def draw(
        self, rows: _Rows, draw: int,
        fixed: tuple[Mapping[tuple[str, str], list[_Side]], Mapping[str, HostLight],
                     Mapping[str, Array]],
        slot_number: int,
    ) -> tuple[Array, Array]:  # fmt: skip
        """Visible, and lost, of a chunk in one draw: by combination, observation (and threshold).

        Returns
        -------
        visible : array, shape (combinations, observations, thresholds, slots)
        lost : array, shape (combinations, observations, slots)
            Accreting rows that these laws give no number for.
        """
        shape = (len(self.index), len(self.views), len(self.thresholds), slot_number)
        visible, lost = np.zeros(shape), np.zeros((*shape[:2], slot_number))
        agn = {**fixed[0], **self.agn_sides(rows, draw, True)}
        drawn_binaries, drawn_gas = self.host_lights(rows, draw, True)
        binaries, gas = {**fixed[1], **drawn_binaries}, {**fixed[2], **drawn_gas}
        mask = np.empty(rows.sources.mstar.size, dtype=bool)
        for pair, hosts in self.host_sides(rows, binaries, gas):
            bars = [self._bars(i, host.light) for i, host in enumerate(hosts)]
            for key, holes in agn.items():
                at = self.index.get(Combination(*key, *pair))
                if at is None or not self.varies[at]:
                    continue
                for i, (hole, host) in enumerate(zip(holes, hosts, strict=True)):
                    enough = None
                    if hole.counted is not None:
                        limit = self.views[i].observation.flux_limit
                        enough = hole.counted + host.light >= limit
                    for j, bar in enumerate(bars[i]):
                        np.greater_equal(hole.light, bar, out=mask)
                        if enough is not None:
                            mask &= enough
                        for slot, number in rows.total(mask):
                            visible[at, i, j, slot] = number
                    if hole.lost is not None or host.lost is not None:
                        gone = np.zeros(mask.size, dtype=bool)
                        for part in (hole.lost, host.lost):
                            if part is not None:
                                gone |= part
                        for slot, number in rows.total(gone):
                            lost[at, i, slot] = number
        return visible, lost

    def _bars(self, i: int, flux: Array) -> list[Array]:
        """What the black hole's flux must reach, by threshold; NaN where the host has none."""
        one_less = 1.0 if self.plan.recipe.screen.criterion == "total" else 0.0
        dark = flux == 0.0
        bars = []
        for threshold in self.thresholds:
            factor = threshold - one_less
            bar = flux * factor
            if dark.any() and factor > 0.0:
                # any light stands above no light, but no light does not
                bar[dark] = _LEAST
            bars.append(bar)
        return bars


# --- the whole ------------------------------------------------------------------------------


@dataclass(frozen=True)
class SpreadResult:
    """What `spread` found.

    Attributes
    ----------
    combinations : Combinations
        The laws that were compared, the recipe's own, and what was left out.
    drawn, not_drawn : mapping of str to tuple of str
        Coefficients by law that were drawn, and those without an error known to us, which stayed.
    draws, seed : int
        Draws of the coefficients, and their seed.
    tallies : tuple of pandas.DataFrame
        The tally of each combination at the central coefficients.
    fractions : array, shape (draws, combinations, looks, bins)
        Hidden fraction of each draw, in the order of the rows of a tally.
    """

    combinations: Combinations
    drawn: Mapping[str, tuple[str, ...]]
    not_drawn: Mapping[str, tuple[str, ...]]
    draws: int
    seed: int
    tallies: tuple[Any, ...]
    fractions: Array

    @cached_property
    def _table(self) -> pd.DataFrame:
        import pandas as pd

        kept = ["observation", "threshold", "by", "bin", "low", "high", "black_holes", "hidden",
                "hidden_fraction", "hidden_low", "hidden_high"]  # fmt: skip
        frames = []
        for at, (one, tally) in enumerate(zip(self.combinations.every, self.tallies, strict=True)):
            frame = tally[kept].reset_index(drop=True)
            for place, kind in enumerate(CHOICES):
                frame.insert(place, kind, getattr(one, kind))
            frame.insert(len(CHOICES), "own", one == self.combinations.own)
            drawn = self.fractions[:, at].reshape(self.draws, -1)
            known = np.isfinite(drawn).any(axis=0)
            limits = np.full((3, drawn.shape[1]), np.nan)
            limits[:, known] = np.nanpercentile(drawn[:, known], PERCENTILES, axis=0)
            frame["spread_low"], frame["spread_median"], frame["spread_high"] = limits
            frame["draws"] = self.draws
            frame["interval"], frame["level"] = tally["interval"], tally["level"]
            frames.append(frame)
        whole: pd.DataFrame = pd.concat(frames, ignore_index=True)
        return whole

    def table(self) -> pd.DataFrame:
        """One row per combination, observation, threshold and bin.

        Returns
        -------
        pandas.DataFrame
            | column | meaning |
            |---|---|
            | accretion, bolometric, binaries, gas | the laws |
            | own | whether they are the recipe's own |
            | observation, threshold, by, bin, low, high | what was counted; bin ``all`` holds all |
            | black_holes, hidden | numbers, or sums of weights |
            | hidden_fraction | hidden / black_holes with the central coefficients |
            | hidden_low, hidden_high | its binomial interval: small numbers of black holes |
            | spread_low, spread_median, spread_high | 16, 50, 84 per cent of the draws |
            | draws | how many |
            | interval, level | how the binomial interval was made |
        """
        return self._table.copy()

    def between_laws(self) -> pd.DataFrame:
        """Spread of the central hidden fraction over the combinations, per bin.

        Returns
        -------
        pandas.DataFrame
            One row per observation, threshold and bin: ``own`` (the recipe's laws; NaN where the
            choices leave them out), ``median``, ``lowest``, ``highest``, ``percentile_16``,
            ``percentile_84``, ``combinations``.
        """
        import pandas as pd

        keys = ["observation", "threshold", "by", "bin", "low", "high"]
        rows = []
        for names, here in self._table.groupby(keys, sort=False, dropna=False):
            shares = here["hidden_fraction"].dropna().to_numpy(dtype=float)
            mine = here.loc[here["own"], "hidden_fraction"]
            low, middle, high = (
                np.percentile(shares, PERCENTILES) if shares.size else np.full(3, np.nan)
            )
            rows.append(
                {
                    **dict(zip(keys, names, strict=True)),
                    "own": float(mine.iloc[0]) if mine.size else np.nan,
                    "median": middle,
                    "lowest": shares.min() if shares.size else np.nan,
                    "highest": shares.max() if shares.size else np.nan,
                    "percentile_16": low,
                    "percentile_84": high,
                    "combinations": len(here),
                }
            )
        return pd.DataFrame(rows)

    def ranking(self, bin: str = ALL) -> pd.DataFrame:
        """Which choice of a law moves the hidden fraction most.

        Parameters
        ----------
        bin : str
            Label of a bin; every black hole by default.

        Returns
        -------
        pandas.DataFrame
            One row per observation, threshold and law that is not the reference: ``rank`` of its
            choice (1 moves the hidden fraction most), ``choice``, ``law``, ``instead_of`` (the
            recipe's own, or the first of the choice), ``change`` of the hidden fraction, a mean
            over all combinations of the other choices, with its sign; ``change_low`` and
            ``change_high``, the extremes; ``combinations``, how many were compared.

        Raises
        ------
        RecipeError
            There is no such bin.
        """
        import pandas as pd

        table = self._table[self._table["bin"] == bin]
        if table.empty:
            raise RecipeError(f"There is no bin {bin!r}. {did_you_mean(bin, self._table['bin'])}")
        reference = self.combinations.reference
        rows: list[dict[str, Any]] = []
        for (observation, threshold), here in table.groupby(
            ["observation", "threshold"], sort=False
        ):
            shares = {
                names: share
                for *names_, share in here[[*CHOICES, "hidden_fraction"]].itertuples(index=False)
                if (names := tuple(names_))
            }
            changes: dict[str, list[dict[str, Any]]] = {}
            for place, kind in enumerate(CHOICES):
                mine = getattr(reference, kind)
                for law in self.combinations.choices[kind]:
                    if law == mine:
                        continue
                    moved = np.array(
                        [
                            share - shares[other]
                            for names, share in shares.items()
                            if names[place] == law
                            and (other := (*names[:place], mine, *names[place + 1 :])) in shares
                        ]
                    )
                    known = moved[np.isfinite(moved)]
                    if known.size:
                        changes.setdefault(kind, []).append(
                            {
                                "choice": kind,
                                "law": law,
                                "instead_of": mine,
                                "change": float(known.mean()),
                                "change_low": float(known.min()),
                                "change_high": float(known.max()),
                                "combinations": int(known.size),
                            }
                        )

            def most(kind: str, changes: Any = changes) -> float:
                return max(abs(float(one["change"])) for one in changes[kind])

            for rank, kind in enumerate(sorted(changes, key=most, reverse=True), start=1):
                for one in sorted(changes[kind], key=lambda row: -abs(row["change"])):
                    rows.append(
                        {"observation": observation, "threshold": threshold, "rank": rank, **one}
                    )
        columns = ["observation", "threshold", "rank", "choice", "law", "instead_of", "change",
                   "change_low", "change_high", "combinations"]  # fmt: skip
        return pd.DataFrame(rows, columns=columns)


def spread(
    table: Any,
    recipe: Recipe | None = None,
    *,
    choices: Mapping[str, Any] | None = None,
    draws: int = DRAWS,
    seed: int | None = None,
    progress: Callable[[int, int], None] | None = None,
    threads: int = 2,
    origin: str = "the table",
) -> SpreadResult:
    """Repeat a screening with every combination of laws and with drawn coefficients.

    Parameters
    ----------
    table : pandas.DataFrame or astropy.table.Table
        One row per black hole, as for `embersift.screen`.
    recipe : Recipe, optional
        Every other choice, what is counted included; the defaults without one.
    choices : mapping, optional
        Laws to compare, see `combinations`.
    draws : int
        Draws of the coefficients.
    seed : int, optional
        Of the draws; ``random.seed`` of the recipe by default.
    progress : callable, optional
        Called with steps done and steps in all.
    threads : int
        Threads to use; the result does not depend on it.
    origin : str
        File name, for messages.

    Returns
    -------
    SpreadResult

    Raises
    ------
    CatalogueError
        The table cannot be used.
    LawError
        A law is unknown, or cannot do what is asked of it.
    RecipeError
        Fewer than one draw, or choices that leave no combination.
    """
    from embersift.tables import units_of

    chosen = recipe or Recipe()
    plan = layout(column_names(table), units_of(table), chosen, origin)
    if len(table) == 0:
        raise CatalogueError(f"{origin}: the table has columns and no rows; nothing to screen.")
    suspicion(plan, table)
    sources = plan.take(table)
    by, values = values_of(plan, sources, table, chosen.tally.by)
    return spread_of_sources(
        sources,
        values,
        chosen,
        by=by,
        host=host_numbers(table, plan),
        weight=sources.weight if "weight" in plan.columns else None,
        choices=choices,
        draws=draws,
        seed=seed,
        progress=progress,
        threads=threads,
    )


def spread_of_sources(
    sources: Sources,
    values: Array,
    recipe: Recipe,
    *,
    by: str = "mstar",
    host: NDArray[np.uint64] | None = None,
    weight: Array | None = None,
    choices: Mapping[str, Any] | None = None,
    draws: int = DRAWS,
    seed: int | None = None,
    progress: Callable[[int, int], None] | None = None,
    threads: int = 2,
    chunk: int | None = None,
) -> SpreadResult:
    """`spread` of arrays.

    Parameters
    ----------
    sources : Sources
        The catalogue.
    values : array
        Quantity that is counted by, in the unit of the recipe's edges.
    by : str
        Its name.
    host : uint64 array, optional
        One number per galaxy, for holes that share an extraction circle.
    weight : array, optional
        Weight of each row.
    chunk : int
        Rows per step; counts do not depend on it.
    """
    if draws < 1:
        raise RecipeError(
            f"draws = {draws}: at least one draw of the coefficients is needed; {DRAWS} by default."
        )
    if recipe.screen.criterion not in ("agn", "total"):
        raise RecipeError(
            f"screen.criterion = {recipe.screen.criterion!r}: a spread compares the hidden "
            'fraction at thresholds; set it to "agn" or "total".'
        )
    seed = recipe.random.seed if seed is None else seed
    screen = _Screen(combinations(recipe, choices), draws, seed)
    edges = checked_edges(recipe.tally.edges)
    # only rows with a black hole are counted, and only those that accrete can differ
    usable = (sources.problems & UNUSABLE) == 0
    holes = np.flatnonzero(usable & (sources.mbh > 0.0))
    slot = slots(np.asarray(values, dtype=float), edges)
    accreting = holes[sources.mdot[holes] > 0.0]
    accreting = accreting[np.argsort(slot[accreting], kind="stable")]
    blending = screen.reference.blends_hosts and host is not None
    size = max(accreting.size, 1) if blending else chunk or CHUNK
    starts = range(0, accreting.size, size)
    steps = len(screen.index) + len(starts) * draws
    done = 0

    def step() -> None:
        nonlocal done
        done += 1
        if progress is not None:
            progress(done, steps)

    def central(one: Combination) -> pd.DataFrame:
        chain = Chain(one.recipe(recipe))
        result = chain.run(kept, host=kept_host, threads=1)
        counted = count(kept_values, result.fates, np.asarray(edges), by=by, weight=kept_weight)
        return _with_all(counted, recipe)

    kept, kept_values = _taken(sources, holes), np.asarray(values, dtype=float)[holes]
    kept_host = host[holes] if blending and host is not None else None
    kept_weight = None if weight is None else weight[holes]
    shape = (len(screen.views), len(screen.thresholds), len(edges) + 2)
    visible = np.zeros((draws, len(screen.index), *shape))
    lost = np.zeros((draws, len(screen.index), shape[0], shape[2]))
    tallies: list[pd.DataFrame] = []
    with _Workers(threads) as workers:
        for frame in workers.each(central, screen.plan.every):
            tallies.append(frame)
            step()
        for start in starts:
            part = accreting[start : start + size]
            rows = screen.rows(
                _taken(sources, part),
                host[part] if blending and host is not None else None,
                None if weight is None else weight[part],
                slot[part],
            )
            fixed = (screen.agn_sides(rows, None, False), *screen.host_lights(rows, None, False))

            def one_draw(i: int, rows: _Rows = rows, fixed: Any = fixed) -> tuple[Array, Array]:
                return screen.draw(rows, i, fixed, shape[2])

            for i, (seen, gone) in enumerate(workers.each(one_draw, range(draws))):
                visible[i] += seen
                lost[i] += gone
                step()
    base = np.bincount(slot[holes], weights=kept_weight, minlength=shape[2]).astype(float)
    return SpreadResult(
        combinations=screen.plan,
        drawn=_by_law(screen, drawn_coefficients),
        not_drawn=_by_law(screen, undrawn_coefficients),
        draws=draws,
        seed=seed,
        tallies=tuple(tallies),
        fractions=_fractions(screen, tallies, base, visible, lost),
    )


class _Workers:
    """Threads that keep the order of what they are given; the first error stops them all."""

    def __init__(self, threads: int) -> None:
        self._pool = ThreadPoolExecutor(threads) if threads > 1 else None

    def __enter__(self) -> _Workers:
        return self

    def __exit__(self, *_: object) -> None:
        if self._pool is not None:
            self._pool.shutdown(cancel_futures=True)

    def each(self, work: Callable[[Any], Any], items: Sequence[Any]) -> Iterator[Any]:
        return map(work, items) if self._pool is None else self._pool.map(work, items)


def _with_all(counted: Tally, recipe: Recipe) -> pd.DataFrame:
    """A tally as a table, with a bin ``all`` behind those of each observation and threshold."""
    import pandas as pd

    def table(tally: Tally) -> pd.DataFrame:
        frame = tally.table(interval=recipe.tally.interval, level=recipe.tally.level)
        frame.insert(0, "look", np.repeat(np.arange(len(tally.columns)), len(tally.edges) + 2))
        return frame

    def whole(numbers: Any) -> Any:
        # four slots as of one bin: the sum stands in the bin
        total = np.zeros((*numbers.shape[:2], 4, numbers.shape[3]), dtype=numbers.dtype)
        total[:, :, 1] = numbers.sum(axis=2)
        return total

    every = table(
        replace(
            counted,
            edges=(-np.inf, np.inf),
            rows=whole(counted.rows),
            weights=None if counted.weights is None else whole(counted.weights),
            squares=None if counted.squares is None else whole(counted.squares),
        )
    ).iloc[1::4]
    both = pd.concat([table(counted), every.assign(bin=ALL)], ignore_index=True)
    return both.sort_values("look", kind="stable", ignore_index=True).drop(columns="look")


def _fractions(
    screen: _Screen, tallies: Sequence[pd.DataFrame], base: Array, visible: Array, lost: Array
) -> Array:
    """Hidden fraction by draw, combination, look and bin, that of all behind the others."""
    holes = base - lost
    holes = np.concatenate([holes, holes.sum(axis=-1, keepdims=True)], axis=-1)[:, :, :, None]
    seen = np.concatenate([visible, visible.sum(axis=-1, keepdims=True)], axis=-1)
    hidden = np.maximum(holes - seen, 0.0)  # sums of weights may differ in their last digit
    shares: Array = np.divide(hidden, holes, out=np.full(seen.shape, np.nan), where=holes > 0.0)
    shares = shares.reshape(*shares.shape[:2], -1, shares.shape[-1])
    for at, varies in enumerate(screen.varies):
        if not varies:
            shares[:, at] = tallies[at]["hidden_fraction"].to_numpy().reshape(shares.shape[2:])
    return shares


def _by_law(screen: _Screen, which: Callable[..., tuple[str, ...]]) -> dict[str, tuple[str, ...]]:
    """Coefficients by ``kind name`` of a law, where there are any."""
    found = {
        f"{kind} {name}": which(law, band=band) for (kind, name), (law, band) in screen.laws.items()
    }
    return {law: names for law, names in found.items() if names}
