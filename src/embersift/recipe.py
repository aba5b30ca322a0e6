"""The recipe: every choice of a run, declared once, read once, frozen.

A key is one field of one of the classes below: its default, what it accepts and what it means
stand together, and the starter recipe, ``docs/recipe.md`` and the checks are all made from here.
"""

from __future__ import annotations

import itertools
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import MISSING, Field, dataclass, field, fields, replace
from pathlib import Path
from typing import Any

from embersift.bands import HARD, Band
from embersift.errors import RecipeError, did_you_mean
from embersift.recipe_values import (
    Accepts,
    band,
    choice,
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
    "Recipe",
    "ScreenChoices",
    "SurveyChoices",
    "TallyChoices",
    "accepted_keys",
    "read_observation",
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
        None, optional(number(above=0.0)), "one redshift for every row, instead of a column"
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
        number(least=0.0, most=1e27),
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
    galactic_nh: float = _key(0.0, number(least=0.0, most=1e25), "Galactic column [cm-2]")
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
    "random": RandomChoices,
}


@dataclass(frozen=True)
class Recipe:
    """Every choice of a run.

    ``Recipe()`` holds the defaults; `from_toml` reads a file; `with_settings` changes keys.

    Raises
    ------
    RecipeError
        From every constructor: an unknown key (with the nearest known one), a wrong type, a value
        out of range, two observations of one name.

    Examples
    --------
    >>> Recipe().screen.thresholds
    (1.0, 2.0, 5.0)
    >>> Recipe().with_settings({"screen.floor": 0}).screen.floor
    0.0
    """

    catalogue: CatalogueChoices = field(default_factory=CatalogueChoices)
    cosmology: CosmologyChoices = field(default_factory=CosmologyChoices)
    agn: AgnChoices = field(default_factory=AgnChoices)
    background: BackgroundChoices = field(default_factory=BackgroundChoices)
    observation: tuple[Observation, ...] = (Observation(),)
    screen: ScreenChoices = field(default_factory=ScreenChoices)
    odds: OddsChoices = field(default_factory=OddsChoices)
    tally: TallyChoices = field(default_factory=TallyChoices)
    proposal: ProposalChoices = field(default_factory=ProposalChoices)
    survey: SurveyChoices = field(default_factory=SurveyChoices)
    random: RandomChoices = field(default_factory=RandomChoices)
    law: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)

    @classmethod
    def from_toml(cls, path: str | Path) -> Recipe:
        """Read a recipe file (UTF-8 TOML)."""
        path = Path(path)
        try:
            raw = path.read_bytes()
        except OSError as error:
            raise RecipeError(f"Recipe {path}: cannot be read ({error.strerror}).") from None
        try:
            content = tomllib.loads(raw.decode("utf-8-sig"))
        except (UnicodeDecodeError, tomllib.TOMLDecodeError, RecursionError) as error:
            reason = "nested too deeply" if isinstance(error, RecursionError) else str(error)
            raise RecipeError(
                f"Recipe {path}: not valid TOML: {reason}. "
                "`embersift recipe` writes one to start from."
            ) from None
        try:
            return cls.from_dict(content)
        except RecipeError as error:
            raise type(error)(f"Recipe {path}: {error}") from None

    @classmethod
    def from_dict(cls, content: Mapping[str, Any]) -> Recipe:
        """Build a recipe from nested mappings, as `tomllib` returns them."""
        parts: dict[str, Any] = {}
        for section, value in content.items():
            if section == "observation":
                parts[section] = _observations(value)
            elif section == "law":
                parts[section] = _law_sections(value)
            elif section in SECTIONS:
                parts[section] = _read_section(section, value)
            else:
                known = [*SECTIONS, "observation", "law"]
                raise RecipeError(
                    f"there is no section [{section}]. {did_you_mean(section, known)}"
                )
        recipe = cls(**parts)
        _check_background(recipe.background, content.get("background", {}))
        return recipe.checked("headline" in content.get("screen", {}))

    def checked(self, headline_given: bool = True) -> Recipe:
        """Check what involves several keys; returns the recipe with the headline settled."""
        if not self.observation:
            raise RecipeError("[[observation]]: at least one is needed, or leave the section out.")
        names = [o.name for o in self.observation]
        for name in names:
            if names.count(name) > 1:
                raise RecipeError(
                    f"[[observation]]: two observations are named {name!r}; output columns carry "
                    "the name, so give each its own."
                )
        thresholds = self.screen.thresholds
        if not thresholds:
            raise RecipeError("screen.thresholds: at least one threshold is needed.")
        if len({format(t, ".10g") for t in thresholds}) < len(thresholds):
            raise RecipeError(
                "screen.thresholds: the same threshold stands twice (or two differ by less than "
                "the ten digits that a column name shows)."
            )
        if self.agn.nh_edges or self.agn.nh_fractions:
            from embersift.obscuration import NhTable

            NhTable(self.agn.nh_edges, self.agn.nh_fractions)
        edges = self.tally.edges
        if len(edges) < 2 or any(b <= a for a, b in itertools.pairwise(edges)):
            raise RecipeError("tally.edges: at least two values are needed, each above the last.")
        if self.screen.headline not in thresholds:
            if headline_given:
                raise RecipeError(
                    f"screen.headline = {self.screen.headline:g} is not among screen.thresholds "
                    f"({', '.join(format(t, 'g') for t in thresholds)})."
                )
            return replace(self, screen=replace(self.screen, headline=thresholds[0]))
        return self

    def with_settings(self, settings: Mapping[str, Any]) -> Recipe:
        """Return a recipe in which some keys are changed.

        Parameters
        ----------
        settings : mapping
            ``"section.key"`` to value, as in ``{"agn.accretion": "constant"}``; for a column,
            ``"catalogue.columns.mstar"`` to a name or ``{"column": ..., "unit": ...}``.
        """
        content = self.as_dict(defaults=False)
        for dotted, value in settings.items():
            parts = dotted.split(".")
            if len(parts) < 2 or parts[0] not in {*SECTIONS, "law"}:
                raise RecipeError(
                    f"{dotted!r} is not a key of the recipe; write section.key, with a section "
                    f"out of {', '.join(SECTIONS)}."
                )
            inner = content
            for part in parts[:-1]:
                inner = inner.setdefault(part, {})
                if not isinstance(inner, dict):
                    raise RecipeError(f"{dotted!r} is not a key of the recipe.")
            inner[parts[-1]] = value
        return Recipe.from_dict(content)

    def with_observations(self, observations: Sequence[Observation]) -> Recipe:
        """Return a recipe with these observations added; one of a known name replaces it."""
        given = () if self.observation == (Observation(),) else self.observation
        merged = {o.name: o for o in given} | {o.name: o for o in observations}
        if len({o.name for o in observations}) < len(observations):
            raise RecipeError("two observations of one name were given; give each its own name.")
        return replace(self, observation=tuple(merged.values())).checked()

    def as_dict(self, *, defaults: bool = True) -> dict[str, Any]:
        """The recipe as nested dictionaries ready for TOML; keys that are unset are left out."""
        content: dict[str, Any] = {}
        for section, kind in SECTIONS.items():
            value = _section_dict(getattr(self, section), kind, defaults)
            if section == "background":
                value = _without_replaced(value)
            if value:
                content[section] = value
        if defaults or self.observation != (Observation(),):
            content["observation"] = [_section_dict(o, Observation, True) for o in self.observation]
        if self.law:
            content["law"] = {name: dict(value) for name, value in self.law.items()}
        return content


