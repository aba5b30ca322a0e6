"""The keys of a recipe, section by section: default, what is accepted and what it means.

The starter recipe, ``docs/recipe.md`` and the checks of `recipe` are all made from here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from embersift.bands import HARD, Band
from embersift.recipe_values import (
    Accepts,
    band,
    choice,
    column_density,
    flag,
    list_of,
    name_or_number,
    name_text,
    number,
    optional,
    text,
    whole,
)

__all__ = [
    "SECTIONS",
    "AgnChoices",
    "BackgroundChoices",
    "CatalogueChoices",
    "ColumnChoice",
    "CosmologyChoices",
    "Observation",
    "OddsChoices",
    "ProposalChoices",
    "RandomChoices",
    "ScreenChoices",
    "SpreadChoices",
    "SurveyChoices",
    "TallyChoices",
]


def _key(default: Any, accepts: Accepts, meaning: str) -> Any:
    return field(default=default, metadata={"accepts": accepts, "meaning": meaning})


@dataclass(frozen=True)
class ColumnChoice:
    """Which column of the catalogue holds a quantity, and in which unit."""

    column: str
    unit: str = ""


@dataclass(frozen=True)
class CatalogueChoices:
    """What the catalogue's columns mean."""

    columns: Mapping[str, ColumnChoice] = field(default_factory=dict)
    imf: str = _key(
        "kroupa",
        choice("kroupa", "chabrier", "salpeter"),
        "initial mass function behind mstar and sfr",
    )
    rate: str = _key(
        "inflow",
        choice("inflow", "growth"),
        "what mdot is: mass flowing in, or growth of the hole (inflow less what is radiated)",
    )
    h: float | None = _key(
        None, optional(number(above=0.0, most=2.0)), "value of littleh in unit strings"
    )
    redshift: float | None = _key(
        None,
        optional(number(above=0.0, most=1000.0)),
        "one redshift for every row, instead of a column",
    )
    missing: tuple[float, ...] = _key(
        (), list_of(number()), "values that stand for a missing one, such as -99"
    )
    metallicity: str = _key(
        "zsun",
        choice("zsun", "mass_fraction"),
        "scale of a metallicity column: solar units by number, or metal mass fraction",
    )
    solar_oh12: float = _key(
        8.69, number(least=7.0, most=10.0), "12+log(O/H) of the Sun (8.69: Asplund et al. 2009)"
    )
    solar_mass_fraction: float | None = _key(
        None,
        optional(number(above=0.0, below=1.0)),
        "solar metal mass fraction behind a mass_fraction column (0.0134, 0.0142, 0.02 are in use)",
    )
    trusted: tuple[str, ...] = _key(
        (),
        list_of(text()),
        "quantities that are taken as they are although their values look wrong",
    )
    format: str | None = _key(
        None,
        optional(choice("csv", "ecsv", "fits", "votable", "parquet", "hdf5")),
        "file format, when the ending does not say it",
    )
    separator: str | None = _key(
        None, optional(text()), "separator of a text table, when it is not plain from the header"
    )
    table: str | int | None = _key(
        None,
        optional(name_or_number()),
        "which table of the file: FITS extension, HDF5 path, VOTable name",
    )


@dataclass(frozen=True)
class CosmologyChoices:
    """Flat universe of matter and a cosmological constant, no radiation."""

    h0: float = _key(70.0, number(least=20.0, most=200.0), "Hubble constant [km/s/Mpc]")
    om0: float = _key(0.3, number(least=0.0, most=1.0), "matter density parameter today")


@dataclass(frozen=True)
class AgnChoices:
    """From accretion rate to the black hole's X-rays."""

    accretion: str = _key("two-regime", text(), "accretion law (embersift laws)")
    efficiency: float = _key(
        0.1,
        number(above=0.0, below=1.0),
        "radiative efficiency of the disc; also turns growth into inflow",
    )
    spin: float = _key(0.0, number(least=-1.0, most=1.0), "black-hole spin for isco and madau2014")
    delta: float = _key(
        0.1, choice(0.5, 0.1, 0.001), "electron heating share of xie2012: 0.5, 0.1 or 0.001"
    )
    bolometric: str = _key("duras2020", text(), "bolometric correction (embersift laws)")
    k: float | None = _key(
        None,
        optional(number(least=1.0)),
        "L_bol / L(2-10 keV) for the bolometric law named constant",
    )
    anchor: str = _key(
        "hard",
        choice("hard", "soft"),
        "band the correction fixes: 2-10 keV, or 0.5-2 keV where the law has one",
    )
    gamma: float = _key(1.8, number(least=-1.0, most=5.0), "photon index of the black hole's light")
    nh: float = _key(
        0.0,
        column_density(),
        "intrinsic column [cm-2] of every black hole when there is no nh column",
    )
    nh_edges: tuple[float, ...] = _key(
        (),
        list_of(number(least=10.0, most=27.0)),
        "edges of bins in log10 NH [cm-2]: verdicts are averaged over these columns as odds",
    )
    nh_fractions: tuple[float, ...] = _key(
        (),
        list_of(number(least=0.0, most=1.0)),
        "share of the black holes in each bin of nh_edges; they sum to 1",
    )


