"""Pictures of a screened table; each is a function that draws on the axes it is given."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from types import MappingProxyType
from typing import TYPE_CHECKING, Any, NamedTuple

from embersift.errors import OutputError, RecipeError, did_you_mean
from embersift.figures.clouds import CROWD, contrast, light, masses
from embersift.figures.fractions import causes, hidden
from embersift.figures.limits import depth, fluxes
from embersift.figures.output import ENDINGS, figure_bytes, replace_file
from embersift.figures.ranking import ranking
from embersift.figures.reading import Reading
from embersift.figures.style import FATE_MARKS, THRESHOLD_MARKS, FiguresMissing, require_matplotlib
from embersift.recipe import Recipe
from embersift.tables import check_output

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = [
    "CROWD",
    "FATE_MARKS",
    "FIGURES",
    "THRESHOLD_MARKS",
    "FigureKind",
    "FiguresMissing",
    "Reading",
    "causes",
    "contrast",
    "depth",
    "draw",
    "fluxes",
    "hidden",
    "light",
    "masses",
    "ranking",
]


class FigureKind(NamedTuple):
    """A figure by name: its function, a title, and a sentence that says what it shows."""

    function: Callable[..., Axes]
    title: str
    shows: str


FIGURES: Mapping[str, FigureKind] = MappingProxyType(
    {
        "hidden": FigureKind(
            hidden,
            "Hidden fraction per bin",
            "The share of black holes that are not visible in each bin, with its interval, at "
            "every threshold.",
        ),
        "causes": FigureKind(
            causes,
            "Where the hidden ones go",
            "For the hidden black holes of each bin, the share that each cause accounts for; every "
            "black hole is counted once.",
        ),
        "light": FigureKind(
            light,
            "Black-hole light against stellar mass",
            "Intrinsic 2-10 keV luminosity of each accreting black hole against the stellar mass "
            "of its host, by fate, with the median expected background and the floor.",
        ),
        "contrast": FigureKind(
            contrast,
            "Black-hole light against the expected background",
            "Light of each accreting black hole in the observed band against that of its host; "
            "below a threshold's line it is outshone.",
        ),
        "masses": FigureKind(
            masses,
            "Black-hole mass against stellar mass",
            "Mass of each black hole, dormant ones included, against the stellar mass of its host, "
            "by fate.",
        ),
        "fluxes": FigureKind(
            fluxes,
            "Fluxes and the limit",
            "Distribution of the flux that is compared with the limit, by fate, and of the "
            "background's flux.",
        ),
        "depth": FigureKind(
            depth,
            "Hidden fraction against flux limit",
            "How the hidden share of all black holes grows with the flux limit, one curve per "
            "threshold.",
        ),
        "ranking": FigureKind(
            ranking,
            "Hidden fraction by law",
            "From a spread: the hidden fraction under each law, ranked, over all choices of the "
            "other laws.",
        ),
    }
)
"""The figures that `draw` knows. All are drawn from a screened table, but ``ranking``, which is
drawn from the table of a spread."""


def draw(
    screened: Any,
    recipe: Recipe | None,
    figure: str,
    out: str | Path,
    *,
    observation: str | None = None,
    threshold: float | None = None,
    overwrite: bool = False,
) -> Path:
    """Draw a figure into a file.

    Parameters
    ----------
    screened : pandas.DataFrame or astropy.table.Table
        A screened table; for ``ranking`` the table of a spread.
    recipe : Recipe or None
        The recipe it was screened with.
    figure : str
        A name out of `FIGURES`.
    out : path
        ``.png``, ``.pdf`` or ``.svg``.
    observation, threshold : optional
        As for `light`.
    overwrite : bool
        Replace an existing file.

    Returns
    -------
    Path
        The file; the same input gives the same bytes.

    Raises
    ------
    RecipeError
        There is no such figure or observation.
    OutputError
        The file cannot be written, or its ending is none of the three.
    FiguresMissing
        matplotlib is not installed.
    """
    if figure not in FIGURES:
        raise RecipeError(f"There is no figure {figure!r}. {did_you_mean(figure, FIGURES)}")
    target = Path(out)
    if target.suffix.lower() not in ENDINGS:
        raise OutputError(f"{target}: figures are written as {', '.join(ENDINGS)}.")
    check_output(target, overwrite=overwrite)
    require_matplotlib()
    ax = FIGURES[figure].function(screened, recipe, observation=observation, threshold=threshold)
    content = figure_bytes(ax, target.suffix.lower().lstrip("."))
    return replace_file(target, content, overwrite=overwrite)
