"""The figures show the table: what is drawn is compared with what was counted by hand."""

from __future__ import annotations

import itertools
import sys

import numpy as np
import pandas as pd
import pytest

import embersift
from embersift.errors import CatalogueError, OutputError, RecipeError
from embersift.mock import population

pytest.importorskip("matplotlib", reason="the extra figures is not installed")

from embersift.figures import (
    CROWD,
    FATE_MARKS,
    FIGURES,
    THRESHOLD_MARKS,
    FiguresMissing,
    Reading,
    causes,
    contrast,
    depth,
    draw,
    fluxes,
    hidden,
    light,
    masses,
    ranking,
)
from embersift.figures.limits import curve
from embersift.figures.style import power

RECIPE = embersift.Recipe.from_dict(
    {
        "observation": [
            {"name": "deep", "band": [0.5, 2.0], "flux_limit": 1e-16, "galactic_nh": 2e20},
            {"name": "wide", "band": [2.0, 10.0], "flux_limit": 3e-15},
        ]
    }
)
FROM_A_TABLE = [name for name in FIGURES if name != "ranking"]


@pytest.fixture(scope="module")
def screened():
    return embersift.screen(population(900, seed=3), RECIPE)


@pytest.fixture(scope="module")
def spread():
    rows = [
        {
            "accretion": accretion, "bolometric": bolometric, "binaries": "lehmer2016",
            "gas": "mineo2012gas", "observation": "deep", "threshold": 2.0, "bin": bin,
            "hidden_fraction": share + 0.1 * (bin == "8-9"), "spread_low": share - 0.05,
            "spread_high": share + 0.15,
        }
        for (accretion, bolometric), share in {
            ("two-regime", "duras2020"): 0.6,
            ("two-regime", "lusso2012"): 0.5,
            ("constant", "duras2020"): 0.3,
            ("constant", "lusso2012"): 0.2,
        }.items()
        for bin in ("8-9", "9-10")
    ]  # fmt: skip
    return pd.DataFrame(rows)


def _lightness(colour: str) -> float:
    """CIE 1976 L* of an sRGB colour (IEC 61966-2-1), 0 black to 100 white."""
    channels = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    luminance = float(np.dot([0.2126, 0.7152, 0.0722], linear))
    return 116 * luminance ** (1 / 3) - 16 if luminance > 0.008856 else 903.3 * luminance


# ten units of L* are about a step of the Munsell scale of greys: plainly apart side by side
@pytest.mark.parametrize("marks", [tuple(FATE_MARKS.values()), THRESHOLD_MARKS])
def test_marks_stay_apart_in_grey(marks):
    for one, other in itertools.combinations(marks, 2):
        assert abs(_lightness(one.colour) - _lightness(other.colour)) > 9.0, (one, other)


@pytest.mark.parametrize("marks", [tuple(FATE_MARKS.values()), THRESHOLD_MARKS])
def test_marks_stay_apart_without_any_colour(marks):
    assert len({(mark.shape, mark.open) for mark in marks}) == len(marks)
    assert len({mark.line for mark in marks}) == len(marks)


@pytest.mark.parametrize("name", FROM_A_TABLE)
@pytest.mark.parametrize("kind", ["dataframe", "astropy"])
def test_each_figure_draws_on_the_axes_it_is_given(screened, name, kind):
    from astropy.table import Table
    from matplotlib.figure import Figure

    table = screened
    if kind == "astropy":
        table = embersift.screen(Table.from_pandas(population(200, seed=3)), RECIPE)
    ax = Figure().add_subplot()
    assert FIGURES[name].function(table, RECIPE, observation="wide", threshold=5.0, ax=ax) is ax
    assert ax.get_xlabel()
    assert ax.has_data()


def _drawn(ax, label):
    (found,) = [c for c in ax.collections if c.get_label() == label]
    return np.asarray(found.get_offsets())