@dataclass(frozen=True)
class BackgroundChoices:
    """The host's own X-rays."""

    hmxb: str = _key("lehmer2021", text(), "law of the high-mass binaries")
    lmxb: str = _key("lehmer2019", text(), "law of the low-mass binaries")
    gas: str = _key("mineo2012gas", text(), "law of the hot gas, or none")
    binaries: str | None = _key(
        None, optional(text()), "one law of both kinds of binaries, instead of hmxb and lmxb"
    )
    total: str | None = _key(
        None, optional(text()), "one law of all the host's light, instead of hmxb, lmxb and gas"
    )
    without_metallicity: str | None = _key(
        None,
        optional(text()),
        "law for rows without oh12 where the chosen one needs it "
        "(left out: lehmer2019, or mineo2014 for a total law)",
    )
    gamma: float = _key(1.8, number(least=-1.0, most=5.0), "photon index of the binaries")
    gas_kt: tuple[float, ...] = _key(
        (0.24, 0.71),
        list_of(number(above=0.01, most=20.0), length=2),
        "temperatures of the gas [keV], cooler first (Mineo et al. 2012b)",
    )
    gas_hot_share: float = _key(
        1.0 / 3.0,
        number(least=0.0, most=1.0),
        "share of the 0.5-2 keV gas light at the hotter temperature (common practice, no source)",
    )
    stellar_age: float | None = _key(
        None,
        optional(number(above=0.0, most=14.0)),
        "mean stellar age [Gyr], needed by fragos2013 as lmxb law",
    )


@dataclass(frozen=True)
class Observation:
    """One way of looking: a band, a flux limit, a Galactic column, an aperture."""

    name: str = _key("any", name_text(), "letters, digits, _ and -; becomes part of column names")
    band: Band = field(
        default=HARD,
        metadata={"accepts": band(), "meaning": "observed band [keV], as [low, high]"},
    )
    flux_limit: float = _key(0.0, number(least=0.0), "faintest flux that is detected [erg/s/cm2]")
    galactic_nh: float = _key(0.0, column_density(), "Galactic column [cm-2]")
    aperture: float | None = _key(
        None,
        optional(number(above=0.0)),
        "radius of the extraction circle [arcsec]; only the host's light inside it competes, "
        "where rhalf is known (left out: the whole galaxy)",
    )
    depth: str | None = _key(
        None,
        optional(text()),
        "a reference depth (embersift depths): gives the band and flux limit that are left out",
    )


@dataclass(frozen=True)
class ScreenChoices:
    """What a source must pass to be called visible."""

    thresholds: tuple[float, ...] = _key(
        (1.0, 2.0, 5.0),
        list_of(number(above=0.0)),
        "factors by which a source must stand above the background (common practice, no source)",
    )
    criterion: str = _key(
        "agn",
        choice("agn", "total"),
        "excess is agn / background, or (agn + background) / background",
    )
    flux_of: str = _key(
        "agn",
        choice("agn", "total"),
        "flux compared with the limit: the black hole's, or with the background",
    )
    floor: float = _key(
        1e39,
        number(least=0.0),
        "lowest intrinsic L(2-10 keV) [erg/s] that may be called an AGN "
        "(common practice, no source); 0 switches it off",
    )
    headline: float = _key(2.0, number(above=0.0), "threshold that the summary shows first")
    odds: bool = _key(
        False, flag(), "add the probability of being visible, given scatter (columns odds_NAME_T)"
    )


@dataclass(frozen=True)
class OddsChoices:
    """Scatter behind the odds; central values are taken as medians."""

    agn_scatter: float | None = _key(
        None,
        optional(number(least=0.0, most=3.0)),
        "scatter of the bolometric correction [dex] (left out: the law's own)",
    )
    background_scatter: float = _key(
        0.4,
        number(least=0.0, most=3.0),
        "galaxy-to-galaxy scatter of the background [dex] (0.3 to 0.5 are published)",
    )
    variability: float = _key(
        0.0,
        number(least=0.0, most=3.0),
        "scatter of the black hole's flux in time [dex] (0.2 to 0.3 in dwarfs, from memory)",
    )


