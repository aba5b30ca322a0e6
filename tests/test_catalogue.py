"""Reading a catalogue's columns: what is understood, what is marked, what stops the run."""

import numpy as np
import pandas as pd
import pytest
from astropy import units as u
from astropy.table import MaskedColumn, QTable, Table

from embersift.catalogue import column_names, layout, numbers
from embersift.errors import CatalogueError
from embersift.plausibility import suspicion
from embersift.problems import UNUSABLE, problem_text
from embersift.recipe import Recipe
from embersift.tables import units_of


def galaxies(rows=8, **changes):
    """A plain catalogue that is right in every respect."""
    columns = {
        "mstar": np.geomspace(1e8, 1e10, rows),
        "sfr": np.geomspace(0.01, 1.0, rows),
        "oh12": np.linspace(7.8, 8.7, rows),
        "mbh": np.geomspace(1e4, 1e6, rows),
        "mdot": np.geomspace(1e-7, 1e-4, rows),
        "redshift": np.full(rows, 0.05),
    }
    return pd.DataFrame(columns | changes)


def take(table, recipe=None):
    plan = layout(column_names(table), units_of(table), recipe or Recipe(), "galaxies.csv")
    return plan.take(table)


def problems(table, recipe=None):
    return [problem_text(int(bits)) for bits in take(table, recipe).problems]


def with_value(column, value, row=2):
    table = galaxies()
    table[column] = table[column].astype(object)
    table.loc[row, column] = value
    return table


@pytest.mark.parametrize(
    ("column", "value", "reason", "unusable"),
    [
        ("mstar", "n/c", "mstar: not a number", True),
        ("mstar", "", "mstar: missing", True),
        ("mstar", None, "mstar: missing", True),
        ("mstar", np.nan, "mstar: missing", True),
        ("mstar", np.inf, "mstar: not finite", True),
        ("mstar", -1e9, "mstar: not positive", True),
        ("mstar", 0, "mstar: not positive", True),
        ("sfr", -0.1, "sfr: negative", True),
        ("sfr", 0, "", False),
        ("sfr", "inf", "sfr: not finite", True),
        ("mdot", -1e-5, "mdot: negative", True),
        ("mdot", np.nan, "mdot: missing", True),
        ("mdot", 0, "", False),
        ("mbh", np.nan, "", False),
        ("mbh", -1, "mbh: negative", True),
        ("mbh", "x" * 1_000_000, "mbh: not a number", True),
        ("redshift", -0.1, "redshift: negative", True),
        ("redshift", 0, "redshift: zero without a distance", True),
        ("redshift", 2000, "redshift: above 1000", True),
        ("oh12", np.nan, "oh12: missing", False),
        ("oh12", "low", "oh12: not a number", False),
    ],
)
def test_one_bad_value_marks_its_row_with_the_reason_and_no_other(column, value, reason, unusable):
    table = with_value(column, value)
    expected = [""] * len(table)
    expected[2] = reason
    if column == "mbh" and reason == "" and value != value:
        expected[2] = "mdot: positive without a black hole"
    assert problems(table) == expected
    marked = (take(table).problems & UNUSABLE) > 0
    assert marked.tolist() == [row == 2 and unusable for row in range(len(table))]


def test_a_row_may_have_several_problems():
    table = galaxies()
    table.loc[0, ["mstar", "sfr"]] = [-1.0, np.nan]
    assert problems(table)[0] == "mstar: not positive; sfr: missing"


def test_sentinels_of_the_recipe_are_missing_values():
    table = galaxies()
    table.loc[1, "sfr"] = -99.0
    table.loc[3, "oh12"] = -99.0
    recipe = Recipe().with_settings({"catalogue.missing": [-99]})
    assert problems(table, recipe)[1] == "sfr: missing"
    assert problems(table, recipe)[3] == "oh12: missing"


def test_masked_quantities_and_columns_are_missing_where_masked():
    table = QTable({name: np.asarray(values) for name, values in galaxies(4).items()})
    table["mstar"] = table["mstar"] * 1e-10 * u.Unit(1e10 * u.Msun)
    table["sfr"] = MaskedColumn(np.ones(4), mask=[True, False, False, False])
    sources = take(table)
    np.testing.assert_allclose(sources.mstar, galaxies(4)["mstar"], rtol=1e-12)
    assert problem_text(int(sources.problems[0])) == "sfr: missing"


def test_text_columns_are_read_like_numeric_ones():
    # what a CSV reader hands over when it keeps every field to the letter
    table = galaxies()
    as_text = table.astype(str)
    for one, other in zip(take(table), take(as_text), strict=True):
        np.testing.assert_array_equal(one, other)