def test_light_shows_every_accreting_hole_once(screened):
    ax = light(screened, RECIPE, observation="deep", threshold=2.0)
    fates = screened["fate_deep_2"].astype(str)
    visible = screened[fates == "visible"]
    points = _drawn(ax, "visible")
    assert len(points) == len(visible)
    np.testing.assert_allclose(points[:, 0], np.log10(visible["mstar"]))
    np.testing.assert_allclose(points[:, 1], np.log10(visible["lx_agn"]))
    seen = ~fates.isin(["unusable", "no_black_hole", "dormant"])
    assert sum(len(c.get_offsets()) for c in ax.collections) == seen.sum()


def test_masses_includes_dormant_holes(screened):
    ax = masses(screened, RECIPE, observation="deep", threshold=2.0)
    assert len(_drawn(ax, "dormant")) == (screened["fate_deep_2"].astype(str) == "dormant").sum()


@pytest.mark.parametrize("criterion", ["agn", "total"])
def test_a_threshold_line_parts_outshone_from_the_rest(criterion):
    recipe = RECIPE.with_settings({"screen.criterion": criterion, "screen.floor": 0})
    table = embersift.screen(population(900, seed=3), recipe)
    ax = contrast(table, recipe, observation="deep", threshold=2.0)
    # with the criterion "total", 2 times the background in all is 1 time from the black hole
    least = np.log10(2.0 if criterion == "agn" else 1.0)
    visible, outshone = _drawn(ax, "visible"), _drawn(ax, "outshone")
    assert (visible[:, 1] - visible[:, 0] >= least - 1e-9).all()
    assert (outshone[:, 1] - outshone[:, 0] < least + 1e-9).all()
    lines = [line for line in ax.get_lines() if len(line.get_xdata()) == 2]
    gaps = [float(np.mean(line.get_ydata() - line.get_xdata())) for line in lines]
    assert any(gap == pytest.approx(least, abs=1e-9) for gap in gaps)


@pytest.mark.parametrize(("rows", "shaded"), [(900, False), (12000, True)])
def test_a_crowd_is_shaded_and_a_few_are_drawn_one_by_one(rows, shaded):
    table = embersift.screen(population(rows, seed=3), RECIPE)
    fates = table["fate_deep_2"].astype(str)
    holes = (~fates.isin(["unusable", "no_black_hole"])).sum()
    assert (holes > CROWD) == shaded
    ax = masses(table, RECIPE)
    cells = [c for c in ax.collections if c.get_array() is not None and len(c.get_array()) > 100]
    marks = sum(len(c.get_offsets()) for c in ax.collections if c.get_array() is None)
    if shaded:
        (density,) = cells
        assert density.get_array().sum() == holes  # every hole is in one cell
        assert marks < 1000
    else:
        assert not cells
        assert marks == holes


def test_a_shaded_drawing_is_made_of_lines_alone(tmp_path):
    # a page that forbids images shows every part of it
    table = embersift.screen(population(12000, seed=3), RECIPE)
    text = draw(table, RECIPE, "masses", tmp_path / "a.svg").read_text(encoding="utf-8")
    assert "<image" not in text
    assert "data:" not in text


def test_hidden_fractions_and_intervals_are_those_of_the_tally(screened):
    ax = hidden(screened, RECIPE, observation="deep")
    counts = embersift.tally(screened, RECIPE).query("observation == 'deep'")
    bins = len(RECIPE.tally.edges) - 1
    assert len(ax.containers) == len(RECIPE.screen.thresholds)
    for bars, threshold in zip(ax.containers, RECIPE.screen.thresholds, strict=True):
        here = counts[(counts["threshold"] == threshold) & counts["bin"].str.contains("-")]
        points, _, (whiskers,) = bars
        assert len(points.get_ydata()) == bins
        np.testing.assert_allclose(points.get_ydata(), here["hidden_fraction"])
        known = here["black_holes"].to_numpy() > 0
        ends = np.array([s[:, 1] for s, k in zip(whiskers.get_segments(), known, strict=True) if k])
        np.testing.assert_allclose(ends, here.loc[known, ["hidden_low", "hidden_high"]])


