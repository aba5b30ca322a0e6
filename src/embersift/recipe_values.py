"""What a key of the recipe accepts: one small reader per kind of value.

Each reader takes the value that TOML gave and returns it in its one internal form, or raises a
`RecipeError` that names the key, what stood there and what was expected.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from embersift.bands import Band
from embersift.errors import RecipeError, did_you_mean

__all__ = [
    "Accepts",
    "band",
    "choice",
    "column_density",
    "flag",
    "list_of",
    "name_or_number",
    "name_text",
    "number",
    "optional",
    "text",
    "whole",
]

_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_-]{0,39}")


@dataclass(frozen=True)
class Accepts:
    """How a value is read, and how that is said in the documentation."""

    read: Callable[[str, Any], Any]
    words: str


def _refuse(key: str, value: Any, expected: str) -> RecipeError:
    shown = repr(value)
    if len(shown) > 60:
        shown = shown[:57] + "..."
    return RecipeError(f"{key} = {shown}: expected {expected}.")


def number(
    *,
    least: float = -math.inf,
    most: float = math.inf,
    above: float = -math.inf,
    below: float = math.inf,
) -> Accepts:
    limits = [
        f"at least {least:g}" if least > -math.inf else "",
        f"above {above:g}" if above > -math.inf else "",
        f"at most {most:g}" if most < math.inf else "",
        f"below {below:g}" if below < math.inf else "",
    ]
    words = " ".join(["a number", ", ".join(limit for limit in limits if limit)]).strip()

    def read(key: str, value: Any) -> float:
        # bool is an int to Python, but never a number to an astronomer
        if isinstance(value, bool) or not isinstance(value, (int, float)):
            raise _refuse(key, value, words)
        result = float(value)
        # an infinite flux limit or threshold is meaningful (nothing passes); NaN never is
        under = result < below or below == math.inf
        if math.isnan(result) or not (least <= result <= most and above < result and under):
            raise _refuse(key, value, words)
        return result

    return Accepts(read, words)


def column_density() -> Accepts:
    words = "0 or a column in cm-2, 1e10 to 1e27 (not its logarithm)"
    plain = number(least=0.0, most=1e27)

    def read(key: str, value: Any) -> float:
        result: float = plain.read(key, value)
        if 0.0 < result < 1e10:
            raise _refuse(key, value, words)
        return result

    return Accepts(read, words)


def whole(*, least: int) -> Accepts:
    words = f"a whole number, at least {least}"

    def read(key: str, value: Any) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or value < least:
            raise _refuse(key, value, words)
        return value

    return Accepts(read, words)


def flag() -> Accepts:
    def read(key: str, value: Any) -> bool:
        if not isinstance(value, bool):
            raise _refuse(key, value, "true or false")
        return value

    return Accepts(read, "true or false")


def text() -> Accepts:
    def read(key: str, value: Any) -> str:
        if not isinstance(value, str) or not value:
            raise _refuse(key, value, "text in quotes")
        return value

    return Accepts(read, "text")


def name_text() -> Accepts:
    words = "a name of letters, digits, _ and -, at most 40"

    def read(key: str, value: Any) -> str:
        if not isinstance(value, str) or not _NAME.fullmatch(value):
            raise _refuse(key, value, words)
        return value

    return Accepts(read, words)


def name_or_number() -> Accepts:
    words = "a table's name, or its number"

    def read(key: str, value: Any) -> str | int:
        if isinstance(value, bool) or not isinstance(value, (str, int)) or value == "":
            raise _refuse(key, value, words)
        return value

    return Accepts(read, words)


def choice(*allowed: str | float) -> Accepts:
    words = " or ".join(str(a) for a in allowed)

    def read(key: str, value: Any) -> Any:
        for option in allowed:
            if value == option and not isinstance(value, bool):
                return option
        if isinstance(value, str):
            near = did_you_mean(value, [str(a) for a in allowed])
            raise RecipeError(f"{key} = {value!r}: expected {words}. {near}")
        raise _refuse(key, value, words)

    return Accepts(read, words)


def band() -> Accepts:
    words = "two energies in keV, [low, high], within 0.03 to 1000"

    def read(key: str, value: Any) -> Band:
        if (
            not isinstance(value, (list, tuple))
            or len(value) != 2
            or any(isinstance(v, bool) or not isinstance(v, (int, float)) for v in value)
        ):
            raise _refuse(key, value, words)
        low, high = float(value[0]), float(value[1])
        if low >= high:
            raise RecipeError(
                f"{key} = [{low:g}, {high:g}]: the band is upside down; "
                "write the lower energy first."
            )
        if not (low >= 0.03 and high <= 1000.0):
            raise _refuse(key, value, words)
        return Band(low, high)

    return Accepts(read, words)


def list_of(item: Accepts, *, length: int | None = None) -> Accepts:
    words = (f"{length} values" if length else "a list") + f", each {item.words}"

    def read(key: str, value: Any) -> tuple[Any, ...]:
        if not isinstance(value, (list, tuple)) or (length is not None and len(value) != length):
            raise _refuse(key, value, words)
        return tuple(item.read(f"{key}[{i}]", v) for i, v in enumerate(value))

    return Accepts(read, words)


def optional(inner: Accepts) -> Accepts:
    """A key that may be left out; TOML has no null, so absence is how it is unset."""
    return Accepts(inner.read, inner.words)