def test_representations_of_one_catalogue_agree():
    table = galaxies()
    h = 0.7
    other = pd.DataFrame(
        {
            "M": table["mstar"] / 1e10 * h,
            "lsfr": np.log10(table["sfr"]),
            "Z": 10 ** (table["oh12"] - 8.69),
            "Mbh": np.log10(table["mbh"]),
            "rate": table["mdot"] * 1e9,
            "z": table["redshift"],
        }
    )
    columns = {
        "mstar": {"column": "M", "unit": "1e10 Msun / littleh"},
        "sfr": {"column": "lsfr", "unit": "dex(Msun / yr)"},
        "metallicity": "Z",
        "mbh": {"column": "Mbh", "unit": "dex(Msun)"},
        "mdot": {"column": "rate", "unit": "Msun / Gyr"},
        "redshift": "z",
    }
    recipe = Recipe.from_dict({"catalogue": {"columns": columns, "h": h}})
    for one, same in zip(take(table), take(other, recipe), strict=True):
        np.testing.assert_allclose(one, same, rtol=1e-12)


def test_mass_fractions_need_their_solar_value_and_use_it():
    table = galaxies().drop(columns="oh12").assign(metallicity=0.0067)
    recipe = Recipe().with_settings({"catalogue.metallicity": "mass_fraction"})
    with pytest.raises(CatalogueError, match="solar_mass_fraction"):
        take(table, recipe)
    recipe = recipe.with_settings({"catalogue.solar_mass_fraction": 0.0134})
    # half of solar is 0.301 dex below 8.69
    np.testing.assert_allclose(take(table, recipe).oh12, 8.69 - np.log10(2), rtol=1e-12)


def test_a_stated_distance_wins_and_gives_the_redshift_that_belongs_to_it():
    table = galaxies().assign(distance=222.289055)
    both = take(table)
    np.testing.assert_allclose(both.distance, 222.289055)
    alone = take(table.drop(columns="redshift"))
    np.testing.assert_allclose(alone.z, 0.05, rtol=1e-6)


def test_nearby_galaxies_may_approach_us_when_their_distance_is_stated():
    table = galaxies().assign(distance=3.6, redshift=-0.0001)
    sources = take(table)
    assert not (sources.problems & UNUSABLE).any()
    assert (sources.z > 0).all()
    assert set(problems(table)) == {"redshift: not usable, taken from the distance"}


@pytest.mark.parametrize(
    ("value", "reason"), [(-0.1, "negative"), (np.nan, "missing"), (2000.0, "above 1000")]
)
def test_a_bad_redshift_beside_a_blank_distance_keeps_its_own_reason(value, reason):
    table = galaxies().assign(distance=222.0)
    table.loc[2, ["distance", "redshift"]] = [np.nan, value]
    assert problems(table)[2] == f"redshift: {reason}"


def test_distance_and_redshift_that_disagree_are_noted():
    assert set(problems(galaxies().assign(distance=600.0))) == {
        "distance: differs from that of the redshift"
    }


def test_a_fixed_redshift_replaces_the_column_and_says_so():
    recipe = Recipe().with_settings({"catalogue.redshift": 0.1})
    plan = layout(list(galaxies().columns), {}, recipe)
    assert plan.take(galaxies()).z.tolist() == [0.1] * 8
    assert "was not used" in plan.cautions[0]


def test_missing_columns_are_named_with_the_nearest_there_are():
    table = galaxies().rename(columns={"mstar": "m_star", "sfr": "SFR"}).drop(columns="redshift")
    with pytest.raises(CatalogueError) as stop:
        take(table)
    text = str(stop.value)
    assert "galaxies.csv" in text
    assert "mstar [Msun] (Did you mean m_star?)" in text
    assert "sfr [Msun / yr] (Did you mean SFR?)" in text
    assert "redshift or distance [Mpc]" in text


def test_a_mapped_column_that_is_not_there_is_named():
    recipe = Recipe().with_settings({"catalogue.columns.mstar": "Mstar_tot"})
    with pytest.raises(CatalogueError, match="'Mstar_tot', which is not there"):
        take(galaxies(), recipe)


