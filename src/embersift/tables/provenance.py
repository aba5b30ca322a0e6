"""What an output says about itself: version, recipe, laws. Written and read in each format."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from embersift.tables.formats import format_of

__all__ = ["Provenance", "read_provenance", "sidecar"]

_FITS_KEYS = {
    "version": "EMBERSFT",
    "recipe": "EMBERRCP",
    "laws": "EMBERLAW",
    "invented": "INVENTED",
}


@dataclass(frozen=True)
class Provenance:
    """Enough to understand an output and to make it again."""

    version: str
    recipe_toml: str
    laws: tuple[tuple[str, str], ...] = ()  # name and source
    invented: str = ""

    def as_dict(self) -> dict[str, Any]:
        """Plain text and lists, for headers that hold a tree."""
        content: dict[str, Any] = {"version": self.version}
        if self.recipe_toml:
            # line by line: header text in YAML does not keep its line breaks
            content["recipe"] = self.recipe_toml.splitlines()
        if self.laws:
            content["laws"] = [
                f"{name}: {source or 'no published source'}" for name, source in self.laws
            ]
        if self.invented:
            content["invented"] = self.invented
        return content

    @classmethod
    def from_dict(cls, content: Mapping[str, Any]) -> Provenance:
        pairs = (str(law).partition(": ") for law in content.get("laws", []))
        recipe = content.get("recipe", [])
        return cls(
            version=str(content.get("version", "")),
            recipe_toml="\n".join(map(str, recipe)) + "\n" if recipe else "",
            laws=tuple((name, source) for name, _, source in pairs),
            invented=str(content.get("invented", "")),
        )

    def fits_cards(self) -> dict[str, str]:
        """Header keywords; text on one line, as FITS cards allow no line breaks."""
        content = self.as_dict()
        return {
            key: json.dumps(content[name]) if name in ("recipe", "laws") else str(content[name])
            for name, key in _FITS_KEYS.items()
            if name in content
        }


def sidecar(path: Path) -> Path:
    """The file beside a CSV that holds the recipe."""
    return path.with_name(f"{path.name}.recipe.toml")


def read_provenance(path: Path) -> Provenance | None:
    """What a file that embersift wrote says about itself; None when it says nothing."""
    kind = format_of(path)
    if kind == "csv":
        beside = sidecar(path)
        if not beside.exists():
            return None
        return Provenance(version="", recipe_toml=beside.read_text(encoding="utf-8"))
    if kind == "parquet":
        import pyarrow.parquet as pq

        raw = (pq.read_schema(path).metadata or {}).get(b"embersift")
        return None if raw is None else Provenance.from_dict(json.loads(raw))
    if kind == "fits":
        from astropy.io import fits

        header = fits.getheader(path, 1)
        if _FITS_KEYS["version"] not in header:
            return None
        content: dict[str, Any] = {}
        for name, key in _FITS_KEYS.items():
            if key in header:
                value = header[key]
                content[name] = json.loads(value) if name in ("recipe", "laws") else value
        return Provenance.from_dict(content)
    if kind in ("ecsv", "votable"):
        from embersift.tables.reading import read_table

        raw = read_table(path).meta.get("embersift")
        if isinstance(raw, str):
            raw = json.loads(raw)
        return Provenance.from_dict(raw) if isinstance(raw, Mapping) else None
    return None