def test_causes_add_up_to_every_hidden_hole(screened):
    ax = causes(screened, RECIPE, observation="deep", threshold=2.0)
    counts = embersift.tally(screened, RECIPE).query(
        "observation == 'deep' and threshold == 2 and bin.str.contains('-')"
    )
    tops = np.max([[bar.get_y() + bar.get_height() for bar in c] for c in ax.containers], axis=0)
    np.testing.assert_allclose(tops[counts["hidden"] > 0], 1.0)
    (dormant,) = [c for c in ax.containers if c.get_label() == "dormant"]
    known = (counts["hidden"] > 0).to_numpy()
    np.testing.assert_allclose(
        [bar.get_height() for bar in np.array(dormant)[known]],
        (counts["dormant"] / counts["hidden"])[known],
    )


def test_flux_bars_hold_every_accreting_hole(screened):
    ax = fluxes(screened, RECIPE, observation="wide")
    seen = ~screened["fate_wide_2"].astype(str).isin(["unusable", "no_black_hole", "dormant"])
    assert sum(bar.get_height() for c in ax.containers for bar in c) == seen.sum()
    assert any(
        np.allclose(line.get_xdata(), np.log10(3e-15)) for line in ax.get_lines()
    )  # the limit


@pytest.mark.parametrize("flux_of", ["agn", "total"])
@pytest.mark.parametrize("limit", [0.0, 1e-17, 1e-15, 3e-14])
def test_the_curve_is_what_screening_at_that_limit_gives(flux_of, limit):
    # oracle: the chain itself, run again with the other limit
    recipe = RECIPE.with_settings({"screen.flux_of": flux_of})
    table = population(900, seed=3)
    view = Reading.of(embersift.screen(table, recipe), recipe).view("wide", 2.0)
    other = recipe.with_observations(
        [embersift.recipe.Observation("wide", view.observation.band, limit)]
    )
    fates = embersift.screen(table, other)["fate_wide_5"].astype(str)
    holes = ~fates.isin(["unusable", "no_black_hole"])
    expected = 1.0 - (fates[holes] == "visible").mean()
    assert curve(view, np.array([limit]), 5.0)[0] == pytest.approx(expected, abs=1e-12)


def test_a_deeper_limit_never_hides_more(screened):
    ax = depth(screened, RECIPE, observation="deep")
    lines = [line for line in ax.get_lines() if str(line.get_label()).startswith("threshold")]
    assert len(lines) == len(RECIPE.screen.thresholds)
    shares = np.array([line.get_ydata() for line in lines])
    assert (np.diff(shares, axis=1) >= 0).all()
    assert (np.diff(shares, axis=0) >= 0).all()  # nor does a lower threshold
    assert shares[:, -1] == pytest.approx(1.0)


def test_weights_count_in_curves():
    table = population(900, seed=3).assign(weight=lambda t: np.where(t["mstar"] > 1e9, 3.0, 0.5))
    screened = embersift.screen(table, RECIPE)
    counts = embersift.tally(screened, RECIPE).query("observation == 'deep' and threshold == 2")
    view = Reading.of(screened, RECIPE).view("deep", 2.0)
    got = curve(view, np.array([1e-16]), 2.0)[0]
    assert got == pytest.approx(counts["hidden"].sum() / counts["black_holes"].sum())


def test_laws_are_ranked_by_their_hidden_fraction(spread):
    ax = ranking(spread, embersift.Recipe())
    # medians over the other kind, mean of the bins 0.05 above: worked out by hand
    order = [tick.get_text() for tick in ax.get_yticklabels()]
    assert order == ["constant", "lusso2012", "duras2020", "two-regime"]
    marks = [line for line in ax.get_lines() if line.get_linestyle() == "None"]
    np.testing.assert_allclose([m.get_xdata()[0] for m in marks], [0.3, 0.4, 0.5, 0.6])