LOOKS = [
    ({"mstar": np.linspace(8, 10, 8)}, "log10", 'unit = "dex(Msun)"'),
    ({"mstar": np.linspace(0.01, 2, 8)}, "1e10 Msun", 'unit = "1e10 Msun"'),
    ({"mbh": np.linspace(4, 6, 8)}, "log10", 'unit = "dex(Msun)"'),
    ({"mbh": np.geomspace(1e-6, 1e-4, 8)}, "1e10 Msun", 'unit = "1e10 Msun"'),
    ({"sfr": np.linspace(-2, 0.5, 8)}, "log10", 'unit = "dex(Msun / yr)"'),
    ({"mdot": np.linspace(-8, -4, 8)}, "log10", 'unit = "dex(Msun / yr)"'),
    ({"mdot": np.geomspace(1e2, 1e5, 8)}, "Msun / Gyr", "Msun / Gyr"),
    ({"mdot": np.geomspace(1e19, 1e22, 8)}, "g / s", "g / s"),
    ({"oh12": np.full(8, 0.02)}, "metal mass fraction", "mass_fraction"),
    ({"oh12": np.linspace(0.2, 1.2, 8)}, "solar units", "map the column as metallicity"),
    ({"oh12": np.linspace(-1, 0, 8)}, "log10", '"dex"'),
    ({"redshift": np.full(8, 15000.0)}, "velocity", "299792.458"),
    ({"nh": np.linspace(20, 23, 8)}, "log10", "dex(cm-2)"),
    ({"nh": np.linspace(0.1, 10, 8)}, "1e22 cm-2", "1e22 cm-2"),
]


@pytest.mark.parametrize(("changes", "looks", "cure"), LOOKS)
def test_a_column_that_cannot_be_what_it_claims_stops_the_run(changes, looks, cure):
    table = galaxies(**changes)
    plan = layout(list(table.columns), {}, Recipe(), "galaxies.csv")
    with pytest.raises(CatalogueError) as stop:
        suspicion(plan, table)
    text = str(stop.value)
    assert "galaxies.csv" in text
    assert looks in text
    assert cure in text
    quantity = next(iter(changes))
    trusted = Recipe().with_settings({"catalogue.trusted": [quantity, "mdot"]})
    suspicion(layout(list(table.columns), {}, trusted), table)


@pytest.mark.parametrize(
    ("quantity", "unit"),
    [("mstar", "dex(Msun)"), ("mdot", "dex(Msun / yr)"), ("sfr", "dex(Msun / yr)")],
)
def test_linear_values_declared_as_logs_stop_the_run(quantity, unit):
    table = galaxies()
    if quantity != "mstar":
        table[quantity] = np.linspace(20, 200, 8)
    recipe = Recipe().with_settings(
        {f"catalogue.columns.{quantity}": {"column": quantity, "unit": unit}}
    )
    with pytest.raises(CatalogueError, match="declared as log10"):
        suspicion(layout(list(table.columns), {}, recipe), table)


def test_a_right_catalogue_raises_no_suspicion():
    suspicion(layout(list(galaxies().columns), {}, Recipe()), galaxies())


def test_one_negative_value_in_a_short_table_is_a_bad_row_not_a_column_of_logs():
    table = galaxies(3)
    table.loc[0, "sfr"] = -0.5
    suspicion(layout(list(table.columns), {}, Recipe()), table)
    assert problems(table)[0] == "sfr: negative"


def test_a_column_of_vectors_is_refused_by_name():
    table = Table({name: np.asarray(values) for name, values in galaxies(3).items()})
    table["mstar"] = np.ones((3, 2))
    with pytest.raises(CatalogueError, match=r"'mstar'.*several values a row"):
        take(table)


def test_file_units_are_used_and_the_recipe_overrides_them_aloud():
    table = Table({name: np.asarray(values) for name, values in galaxies(3).items()})
    table["mstar"] = np.asarray(galaxies(3)["mstar"]) / 1e10
    table["mstar"].unit = u.Unit("1e10 Msun")
    np.testing.assert_allclose(take(table).mstar, galaxies(3)["mstar"])
    recipe = Recipe().with_settings(
        {
            "catalogue.columns.mstar": {"column": "mstar", "unit": "1e10 Msun / littleh"},
            "catalogue.h": 0.5,
        }
    )
    plan = layout(table.colnames, units_of(table), recipe)
    np.testing.assert_allclose(plan.take(table).mstar, 2 * galaxies(3)["mstar"])
    assert "the recipe's was used" in plan.cautions[0]


def test_numbers_of_every_kind_of_column():
    for column in (
        pd.Series([1, 2, None], dtype="Int64"),
        pd.Series(["1", " 2e0 ", "NA"]),
        pd.Series(["1", "2", ""], dtype="category"),
        np.array(["1", "2", "--"]),
        np.array([b"1", b"2", b""]),
        np.ma.MaskedArray([1.0, 2.0, 9.0], mask=[0, 0, 1]),
        u.Quantity([1.0, 2.0, np.nan], "Msun"),
    ):
        got = numbers(column)
        np.testing.assert_array_equal(got.values, [1.0, 2.0, np.nan])
        assert got.missing.tolist() == [False, False, True]
        assert not got.not_a_number.any()
