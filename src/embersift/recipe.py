"""The recipe: every choice of a run, declared once, read once, frozen.

The keys stand in `recipe_sections`; here they are read, checked together and changed.
"""

from __future__ import annotations

import itertools
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import MISSING, Field, dataclass, field, fields, replace
from pathlib import Path
from typing import Any

from embersift.errors import RecipeError, did_you_mean
from embersift.recipe_sections import (
    SECTIONS,
    AgnChoices,
    BackgroundChoices,
    CatalogueChoices,
    ColumnChoice,
    CosmologyChoices,
    Observation,
    OddsChoices,
    ProposalChoices,
    RandomChoices,
    ScreenChoices,
    SpreadChoices,
    SurveyChoices,
    TallyChoices,
)
from embersift.recipe_values import Accepts

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
    "SpreadChoices",
    "SurveyChoices",
    "TallyChoices",
    "accepted_keys",
    "read_observation",
]


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
    spread: SpreadChoices = field(default_factory=SpreadChoices)
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