def test_one_bin_of_a_spread_can_be_chosen(spread):
    ax = ranking(spread, bin="8-9")
    marks = [line for line in ax.get_lines() if line.get_linestyle() == "None"]
    np.testing.assert_allclose([m.get_xdata()[0] for m in marks], [0.35, 0.45, 0.55, 0.65])
    with pytest.raises(CatalogueError, match="it has 8-9, 9-10"):
        ranking(spread, bin="7-8")


def test_another_table_is_no_spread(screened):
    with pytest.raises(CatalogueError, match="embersift spread"):
        ranking(screened)


@pytest.mark.parametrize("ending", ["svg", "pdf", "png"])
def test_the_same_table_gives_the_same_bytes(screened, tmp_path, ending):
    one = draw(screened, RECIPE, "causes", tmp_path / f"one.{ending}")
    two = draw(screened, RECIPE, "causes", tmp_path / f"two.{ending}")
    assert one.read_bytes() == two.read_bytes()
    assert b"<dc:date>" not in one.read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == [f"one.{ending}", f"two.{ending}"]


@pytest.mark.parametrize("name", FIGURES)
def test_each_figure_is_drawn_by_name(screened, spread, name, tmp_path):
    table = spread if name == "ranking" else screened
    out = draw(table, RECIPE, name, tmp_path / f"{name}.png")
    assert out.read_bytes().startswith(b"\x89PNG")


def test_an_unknown_figure_names_the_nearest(screened, tmp_path):
    with pytest.raises(RecipeError, match="hidden"):
        draw(screened, RECIPE, "hiden", tmp_path / "a.png")


def test_an_unknown_ending_names_the_known_ones(screened, tmp_path):
    with pytest.raises(OutputError, match=r"\.png, \.pdf, \.svg"):
        draw(screened, RECIPE, "hidden", tmp_path / "a.gif")


def test_an_existing_file_is_not_replaced_unasked(screened, tmp_path):
    out = tmp_path / "a.svg"
    out.write_text("mine")
    with pytest.raises(OutputError, match="overwrite"):
        draw(screened, RECIPE, "hidden", out)
    assert out.read_text() == "mine"
    draw(screened, RECIPE, "hidden", out, overwrite=True)
    assert "<svg" in out.read_text(encoding="utf-8")


def test_a_verdict_that_is_not_there_is_named_with_those_that_are(screened):
    with pytest.raises(CatalogueError, match=r"no column fate_deep_3\..*fate_deep_1"):
        light(screened, RECIPE, threshold=3.0)
    with pytest.raises(RecipeError, match="deep"):
        light(screened, RECIPE, observation="deeep")


def test_a_table_that_was_not_screened_says_so():
    with pytest.raises(CatalogueError, match="not a screened table"):
        light(population(20, seed=1), RECIPE)


def test_without_matplotlib_the_message_says_what_to_install(screened, tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    with pytest.raises(FiguresMissing, match=r"pip install 'embersift\[figures\]'"):
        draw(screened, RECIPE, "hidden", tmp_path / "a.png")


@pytest.mark.parametrize("name", FROM_A_TABLE)
def test_a_table_without_a_single_hole_still_draws(name, tmp_path):
    table = population(40, seed=1).assign(mbh=0.0, mdot=0.0)
    draw(embersift.screen(table, RECIPE), RECIPE, name, tmp_path / "a.svg")


def test_law_names_and_units_stand_on_the_axes(screened):
    ax = light(screened, RECIPE)
    assert "duras2020" in ax.get_ylabel()
    assert "erg s" in ax.get_ylabel()
    assert "lehmer2021 + lehmer2019 + mineo2012gas" in contrast(screened, RECIPE).get_xlabel()


@pytest.mark.parametrize(
    ("value", "label"),
    [(1e39, "$10^{39}$"), (3.5e-16, r"$3.5\times10^{-16}$"), (20.0, "20"), (0.0, "0")],
)
def test_powers_of_ten_are_written_as_such(value, label):
    assert power(value) == label
