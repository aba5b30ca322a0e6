"""The chain itself: one block of sources in, luminosities, fluxes and verdicts out.

Pure: no files, no printing, no random numbers. The same object serves a table in memory, a
streamed file and a worker on a cluster; each row's result depends on that row alone, so neither
the block size nor the number of threads can change it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from embersift.arrays import Array, Mask
from embersift.bands import HARD, SOFT
from embersift.catalogue import Sources
from embersift.columns import fate_column, odds_column
from embersift.constants import EDDINGTON_PER_MSUN, MPC, RATE_TO_LUMINOSITY
from embersift.errors import LawError
from embersift.host import Background, HostLight
from embersift.interpolation import UniformCubic
from embersift.laws import accretion_law, bolometric_law
from embersift.laws.accretion import isco_efficiency
from embersift.laws.conversions import inflow_from_growth
from embersift.laws.declaration import Coefficients, Disc, Law
from embersift.obscuration import NhTable, average_over_nh
from embersift.odds import Scatter, odds
from embersift.problems import UNUSABLE, Bits
from embersift.recipe import Observation, Recipe
from embersift.sky.absorption import power_law_transmission
from embersift.sky.aperture import circle_radius_kpc, disc_share, rhalf_to_scale
from embersift.sky.blending import blends
from embersift.sky.spectrum import GasSpectrum, power_law_ratio
from embersift.verdict import judge_thresholds

__all__ = ["CHUNK", "Chain", "Fluxes", "Luminosities", "Screened"]

CHUNK = 65536
"""Rows per step: with fewer, two threads spend their time handing over the interpreter lock."""


class Luminosities(NamedTuple):
    """Intrinsic light of a block at rest, 2-10 keV unless said otherwise [erg/s]."""

    lbol: Array
    eddington_ratio: Array
    lx_agn: Array
    lx_hmxb: Array
    lx_lmxb: Array
    lx_gas: Array
    lx_background: Array
    excess: Array


class Fluxes(NamedTuple):
    """What one observation receives [erg/s/cm2]."""

    agn: Array
    background: Array
    excess: Array


class Screened(NamedTuple):
    """Everything a block gives back; arrays of the block's length.

    `stretched` has bit i set where ``Chain.laws[i]`` was used outside its range.
    """

    luminosities: Luminosities
    fluxes: Mapping[str, Fluxes]
    fates: Mapping[str, NDArray[np.int8]]
    odds: Mapping[str, Array]  # by column name; empty when they were not asked for
    stretched: NDArray[np.uint8]
    problems: Bits


@dataclass(frozen=True)
class View:
    """One observation, with everything that does not depend on the row worked out."""

    observation: Observation
    agn_share: float  # L(observed band) / L(2-10 keV) of the black hole's power law, at rest
    binaries_share: float
    binaries_passed: float  # what the Galactic column leaves of the binaries' power law
    agn_passed: float
    gas_log_share: UniformCubic | None


def circle_radius(sources: Sources, aperture: float) -> Array:
    """Radius [kpc] of an extraction circle of `aperture` arcsec around each hole."""
    return circle_radius_kpc(aperture, sources.distance / (1.0 + sources.z) ** 2)


def share_in_circle(sources: Sources, aperture: float) -> Array:
    """Share of the host's light in the extraction circle; 1 where the size is not known.

    Binaries and gas are spread alike, as an exponential disc seen face on. A hole without an
    offset is taken to sit in the centre, where most of the light is.
    """
    scale = rhalf_to_scale(sources.rhalf)
    offset = np.where(np.isnan(sources.offset), 0.0, sources.offset)
    share = disc_share(circle_radius(sources, aperture) / scale, offset / scale)
    return np.where(np.isnan(sources.rhalf), 1.0, share)


class Chain:
    """A recipe made ready to run.

    Parameters
    ----------
    recipe : Recipe
        Every choice of the run.

    Raises
    ------
    LawError
        A law is unknown, lacks what the recipe asks of it, or is counted twice.

    Attributes
    ----------
    laws : tuple of Law
        The laws in use, in the order of the chain; bit i of `Screened.stretched` is law i.
    """

    def __init__(self, recipe: Recipe) -> None:
        self.recipe = recipe
        agn = recipe.agn
        self.accretion_law = accretion_law(agn.accretion)
        self.disc = Disc(efficiency=agn.efficiency, spin=agn.spin, delta=agn.delta)
        # fail before the first row when the spin or the heating share does not exist
        self.accretion_law.eddington_ratio(np.array([1.0]), self.disc)
        self.bolometric_law = bolometric_law(agn.bolometric)
        self.correction = self._correction_values()
        self._anchor = 1.0 if agn.anchor == "hard" else power_law_ratio(agn.gamma, HARD, SOFT)
        self.growth_efficiency = (
            isco_efficiency(agn.spin) if agn.accretion == "isco" else agn.efficiency
        )
        self._background = Background(recipe)
        self.nh_table = NhTable(agn.nh_edges, agn.nh_fractions) if agn.nh_edges else None
        self.scatter = self._scatter()
        self.laws: tuple[Law, ...] = (
            self.accretion_law,
            self.bolometric_law,
            *self._background.laws,
        )
        assert len(self.laws) <= 8  # one bit each
        # by kind and name: accretion and bolometric laws share the name constant
        self._bits = {(law.kind, law.name): np.uint8(1 << i) for i, law in enumerate(self.laws)}
        self._gas = GasSpectrum(
            (recipe.background.gas_kt[0], recipe.background.gas_kt[1]),
            recipe.background.gas_hot_share,
        )
        self.views = tuple(self._view(o) for o in recipe.observation)

    def _correction_values(self) -> Coefficients:
        agn = self.recipe.agn
        if agn.bolometric == "constant":
            if agn.k is None:
                raise LawError(
                    "agn.bolometric = 'constant' needs agn.k = L_bol / L(2-10 keV); "
                    "8 to 50 are in use for faint nuclei (embersift laws lopez2024)."
                )
            return {"k": agn.k}
        return (
            self.bolometric_law.values if agn.anchor == "hard" else self.bolometric_law.soft_values
        )

    def _scatter(self) -> Scatter:
        """The scatters of the odds; none at all when only columns are averaged over."""
        choices = self.recipe.odds
        if not self.recipe.screen.odds:
            return Scatter()
        law = self.bolometric_law
        agn = choices.agn_scatter
        if agn is None:
            agn = law.scatter_dex if self.recipe.agn.anchor == "hard" else law.soft_scatter_dex
        if agn is None:
            raise LawError(
                f"{law.name} has no published scatter, which odds need. "
                "Set odds.agn_scatter in dex; 0.3 to 0.4 is prudent in dwarfs."
            )
        return Scatter(agn, choices.background_scatter, choices.variability)

    def _view(self, observation: Observation) -> View:
        agn, binaries = self.recipe.agn.gamma, self.recipe.background.gamma
        band, column = observation.band, observation.galactic_nh
        none = np.zeros(1)
        return View(
            observation=observation,
            agn_share=power_law_ratio(agn, band, HARD),
            binaries_share=power_law_ratio(binaries, band, HARD),
            binaries_passed=float(power_law_transmission(binaries, band, column, none, none)[0]),
            agn_passed=float(power_law_transmission(agn, band, column, none, none)[0]),
            gas_log_share=(
                self._gas.observed_share(band, column) if self._background.has_gas else None
            ),
        )

    @cached_property
    def stretched_words(self) -> tuple[str, ...]:
        """Law names by bit of `Screened.stretched`."""
        return tuple(law.name for law in self.laws)

    def stretched_text(self, bits: int) -> str:
        """The text of the column `stretched` for one row's bits."""
        return "|".join(word for i, word in enumerate(self.stretched_words) if bits >> i & 1)

    @property
    def fate_columns(self) -> tuple[str, ...]:
        return tuple(
            fate_column(o.name, t)
            for o in self.recipe.observation
            for t in self.recipe.screen.thresholds
        )

    # --- one step of the chain each ---------------------------------------------------------

    def accretion(self, sources: Sources) -> tuple[Array, Array, Array]:
        """Bolometric luminosity [erg/s], Eddington ratio, and inflow in units of L_Edd/c2."""
        mdot = sources.mdot
        if self.recipe.catalogue.rate == "growth":
            mdot = inflow_from_growth(mdot, self.growth_efficiency)
        eddington = sources.mbh * EDDINGTON_PER_MSUN
        with np.errstate(divide="ignore", invalid="ignore"):
            rate = mdot * RATE_TO_LUMINOSITY
            rate /= eddington
            fed_nothing = np.isinf(rate)  # a rate, and no hole to take it in
            if fed_nothing.any():
                rate[fed_nothing] = np.nan
            ratio = self.accretion_law.eddington_ratio(rate, self.disc)
        return ratio * eddington, ratio, rate

    def agn_light(self, lbol: Array, ratio: Array, mbh: Array) -> Array:
        """Intrinsic L(2-10 keV) of the black hole [erg/s]."""
        with np.errstate(divide="ignore", invalid="ignore"):
            # log and pow are several times slower on zeros and NaN, which a catalogue is full of;
            # 1 erg/s in their place changes no k, and lx is 0 or NaN all the same
            shining = np.fmax(lbol, 1.0)
            k = self.bolometric_law.formula(shining, ratio, mbh, self.correction)
            lx = lbol / k
        return lx if self._anchor == 1.0 else lx * self._anchor

    def host_light(self, sources: Sources) -> HostLight:
        """The host's own L(2-10 keV), by part [erg/s]."""
        return self._background.light(sources)

    def fluxes(
        self, view: View, sources: Sources, lx_agn: Array, host: HostLight, u: Array, area: Array
    ) -> Fluxes:
        """What one observation receives of the black hole and of its host."""
        agn_gamma, gamma = self.recipe.agn.gamma, self.recipe.background.gamma
        shift = np.exp((2.0 - agn_gamma) * u)
        agn = lx_agn * view.agn_share
        agn *= shift
        clear = sources.nh == 0.0
        if not clear.all():
            # a column that is not known must not look like none
            hidden = ~clear
            passed = np.full(u.shape, view.agn_passed)
            passed[hidden] = power_law_transmission(
                agn_gamma,
                view.observation.band,
                view.observation.galactic_nh,
                sources.nh[hidden],
                sources.z[hidden],
            )
            agn *= passed
        elif view.agn_passed != 1.0:
            agn *= view.agn_passed
        inverse = 1.0 / area
        agn *= inverse
        background = host.point_like * (view.binaries_share * view.binaries_passed)
        background *= shift if gamma == agn_gamma else np.exp((2.0 - gamma) * u)
        if view.gas_log_share is not None:
            background += host.gas_soft * np.exp(view.gas_log_share(u))
        background *= inverse
        if view.observation.aperture is not None:
            background *= share_in_circle(sources, view.observation.aperture)
        with np.errstate(divide="ignore", invalid="ignore"):
            excess = agn / background
        dark = background == 0.0
        if dark.any():
            excess[dark & (agn == 0.0)] = 0.0
        if self.recipe.screen.criterion == "total":
            excess += 1.0
        return Fluxes(agn, background, excess)

    def observe(self, view: View, sources: Sources, lx_agn: Array) -> Fluxes:
        """What one observation would receive if the holes shone with `lx_agn`."""
        u = np.log1p(sources.z)
        area = 4.0 * np.pi * (sources.distance * MPC) ** 2
        return self.fluxes(view, sources, lx_agn, self.host_light(sources), u, area)

    def stretched(
        self, sources: Sources, lbol: Array, ratio: Array, rate: Array
    ) -> NDArray[np.uint8]:
        """Which laws were used outside their calibrated ranges, as bits."""
        marks = np.zeros(lbol.shape, dtype=np.uint8)
        accreting = lbol > 0.0
        spans = {
            "lbol": lbol,
            "eddington_ratio": ratio,
            "mbh": sources.mbh,
            "mdot": rate,
            "spin": np.asarray(self.disc.spin),
        }
        with np.errstate(invalid="ignore"):
            for law in (self.accretion_law, self.bolometric_law):
                mark = law.stretched(**spans) & accreting
                marks |= mark.view(np.uint8) * self._bits[law.kind, law.name]
            for host_law, mark in self._background.stretched(sources):
                marks |= mark.view(np.uint8) * self._bits[host_law.kind, host_law.name]
        return marks

    # --- whole blocks -----------------------------------------------------------------------

    def run_block(self, sources: Sources) -> Screened:
        """The whole chain on one block, in one step."""
        lbol, ratio, rate = self.accretion(sources)
        lx_agn = self.agn_light(lbol, ratio, sources.mbh)
        host = self.host_light(sources)
        with np.errstate(divide="ignore", invalid="ignore"):
            excess = lx_agn / host.background
        usable = (sources.problems & UNUSABLE) == 0
        has_hole = sources.mbh > 0.0
        accreting = sources.mdot > 0.0
        u = np.log1p(sources.z)
        area = sources.distance * MPC
        area *= area
        area *= 4.0 * np.pi
        fluxes: dict[str, Fluxes] = {}
        fates: dict[str, NDArray[np.int8]] = {}
        chances: dict[str, Array] = {}
        screen = self.recipe.screen
        for view in self.views:
            seen = self.fluxes(view, sources, lx_agn, host, u, area)
            name = view.observation.name
            fluxes[name] = seen
            verdicts = judge_thresholds(
                usable=usable,
                has_hole=has_hole,
                accreting=accreting,
                flux_counted=seen.agn if screen.flux_of == "agn" else seen.agn + seen.background,
                flux_limit=view.observation.flux_limit,
                lx_agn=lx_agn,
                floor=screen.floor,
                excess=seen.excess,
                thresholds=screen.thresholds,
            )
            for threshold, codes in zip(screen.thresholds, verdicts, strict=True):
                fates[fate_column(name, threshold)] = codes
            if self.with_odds:
                masks = usable, has_hole & accreting
                found = self._odds(view, sources, seen, lx_agn, host, u, area, masks)
                chances |= {
                    odds_column(fate_column(name, t)): one
                    for t, one in zip(screen.thresholds, found, strict=True)
                }
        return Screened(
            luminosities=Luminosities(
                lbol, ratio, lx_agn, host.hmxb, host.lmxb, host.gas, host.background, excess
            ),
            fluxes=fluxes,
            fates=fates,
            odds=chances,
            stretched=self.stretched(sources, lbol, ratio, rate),
            problems=sources.problems,
        )

    @property
    def with_odds(self) -> bool:
        """Whether odds were asked for, or are needed to average over columns."""
        return self.recipe.screen.odds or self.nh_table is not None

    def _odds(
        self,
        view: View,
        sources: Sources,
        seen: Fluxes,
        lx_agn: Array,
        host: HostLight,
        u: Array,
        area: Array,
        masks: tuple[Mask, Mask],
    ) -> list[Array]:
        """Probability of being visible at each threshold, averaged over the table of columns."""
        screen = self.recipe.screen
        usable, active = masks

        def at_thresholds(fluxes: Fluxes) -> Array:
            return np.stack(
                [
                    odds(
                        flux_agn=fluxes.agn,
                        flux_background=fluxes.background,
                        lx_agn=lx_agn,
                        flux_limit=view.observation.flux_limit,
                        floor=screen.floor,
                        threshold=threshold,
                        scatter=self.scatter,
                        criterion="total" if screen.criterion == "total" else "agn",
                        flux_of="total" if screen.flux_of == "total" else "agn",
                        usable=usable,
                        active=active,
                    )
                    for threshold in screen.thresholds
                ]
            )

        if self.nh_table is None:
            return list(at_thresholds(seen))

        def behind(nh: float) -> Array:
            column = sources._replace(nh=np.full(u.shape, nh))
            return at_thresholds(self.fluxes(view, column, lx_agn, host, u, area))

        # without scatter a verdict is a step in NH, which few nodes would miss
        nodes = 16 if self.scatter.excess > 0.0 else 48
        return list(average_over_nh(behind, self.nh_table, nodes))

    @property
    def blends_hosts(self) -> bool:
        """Whether holes of one galaxy can fall into one circle, so that hosts matter."""
        return any(view.observation.aperture is not None for view in self.views)

    def run(
        self,
        sources: Sources,
        *,
        host: NDArray[np.uint64] | None = None,
        threads: int = 2,
        chunk: int = CHUNK,
    ) -> Screened:
        """The whole chain on a table of any length, in chunks that fit the cache.

        Parameters
        ----------
        sources : Sources
            Arrays of one length.
        host : uint64 array, optional
            One number per galaxy; holes of one galaxy in one extraction circle are blended.
        threads : int
            Threads that share the chunks; the result is the same for any number.
        chunk : int
            Rows per chunk; the result is the same for any number.
        """
        rows = sources.mstar.size
        result = self._empty(rows)

        def step(part: slice) -> None:
            _store(self.run_block(sources.rows(part)), result, part)

        each_chunk(rows, chunk, threads, step)
        if host is not None:
            self.blend(sources, host, result)
        return result

    def run_catalogue(
        self,
        rows: int,
        block: Callable[[slice], Sources],
        *,
        keep_sources: bool = True,
        threads: int = 2,
        chunk: int = CHUNK,
    ) -> tuple[Sources | None, Screened]:
        """`run` for a table that is turned into sources chunk by chunk, while it is in the cache.

        Parameters
        ----------
        rows : int
            Rows of the table.
        block : callable
            Gives the sources of a slice of rows.
        keep_sources : bool
            Whether the sources are wanted back; writing them costs as much as half the chain.
        """
        result = self._empty(rows)
        if not keep_sources:
            each_chunk(
                rows,
                chunk,
                threads,
                lambda part: _store(self.run_block(block(part)), result, part),
            )
            return None, result
        numbers = [np.empty(rows) for _ in Sources._fields[:-1]]
        named = dict(zip(Sources._fields[:-1], numbers, strict=True))
        sources = Sources(**named, problems=result.problems)

        def step(part: slice) -> None:
            taken = block(part)
            for values, target in zip(taken[:-1], numbers, strict=True):
                target[part] = values
            _store(self.run_block(taken), result, part)

        each_chunk(rows, chunk, threads, step)
        return sources, result

    def blend(self, sources: Sources, host: NDArray[np.uint64], result: Screened) -> None:
        """Judge anew, in place, the holes of one galaxy that share an extraction circle."""
        for view in self.views:
            if view.observation.aperture is not None:
                self._blend(view, view.observation.aperture, sources, host, result)

    def _blend(
        self,
        view: View,
        aperture: float,
        sources: Sources,
        host: NDArray[np.uint64],
        result: Screened,
    ) -> None:
        """Judge again the rows that share a circle: their summed light meets the limit."""
        name = view.observation.name
        seen = result.fluxes[name]
        shining = (sources.problems & UNUSABLE) == 0
        shining &= (sources.mbh > 0.0) & (sources.mdot > 0.0)
        found = blends(host, sources.offset, circle_radius(sources, aperture), seen.agn, shining)
        rows = np.flatnonzero(found.fainter | (found.summed != seen.agn) & shining)
        if not rows.size:
            return
        screen = self.recipe.screen
        counted = found.summed[rows]
        if screen.flux_of == "total":
            counted = counted + seen.background[rows]
        every = np.ones(rows.size, dtype=bool)
        verdicts = judge_thresholds(
            usable=every,
            has_hole=every,
            accreting=every,
            flux_counted=counted,
            flux_limit=view.observation.flux_limit,
            lx_agn=result.luminosities.lx_agn[rows],
            floor=screen.floor,
            excess=seen.excess[rows],
            thresholds=screen.thresholds,
            blended=found.fainter[rows],
        )
        for threshold, codes in zip(screen.thresholds, verdicts, strict=True):
            fate = fate_column(name, threshold)
            result.fates[fate][rows] = codes
            if self.with_odds:
                result.odds[odds_column(fate)][rows[found.fainter[rows]]] = 0.0

    def _empty(self, rows: int) -> Screened:
        return Screened(
            luminosities=Luminosities(*(np.empty(rows) for _ in Luminosities._fields)),
            fluxes={
                o.name: Fluxes(*(np.empty(rows) for _ in Fluxes._fields))
                for o in self.recipe.observation
            },
            fates={name: np.empty(rows, dtype=np.int8) for name in self.fate_columns},
            odds={odds_column(name): np.empty(rows) for name in self.fate_columns}
            if self.with_odds
            else {},
            stretched=np.empty(rows, dtype=np.uint8),
            problems=np.empty(rows, dtype=np.uint64),
        )


def each_chunk(rows: int, chunk: int, threads: int, step: Callable[[slice], None]) -> None:
    """Do a step for every chunk of rows, in threads; the first error is raised."""
    parts = [slice(start, min(start + chunk, rows)) for start in range(0, rows, chunk)]
    if threads < 2 or len(parts) < 2:
        for part in parts:
            step(part)
        return
    with ThreadPoolExecutor(threads) as pool:
        for _ in pool.map(step, parts):
            pass


def _arrays(screened: Screened) -> Iterator[NDArray[np.generic]]:
    yield from screened.luminosities
    for seen in screened.fluxes.values():
        yield from seen
    yield from screened.fates.values()
    yield from screened.odds.values()
    yield screened.stretched
    yield screened.problems


def _store(block: Screened, result: Screened, part: slice) -> None:
    for source, target in zip(_arrays(block), _arrays(result), strict=True):
        target[part] = source
