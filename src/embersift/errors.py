"""What can go wrong, said to the astronomer: what was read, what was expected, what to do."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

__all__ = [
    "CatalogueError",
    "EmbersiftError",
    "LawError",
    "OutputError",
    "RecipeError",
    "did_you_mean",
]


class EmbersiftError(Exception):
    """Base of every error that embersift raises on purpose; its text is meant for the user."""


class CatalogueError(EmbersiftError):
    """The catalogue cannot be used as it is: names the file, the column and the rows."""


class RecipeError(EmbersiftError):
    """The recipe cannot be used as it is: names the section, the key and what was expected."""


class LawError(RecipeError):
    """A law is unknown, or cannot do what the recipe asks of it."""


class OutputError(EmbersiftError):
    """The result could not be written; nothing is left under the output's name."""


def did_you_mean(word: str, known: Iterable[str], *, count: int = 3) -> str:
    """Return a sentence that names the known words nearest to `word`.

    Examples
    --------
    >>> did_you_mean("thresold", ["thresholds", "floor"])
    'Did you mean thresholds?'
    >>> did_you_mean("xyz", ["floor", "criterion"])
    'Known: criterion, floor.'
    """
    known = sorted(set(known))
    lowered = {name.lower(): name for name in known}
    near = difflib.get_close_matches(word.lower(), list(lowered), n=count, cutoff=0.55)
    if near:
        return f"Did you mean {' or '.join(lowered[name] for name in near)}?"
    return f"Known: {', '.join(known)}." if known else ""