def _section_dict(section: Any, kind: type, defaults: bool) -> dict[str, Any]:
    content: dict[str, Any] = {}
    for key in fields(kind):
        value = getattr(section, key.name)
        if key.name == "columns":
            if value:
                content["columns"] = {
                    name: {"column": c.column} | ({"unit": c.unit} if c.unit else {})
                    for name, c in value.items()
                }
        elif value is not None and (defaults or value != key.default):
            content[key.name] = list(value) if isinstance(value, tuple) else value
    return content


def _without_replaced(background: dict[str, Any]) -> dict[str, Any]:
    """Leave out the laws that `binaries` or `total` replaces, so that the text reads back."""
    replaced = (
        ("hmxb", "lmxb", "binaries", "gas")
        if "total" in background
        else ("hmxb", "lmxb")
        if "binaries" in background
        else ()
    )
    return {name: value for name, value in background.items() if name not in replaced}


def accepted_keys(kind: type) -> dict[str, Field[Any]]:
    """The keys of one section by name, columns apart."""
    return {key.name: key for key in fields(kind) if "accepts" in key.metadata}


def _read_section(name: str, value: Any, kind: type | None = None) -> Any:
    kind = kind or SECTIONS[name]
    if not isinstance(value, Mapping):
        raise RecipeError(f"[{name}] must be a section with keys, not {value!r}.")
    known = accepted_keys(kind)
    parts: dict[str, Any] = {}
    for key, given in value.items():
        if key == "columns" and name == "catalogue":
            parts["columns"] = _columns(given)
        elif key in known:
            accepts: Accepts = known[key].metadata["accepts"]
            parts[key] = accepts.read(f"{name}.{key}", given)
        else:
            words = [*known, "columns"] if name == "catalogue" else list(known)
            raise RecipeError(f"{name}.{key} is not a key. {did_you_mean(key, words)}")
    return kind(**parts)


