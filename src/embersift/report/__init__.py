"""One HTML file to hand to a colleague: the answer first, then what it rests on."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from embersift import __version__
from embersift.errors import EmbersiftError
from embersift.figures.output import replace_file
from embersift.figures.reading import Reading
from embersift.figures.style import require_matplotlib
from embersift.law_pages import bibtex_lines
from embersift.recipe import Recipe
from embersift.recipe_text import to_toml
from embersift.report.answer import answer_of
from embersift.report.basis import cautions, law_entries, laws_in_use
from embersift.report.nearest import nearest
from embersift.report.pictures import pictures_of
from embersift.tables import check_output

__all__ = ["ReportMissing", "laws_in_use", "report"]


class ReportMissing(EmbersiftError):
    """A report was asked for, and Jinja2 is not installed."""


def report(
    screened: Any,
    recipe: Recipe | None,
    provenance: Any,
    out: str | Path,
    *,
    title: str = "",
    overwrite: bool = False,
) -> Path:
    """Write a report of a screened table: one HTML file that needs nothing but itself.

    Parameters
    ----------
    screened : pandas.DataFrame or astropy.table.Table
        What `embersift.screen` returned, or such a table read from a file.
    recipe : Recipe or None
        The recipe it was screened with.
    provenance : embersift.tables.Provenance or None
        What the file says of its origin.
    out : path
        The file to write.
    title : str
        What was screened, such as the file's name.
    overwrite : bool
        Replace an existing file.

    Raises
    ------
    ReportMissing, FiguresMissing
        Jinja2 or matplotlib is not installed.
    CatalogueError
        The table is not a screened one, or lacks what the recipe says is in it.
    OutputError
        The file exists or cannot be written.
    """
    try:
        import jinja2
        from markupsafe import Markup
    except ImportError:
        raise ReportMissing(
            "A report needs Jinja2, which is not installed: pip install 'embersift[report]'"
        ) from None
    require_matplotlib()
    target = Path(out)
    check_output(target, overwrite=overwrite)
    reading = Reading.of(screened, recipe)
    chosen = reading.recipe
    views = [reading.view(o.name, chosen.screen.headline) for o in chosen.observation]
    laws = laws_in_use(chosen)
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("embersift.report", "."),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    page = environment.get_template("report.html.jinja").render(
        title=title or "the screened table",
        invented=str(getattr(provenance, "invented", "") or ""),
        version=str(getattr(provenance, "version", "") or __version__),
        rows=f"{reading.sources.mstar.size:,}",
        headline=f"{chosen.screen.headline:g}",
        interval=chosen.tally.interval,
        level=f"{100.0 * chosen.tally.level:.0f}",
        answers=[answer_of(view) for view in views],
        pictures=pictures_of(views),
        laws=law_entries(laws, reading),
        bibtex="\n".join(bibtex_lines([law for _, law in laws])),
        cautions=cautions(reading, laws),
        near=nearest(views),
        recipe_toml=to_toml(chosen),
        drawing=Markup,
    )
    return replace_file(target, page.encode("utf-8"), overwrite=overwrite)