@dataclass(frozen=True)
class TallyChoices:
    """How verdicts are counted."""

    by: str = _key("mstar", text(), "column whose bins are counted")
    edges: tuple[float, ...] = _key(
        (7.0, 8.0, 8.5, 9.0, 9.5, 10.0, 11.0, 12.0),
        list_of(number()),
        "bin edges; log10 for masses (mstar, mbh)",
    )
    central_within: float = _key(
        1.0,
        number(least=0.0),
        "offset [kpc] up to which a hole is central, for --split (common practice, no source)",
    )
    interval: str = _key("wilson", choice("wilson", "jeffreys"), "binomial interval of fractions")
    level: float = _key(
        0.6826894921370859,
        number(above=0.0, below=1.0),
        "probability inside the interval (1 sigma)",
    )


@dataclass(frozen=True)
class ProposalChoices:
    """What a proposal assumes: exposures, targets, counts (embersift reach)."""

    exposure: float | None = _key(
        None,
        optional(number(above=0.0)),
        "exposure [ks] that the flux limits belong to",
    )
    scaling: str = _key(
        "background",
        choice("background", "photon"),
        "how limits fall with exposure: as its square root, or in proportion",
    )
    wanted: float | None = _key(
        None, optional(number(above=0.0)), "Eddington ratio whose exposure is asked for"
    )
    mbh: tuple[float, ...] = _key(
        (),
        list_of(number(above=0.0)),
        "black-hole masses [Msun] to try where the catalogue has none; one fills the gaps",
    )
    eddington: tuple[float, ...] = _key(
        (), list_of(number(above=0.0)), "Eddington ratios whose lightest visible hole is asked for"
    )
    distribution: str = _key(
        "log-uniform(1e-5, 1)",
        text(),
        "assumed Eddington ratios: log-uniform(low, high), log-normal(median, dex) or "
        "power-law(slope, low, high)",
    )
    effective_area: str | None = _key(
        None, optional(text()), "effective area file, OGIP SPECRESP layout"
    )
    counts_per_flux: float | None = _key(
        None,
        optional(number(above=0.0)),
        "counts per (erg/cm2), instead of an effective area",
    )
    background_rate: float = _key(
        0.0, number(least=0.0), "sky and instrument background [counts/s/arcsec2]"
    )
    area_ratio: float = _key(
        20.0, number(above=0.0), "area that the background is taken from, over the circle's"
    )
    probability: float = _key(
        0.007,
        number(above=0.0, below=1.0),
        "no-source probability that counts as a detection (0.007: Luo et al. 2017)",
    )


@dataclass(frozen=True)
class SurveyChoices:
    """What a survey covers, for expected numbers on the sky (embersift yield)."""

    area: float | None = _key(None, optional(number(above=0.0)), "area [deg2]")
    redshifts: tuple[float, ...] | None = _key(
        None, optional(list_of(number(least=0.0), length=2)), "redshift range, [low, high]"
    )
    box: float | None = _key(
        None,
        optional(number(above=0.0)),
        "side of the cube that the catalogue fills [comoving Mpc], when it has no volume column",
    )


@dataclass(frozen=True)
class SpreadChoices:
    """Laws that `embersift spread` combines; a list left out is the default set."""

    accretion: tuple[str, ...] | None = _key(
        None, optional(list_of(text())), "accretion laws to combine"
    )
    bolometric: tuple[str, ...] | None = _key(
        None, optional(list_of(text())), "bolometric corrections to combine"
    )
    binaries: tuple[str, ...] | None = _key(
        None,
        optional(list_of(text())),
        'laws of the binaries to combine, each "LAW" or "HMXB+LMXB"',
    )
    gas: tuple[str, ...] | None = _key(None, optional(list_of(text())), "gas laws to combine")
    draws: int = _key(200, whole(least=1), "draws of the coefficients from their published errors")


@dataclass(frozen=True)
class RandomChoices:
    """Random draws, where a command makes any."""

    seed: int = _key(1, whole(least=0), "seed of every random draw")


SECTIONS: Mapping[str, type] = {
    "catalogue": CatalogueChoices,
    "cosmology": CosmologyChoices,
    "agn": AgnChoices,
    "background": BackgroundChoices,
    "screen": ScreenChoices,
    "odds": OddsChoices,
    "tally": TallyChoices,
    "proposal": ProposalChoices,
    "survey": SurveyChoices,
    "spread": SpreadChoices,
    "random": RandomChoices,
}
