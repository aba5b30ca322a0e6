"""Which massive black holes of a catalogue could an X-ray observer honestly call an AGN.

``embersift.screen(table, recipe)`` does the main job; ``embersift.tally`` counts what stays
hidden; ``embersift.laws`` holds the published relations. Names are loaded when first used, so
that the command line starts quickly.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from embersift import laws
    from embersift.errors import EmbersiftError
    from embersift.recipe import Recipe
    from embersift.screening import screen, tally

__version__ = "0.1.0"
__all__ = ["EmbersiftError", "Recipe", "__version__", "laws", "screen", "tally"]

_HOME = {
    "EmbersiftError": "embersift.errors",
    "Recipe": "embersift.recipe",
    "screen": "embersift.screening",
    "tally": "embersift.screening",
}


def __getattr__(name: str) -> Any:
    if name == "laws":
        return import_module("embersift.laws")
    if name in _HOME:
        return getattr(import_module(_HOME[name]), name)
    raise AttributeError(f"module 'embersift' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