def _columns(value: Any) -> Mapping[str, ColumnChoice]:
    from embersift.columns import INPUT

    if not isinstance(value, Mapping):
        raise RecipeError("[catalogue.columns] must be a section: quantity = column name.")
    chosen: dict[str, ColumnChoice] = {}
    for quantity, given in value.items():
        where = f"catalogue.columns.{quantity}"
        if quantity not in INPUT:
            raise RecipeError(
                f"{where}: there is no such quantity. {did_you_mean(quantity, INPUT)}"
            )
        if isinstance(given, str):
            given = {"column": given}
        if not isinstance(given, Mapping) or not all(isinstance(v, str) for v in given.values()):
            raise RecipeError(
                f'{where}: give a column name, or {{ column = "...", unit = "..." }}, '
                f"not {given!r}."
            )
        for key in given:
            if key not in ("column", "unit"):
                raise RecipeError(f"{where}.{key} is not a key. Known: column, unit.")
        if not given.get("column", quantity):
            raise RecipeError(f"{where}: the column name is empty.")
        chosen[quantity] = ColumnChoice(given.get("column", quantity), given.get("unit", ""))
    used: dict[str, str] = {}
    for quantity, column in chosen.items():
        if column.column in used:
            raise RecipeError(
                f"catalogue.columns: {used[column.column]} and {quantity} are both taken from the "
                f"column {column.column!r}; one column cannot be two quantities."
            )
        used[column.column] = quantity
    return chosen


def _observations(value: Any) -> tuple[Observation, ...]:
    if not isinstance(value, list) or not all(isinstance(item, Mapping) for item in value):
        raise RecipeError("observations are written as [[observation]], one block each.")
    read: list[Observation] = []
    for item in value:
        read.append(read_observation(item))
    return tuple(read)


def read_observation(content: Mapping[str, Any]) -> Observation:
    """One observation from its keys, checked like those of a recipe."""
    filled = dict(content)
    if isinstance(filled.get("depth"), str):
        from embersift.depths import depth

        preset = depth(filled["depth"])
        filled.setdefault("name", filled["depth"])
        filled.setdefault("band", list(preset.band))
        filled.setdefault("flux_limit", preset.flux_limit)
    if "name" not in filled or "band" not in filled:
        raise RecipeError("[[observation]]: each needs at least a name and a band, or a depth.")
    read: Observation = _read_section("observation", filled, Observation)
    return read


def _law_sections(value: Any) -> Mapping[str, Mapping[str, Any]]:
    if not isinstance(value, Mapping) or not all(isinstance(v, Mapping) for v in value.values()):
        raise RecipeError("laws of your own are written as [law.NAME], one section each.")
    return {name: dict(section) for name, section in value.items()}


def _check_background(chosen: BackgroundChoices, given: Mapping[str, Any]) -> None:
    overlaps = {"total": ("hmxb", "lmxb", "binaries", "gas"), "binaries": ("hmxb", "lmxb")}
    for whole_law, parts in overlaps.items():
        if getattr(chosen, whole_law) is None:
            continue
        for part in parts:
            if part in given and given[part] != "none":
                raise RecipeError(
                    f"background.{whole_law} = {getattr(chosen, whole_law)!r} already contains the "
                    f"light of background.{part} = {given[part]!r}: it would be counted twice. "
                    f"Leave one of them out."
                )


assert all(
    key.default is not MISSING for kind in SECTIONS.values() for key in accepted_keys(kind).values()
)
