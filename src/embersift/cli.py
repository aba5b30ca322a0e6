"""The command line: a thin skin, one library call per command.

Nothing scientific is imported here at module level, so that ``--help`` answers at once.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import Annotated, Any, NoReturn, ParamSpec, TypeVar

import typer

from embersift.errors import EmbersiftError, RecipeError

__all__ = ["app", "main"]

P = ParamSpec("P")
R = TypeVar("R")

UNUSABLE_INPUT = 2
STRICT_ROWS = 3
INTERRUPTED = 130

_EXAMPLE = """Which massive black holes of a catalogue could an X-ray observer honestly call an
AGN, which stay hidden, and why.

\b
Start with:  embersift screen galaxies.csv
         or  embersift check galaxies.csv   (reads and reports)"""

app = typer.Typer(
    name="embersift",
    help=_EXAMPLE,
    no_args_is_help=True,
    add_completion=True,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)


def _fail(message: str) -> NoReturn:
    typer.echo(f"embersift: {message}", err=True)
    raise typer.Exit(UNUSABLE_INPUT)


def _speaks(command: Callable[P, R]) -> Callable[P, R]:
    """Turn our own errors into one message and exit code 2; an interrupt into 130."""

    @wraps(command)
    def wrapped(*args: P.args, **kwargs: P.kwargs) -> R:
        try:
            return command(*args, **kwargs)
        except EmbersiftError as error:
            _fail(str(error))
        except KeyboardInterrupt:
            typer.echo("embersift: interrupted; no output was written.", err=True)
            raise typer.Exit(INTERRUPTED) from None

    return wrapped


CatalogueFile = Annotated[Path, typer.Argument(help="The table, one row per black hole.")]
RecipeFile = Annotated[
    Path | None, typer.Option("--recipe", "-r", help="Recipe (TOML): every choice of the run.")
]
Settings = Annotated[
    list[str] | None,
    typer.Option("--set", metavar="SECTION.KEY=VALUE", help="Set any key of the recipe."),
]
OutFile = Annotated[Path | None, typer.Option("--out", "-o", help="Output; format by its ending.")]
Overwrite = Annotated[bool, typer.Option("--overwrite", help="Replace an existing output.")]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="Print nothing but errors.")]
FixedRedshift = Annotated[
    float | None, typer.Option("--redshift", help="One redshift for every row.")
]


Thresholds = Annotated[
    list[float] | None,
    typer.Option("--threshold", "-t", help="Factor above the background (repeatable)."),
]
Limits = Annotated[
    list[str] | None,
    typer.Option(
        "--limit",
        "-l",
        metavar="NAME=LO-HI:FLUX",
        help="An observation: band in keV and flux limit in erg/s/cm2, such as "
        "deep=0.5-2:1e-16, or a reference depth such as cdfs-7ms (repeatable).",
    ),
]


def _version(wanted: bool) -> None:
    if wanted:
        from embersift import __version__

        typer.echo(f"embersift {__version__}")
        raise typer.Exit


@app.callback()
def _top(
    version: Annotated[
        bool,
        typer.Option("--version", callback=_version, is_eager=True, help="Version, and leave."),
    ] = False,
) -> None:
    del version


@app.command(short_help="Judge every black hole: visible or hidden, and why.")
@_speaks
def screen(
    catalogue: CatalogueFile,
    recipe: RecipeFile = None,
    out: OutFile = None,
    threshold: Thresholds = None,
    limit: Limits = None,
    redshift: FixedRedshift = None,
    odds: Annotated[
        bool, typer.Option("--odds", help="Add the probability of being visible, given scatter.")
    ] = False,
    settings: Settings = None,
    strict: Annotated[
        bool, typer.Option("--strict", help="Exit with 3 when a row is unusable.")
    ] = False,
    overwrite: Overwrite = False,
    quiet: Quiet = False,
) -> None:
    """Judge every black hole: visible or hidden, at every flux limit and threshold."""
    from embersift.running import screen_file

    chosen = _recipe(recipe, settings, redshift=redshift, thresholds=threshold, limits=limit)
    if odds:
        chosen = chosen.with_settings({"screen.odds": True})
    done = screen_file(catalogue, chosen, out=out, overwrite=overwrite)
    if not quiet:
        from embersift.summary import screening_lines

        _print(screening_lines(done, _width()))
    if strict and done.unusable:
        typer.echo(
            f"embersift: {done.unusable} row{'s are' if done.unusable > 1 else ' is'} unusable "
            f"(--strict); the column problem of {done.out} says why.",
            err=True,
        )
        raise typer.Exit(STRICT_ROWS)


@app.command(short_help="How faint an accretor could still be claimed.")
@_speaks
def reach(
    catalogue: Annotated[Path, typer.Argument(help="Galaxies to observe; no rates are needed.")],
    recipe: RecipeFile = None,
    out: OutFile = None,
    threshold: Thresholds = None,
    limit: Limits = None,
    redshift: FixedRedshift = None,
    mbh: Annotated[
        str | None,
        typer.Option("--mbh", metavar="A,B,C", help="Mass [Msun] of holes without one, or a grid."),
    ] = None,
    eddington: Annotated[
        str | None,
        typer.Option("--eddington", metavar="A,B,C", help="Lightest visible hole at each ratio."),
    ] = None,
    exposure: Annotated[
        float | None, typer.Option("--exposure", metavar="KS", help="Exposure of the flux limits.")
    ] = None,
    scaling: Annotated[
        str | None, typer.Option("--scaling", help="How limits deepen: background or photon.")
    ] = None,
    wanted: Annotated[
        float | None, typer.Option("--wanted", help="Eddington ratio whose exposure is asked for.")
    ] = None,
    rank: Annotated[
        bool, typer.Option("--rank", help="Write a target list, best odds per exposure first.")
    ] = False,
    observation: Annotated[
        str | None, typer.Option("--observation", help="Observation to rank for.")
    ] = None,
    settings: Settings = None,
    overwrite: Overwrite = False,
    quiet: Quiet = False,
) -> None:
    """How faint an accretor could still be claimed in each galaxy, and what sets the limit."""
    from embersift.running import reach_file

    chosen = _recipe(recipe, settings, redshift=redshift, thresholds=threshold, limits=limit)
    given = {
        "mbh": None if mbh is None else _numbers("--mbh", mbh),
        "eddington": None if eddington is None else _numbers("--eddington", eddington),
        "exposure": exposure,
        "scaling": scaling,
        "wanted": wanted,
    }
    changes = {f"proposal.{key}": value for key, value in given.items() if value is not None}
    if changes:
        chosen = chosen.with_settings(changes)
    done = reach_file(
        catalogue, chosen, ranked=rank, observation=observation, out=out, overwrite=overwrite
    )
    if not quiet:
        from embersift.summary_targets import reach_lines

        _print(reach_lines(done, _width()))


@app.command("yield", short_help="Expected numbers of visible sources on the sky.")
@_speaks
def sky_yield(
    screened: Annotated[Path, typer.Argument(help="A table that `embersift screen` wrote.")],
    area: Annotated[float | None, typer.Option("--area", metavar="DEG2", help="Area.")] = None,
    redshifts: Annotated[
        str | None, typer.Option("--redshifts", metavar="LOW,HIGH", help="Redshift range.")
    ] = None,
    box: Annotated[
        float | None,
        typer.Option("--box", metavar="MPC", help="Side of the catalogue's cube, comoving."),
    ] = None,
    out: OutFile = None,
    settings: Settings = None,
    overwrite: Overwrite = False,
    quiet: Quiet = False,
) -> None:
    """Expected numbers of visible sources on the sky, per bin, with Poisson intervals."""
    from embersift.running import yield_file

    changes: dict[str, Any] = _settings(settings)
    given = {
        "area": area,
        "redshifts": None if redshifts is None else _numbers("--redshifts", redshifts),
        "box": box,
    }
    changes |= {f"survey.{key}": value for key, value in given.items() if value is not None}
    done = yield_file(screened, changes, out=out, overwrite=overwrite)
    if not quiet:
        from embersift.summary_targets import yield_lines

        _print(yield_lines(done, _width()))


@app.command(short_help="How far laws and their errors move the hidden fraction.")
@_speaks
def spread(
    catalogue: CatalogueFile,
    recipe: RecipeFile = None,
    out: OutFile = None,
    threshold: Thresholds = None,
    limit: Limits = None,
    redshift: FixedRedshift = None,
    draws: Annotated[int | None, typer.Option("--draws", help="Draws of the coefficients.")] = None,
    seed: Annotated[int | None, typer.Option("--seed", help="Seed of the draws.")] = None,
    settings: Settings = None,
    overwrite: Overwrite = False,
    quiet: Quiet = False,
) -> None:
    """Screen with every combination of laws and with coefficients drawn from their errors."""
    from embersift.running import spread_file
    from embersift.summary_targets import spread_lines

    chosen = _recipe(recipe, settings, redshift=redshift, thresholds=threshold, limits=limit)
    given = {"spread.draws": draws, "random.seed": seed}
    changes = {key: value for key, value in given.items() if value is not None}
    if changes:
        chosen = chosen.with_settings(changes)
    if quiet or not sys.stderr.isatty():
        done = spread_file(catalogue, chosen, out=out, overwrite=overwrite)
    else:
        from rich.console import Console
        from rich.progress import (
            BarColumn,
            MofNCompleteColumn,
            Progress,
            TaskProgressColumn,
            TextColumn,
            TimeRemainingColumn,
        )

        shown = (
            TextColumn("steps"),
            BarColumn(),
            MofNCompleteColumn(),
            TaskProgressColumn(show_speed=True),
            TimeRemainingColumn(),
        )
        with Progress(*shown, console=Console(stderr=True), transient=True) as bar:
            task = bar.add_task("steps", total=None)
            done = spread_file(
                catalogue,
                chosen,
                out=out,
                overwrite=overwrite,
                progress=lambda at, steps: bar.update(task, completed=at, total=steps),
            )
    if not quiet:
        _print(spread_lines(done, _width()))


@app.command(short_help="Hidden fractions per bin of a screened table.")
@_speaks
def tally(
    screened: Annotated[Path, typer.Argument(help="A table that `embersift screen` wrote.")],
    by: Annotated[
        str | None, typer.Option("--by", help="Column whose bins are counted (default: mstar).")
    ] = None,
    edges: Annotated[
        str | None,
        typer.Option("--edges", metavar="A,B,C", help="Bin edges; log10 for masses."),
    ] = None,
    split: Annotated[
        str | None,
        typer.Option("--split", help="central: count central and off-centre holes apart."),
    ] = None,
    central_within: Annotated[
        float | None,
        typer.Option(
            "--central-within", metavar="KPC", help="Offset up to which a hole is central."
        ),
    ] = None,
    interval: Annotated[str | None, typer.Option("--interval", help="wilson or jeffreys.")] = None,
    out: Annotated[
        Path | None, typer.Option("--out", "-o", help="Write the counts: .csv, .ecsv or .json.")
    ] = None,
    overwrite: Overwrite = False,
    quiet: Quiet = False,
) -> None:
    """Count a screened table: hidden fractions per bin, and where the hidden ones went."""
    from embersift.running import tally_file

    settings: dict[str, Any] = {}
    if by is not None:
        settings["tally.by"] = by
    if edges is not None:
        settings["tally.edges"] = _numbers("--edges", edges)
    if interval is not None:
        settings["tally.interval"] = interval
    if central_within is not None:
        settings["tally.central_within"] = central_within
    done = tally_file(screened, settings, split=split, out=out, overwrite=overwrite)
    if not quiet:
        from embersift.summary import tally_lines

        _print(tally_lines(done, _width()))


@app.command(short_help="Read a catalogue and report; compute nothing.")
@_speaks
def check(
    catalogue: CatalogueFile,
    recipe: RecipeFile = None,
    redshift: FixedRedshift = None,
    settings: Settings = None,
) -> None:
    """Read a catalogue and report what was found; compute nothing, write nothing."""
    from embersift.running import check_file
    from embersift.summary import check_lines

    done = check_file(catalogue, _recipe(recipe, settings, redshift=redshift))
    _print(check_lines(done, _width()))


@app.command(short_help="Draw a figure from a screened table.")
@_speaks
def draw(
    screened: Annotated[Path, typer.Argument(help="A table that `embersift screen` wrote.")],
    figure: Annotated[
        str | None,
        typer.Option("--figure", "-f", help="Which figure; without it, the list of them."),
    ] = None,
    out: Annotated[
        Path | None, typer.Option("--out", "-o", help="Picture: .png, .pdf or .svg.")
    ] = None,
    observation: Annotated[
        str | None, typer.Option("--observation", help="Observation (default: the first).")
    ] = None,
    threshold: Annotated[
        float | None, typer.Option("--threshold", "-t", help="Threshold (default: the headline).")
    ] = None,
    overwrite: Overwrite = False,
) -> None:
    """Draw a figure from a screened table (extra: figures)."""
    from embersift.figures import FIGURES
    from embersift.figures import draw as draw_figure

    if figure is None:
        _print([f"{name:<10}{kind.title}: {kind.shows}" for name, kind in FIGURES.items()])
        return
    if out is None:
        raise RecipeError("--out is needed: the picture's file, ending in .png, .pdf or .svg.")
    from embersift.running import recipe_of
    from embersift.tables import read_table

    table, behind = read_table(screened), recipe_of(screened)
    draw_figure(
        table, behind, figure, out,
        observation=observation, threshold=threshold, overwrite=overwrite,
    )  # fmt: skip
    typer.echo(f"Wrote {out}")


@app.command(short_help="One self-contained page to share.")
@_speaks
def report(
    screened: Annotated[Path, typer.Argument(help="A table that `embersift screen` wrote.")],
    out: Annotated[Path, typer.Option("--out", "-o", help="The page, .html.")],
    overwrite: Overwrite = False,
) -> None:
    """Write one self-contained page to share: answer, figures, laws, cautions, recipe."""
    from embersift.report import report as write_report
    from embersift.running import recipe_of
    from embersift.tables import read_provenance, read_table

    write_report(
        read_table(screened), recipe_of(screened), read_provenance(screened), out,
        title=screened.name, overwrite=overwrite,
    )  # fmt: skip
    typer.echo(f"Wrote {out}")


@app.command(short_help="The published relations and how well verified.")
@_speaks
def laws(
    name: Annotated[str | None, typer.Argument(help="Show everything about this law.")] = None,
    bibtex: Annotated[bool, typer.Option("--bibtex", help="Print BibTeX entries instead.")] = False,
) -> None:
    """The published relations: source, band, IMF, range, scatter, how well verified."""
    from embersift.law_pages import bibtex_lines, law_lines, overview_lines
    from embersift.laws import all_laws, find

    chosen = find(name) if name else all_laws()
    if bibtex:
        _print(bibtex_lines(chosen))
    elif name:
        _print(law_lines(chosen, _width()))
    else:
        _print(overview_lines(_width()))


@app.command(short_help="Reference depths for --limit.")
@_speaks
def depths() -> None:
    """Reference depths for --limit: survey, band, flux limit, area, paper, status."""
    from embersift.depths import lines

    _print(list(lines()))


@app.command(short_help="A commented starter recipe.")
@_speaks
def recipe(out: OutFile = None, overwrite: Overwrite = False) -> None:
    """Print a commented starter recipe, or write it with --out."""
    from embersift.recipe_text import starter

    if out is None:
        typer.echo(starter(), nl=False)
        return
    from embersift.tables import write_text

    write_text(starter(), out, overwrite=overwrite)
    typer.echo(f"Wrote {out}")


@app.command(short_help="An invented population, for demos and benchmarks.")
@_speaks
def mock(
    out: Annotated[Path, typer.Option("--out", "-o", help="Output; format by its ending.")],
    rows: Annotated[int, typer.Option("--rows", help="Rows to make.", min=1)] = 2400,
    seed: Annotated[int, typer.Option("--seed", help="Seed of the draws.", min=0)] = 1,
    overwrite: Overwrite = False,
) -> None:
    """Write an invented population of dwarfs, for demos and benchmarks. Not real data."""
    from embersift.running import mock_file

    mock_file(out, rows, seed, overwrite=overwrite)
    typer.echo(f"Wrote {out}: {rows:,} rows of an invented population, seed {seed}. Not real data.")


def _recipe(
    path: Path | None,
    settings: list[str] | None,
    *,
    redshift: float | None = None,
    thresholds: list[float] | None = None,
    limits: list[str] | None = None,
) -> Any:
    from embersift.recipe import Recipe

    chosen = Recipe.from_toml(path) if path else Recipe()
    changes = _settings(settings)
    if redshift is not None:
        changes["catalogue.redshift"] = redshift
    if thresholds:
        changes["screen.thresholds"] = thresholds
    if changes:
        chosen = chosen.with_settings(changes)
    if limits:
        chosen = chosen.with_observations([_observation(text) for text in limits])
    return chosen


def _settings(settings: list[str] | None) -> dict[str, Any]:
    changes: dict[str, Any] = {}
    for setting in settings or []:
        key, equals, value = setting.partition("=")
        if not equals:
            raise RecipeError(f"--set {setting}: write section.key=value, such as screen.floor=0.")
        changes[key.strip()] = _toml_value(value.strip())
    return changes


def _toml_value(text: str) -> Any:
    """A value as TOML would read it; a bare word is taken as text."""
    import tomllib

    try:
        return tomllib.loads(f"value = {text}")["value"]
    except (tomllib.TOMLDecodeError, RecursionError):
        return text


def _observation(text: str) -> Any:
    from embersift.recipe import Observation, read_observation

    name, equals, rest = text.partition("=")
    if not equals:
        try:
            preset: Observation = read_observation({"depth": text})
        except RecipeError as error:
            raise RecipeError(
                f"--limit {text}: write NAME=LO-HI:FLUX, such as deep=0.5-2:1e-16, "
                f"or a reference depth. {error}"
            ) from None
        return preset
    band, colon, flux = rest.rpartition(":")
    low, dash, high = band.partition("-")
    try:
        if not (equals and colon and dash):
            raise ValueError
        numbers = [float(low), float(high), float(flux)]
    except ValueError:
        raise RecipeError(
            f"--limit {text}: write NAME=LO-HI:FLUX with the band in keV and the flux in "
            "erg/s/cm2, such as deep=0.5-2:1e-16."
        ) from None
    try:
        made: Observation = read_observation(
            {"name": name, "band": numbers[:2], "flux_limit": numbers[2]}
        )
    except RecipeError as error:
        raise RecipeError(f"--limit {text}: {error}") from None
    return made


def _numbers(option: str, text: str) -> list[float]:
    try:
        return [float(part) for part in text.split(",")]
    except ValueError:
        raise RecipeError(
            f"{option} {text}: write numbers with commas, such as 8,8.5,9,9.5,10."
        ) from None


def _width() -> int:
    """Columns to print in: the terminal's, at most 100; 80 when there is none."""
    import shutil

    return max(60, min(100, shutil.get_terminal_size((80, 24)).columns))


def _print(lines: list[str]) -> None:
    typer.echo("\n".join(lines))


def main() -> None:
    """Entry point of the command ``embersift``."""
    try:
        app()
    except BrokenPipeError:
        # the reader (head, less) has left: not an error of ours
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
