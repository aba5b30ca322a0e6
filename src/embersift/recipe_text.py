"""Recipes as text: the resolved recipe beside an output, the commented starter, the key table."""

from __future__ import annotations

import json
import textwrap
from collections.abc import Mapping
from typing import Any

from embersift.recipe import (
    SECTIONS,
    Observation,
    Recipe,
    SpreadChoices,
    accepted_keys,
)

__all__ = ["key_table", "starter", "to_toml"]


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        # a JSON string is a TOML basic string, apart from DEL, which TOML wants escaped
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, float):
        # repr reads back to the same float64; TOML spells infinity without Python's help
        return repr(value).replace("e+", "e")
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_value(v) for v in value) + "]"
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{_name(k)} = {_value(v)}" for k, v in value.items()) + " }"
    return str(value)


def _name(key: str) -> str:
    plain = key.replace("_", "").replace("-", "")
    return key if plain.isascii() and plain.isalnum() else _value(key)


def _section_lines(content: Mapping[str, Any]) -> list[str]:
    return [f"{_name(k)} = {_value(v)}" for k, v in content.items() if k != "columns"]


def to_toml(recipe: Recipe) -> str:
    """Every choice of a recipe, defaults included, as TOML that reads back to the same recipe.

    Examples
    --------
    >>> import tomllib
    >>> Recipe.from_dict(tomllib.loads(to_toml(Recipe()))) == Recipe()
    True
    """
    content = recipe.as_dict()
    lines: list[str] = []
    for section, value in content.items():
        if section == "observation":
            for item in value:
                lines += ["", "[[observation]]", *_section_lines(item)]
        elif section == "law":
            for name, law in value.items():
                lines += ["", f"[law.{_name(name)}]", *_section_lines(law)]
        else:
            lines += ["", f"[{section}]", *_section_lines(value)]
            if "columns" in value:
                lines += ["", f"[{section}.columns]"]
                lines += [f"{_name(k)} = {_value(v)}" for k, v in value["columns"].items()]
    return "\n".join(lines).lstrip() + "\n"


_EXAMPLES: Mapping[str, str] = {
    "h": "0.7",
    "redshift": "0.05",
    "solar_mass_fraction": "0.0134",
    "format": '"csv"',
    "separator": '";"',
    "table": '"galaxies"',
    "k": "16.0",
    "binaries": '"lehmer2016"',
    "total": '"mineo2014"',
    "without_metallicity": '"lehmer2019"',
    "stellar_age": "5.0",
    "aperture": "2.0",
    "depth": '"cdfs-7ms"',
    "agn_scatter": "0.3",
    "accretion": '["two-regime", "constant"]',
    "bolometric": '["duras2020", "lopez2024"]',
    "gas": '["mineo2012gas", "none"]',
    "exposure": "50.0",
    "wanted": "1e-3",
    "effective_area": '"mirror.arf"',
    "counts_per_flux": "2e11",
    "area": "10.0",
    "redshifts": "[0.0, 0.1]",
    "box": "100.0",
}


def starter() -> str:
    """A commented recipe: every key with its default and meaning; unset keys are commented out."""
    lines = [
        "# A recipe for embersift: every choice of a run, with its default.",
        "# Delete what you do not change. Units, laws and columns: docs/, `embersift laws`.",
    ]
    for section, kind in SECTIONS.items():
        lines += ["", f"[{section}]"]
        if kind.__doc__:
            lines.append(f"# {kind.__doc__.strip().splitlines()[0]}")
        lines += _starter_keys(kind)
        if section == "catalogue":
            lines += [
                "",
                "[catalogue.columns]",
                "# Quantities under other names, in other units, or as logarithms:",
                '# mstar = { column = "StellarMass", unit = "1e10 Msun / littleh" }',
                '# sfr = { column = "log_sfr", unit = "dex(Msun / yr)" }',
                '# metallicity = "Zgas"',
            ]
        if section == "background":
            lines += [
                "",
                "# One block for each way of looking; without any, 2-10 keV with no flux limit.",
                "# [[observation]]",
                *(
                    line if line.startswith("#") else f"# {line}"
                    for line in _starter_keys(Observation)
                ),
            ]
    lines += [
        "",
        "# A law of your own, usable under its name in [background] (docs/choosing-laws.md):",
        "# [law.mine2026]",
        '# light = ["hmxb"]',
        "# band = [0.5, 8.0]",
        '# imf = "kroupa"',
        "# log_per_sfr = 39.6",
        "# sfr_oh12_slope = -0.6",
        "# scatter_dex = 0.3",
        '# source = "your paper"',
    ]
    return "\n".join(lines) + "\n"


def _example(kind: type, name: str) -> str:
    # binaries is one law in a background and a list of them in a spread
    if kind is SpreadChoices and name == "binaries":
        return '["lehmer2021+lehmer2019", "lehmer2016"]'
    return _EXAMPLES[name]


def _starter_keys(kind: type) -> list[str]:
    lines = []
    for name, key in accepted_keys(kind).items():
        meaning = textwrap.wrap(key.metadata["meaning"], 76)
        lines += [f"# {line}" for line in meaning]
        if key.default is None:
            lines.append(f"# {name} = {_example(kind, name)}")
        else:
            lines.append(f"{name} = {_value(key.default)}")
    return lines


def key_table() -> str:
    """Markdown tables of every key: default, what it accepts, meaning."""
    blocks = []
    kinds: dict[str, type] = {**SECTIONS, "observation": Observation}
    for section, kind in kinds.items():
        title = f"[[{section}]]" if section == "observation" else f"[{section}]"
        doc = (kind.__doc__ or "").strip().splitlines()[0]
        lines = [f"## `{title}`", "", doc, "", "| key | default | accepts | meaning |"]
        lines.append("|---|---|---|---|")
        for name, key in accepted_keys(kind).items():
            default = "-" if key.default is None else f"`{_value(key.default)}`"
            accepts = key.metadata["accepts"].words.replace("|", "\\|")
            lines.append(f"| `{name}` | {default} | {accepts} | {key.metadata['meaning']} |")
        if section == "catalogue":
            lines.append(
                "| `columns` | - | a section: quantity = column name, or "
                '`{ column = "...", unit = "..." }` | where each quantity is found |'
            )
        blocks.append("\n".join(lines))
    return "\n\n".join(blocks) + "\n"
