"""How far laws and their errors move the hidden fraction."""

from __future__ import annotations

from dataclasses import replace
from types import MappingProxyType

import numpy as np
import pandas as pd
import pytest

import embersift
from embersift import mock
from embersift.chain import Chain
from embersift.draws import coefficient_draws
from embersift.errors import CatalogueError, LawError, RecipeError
from embersift.host import Background
from embersift.laws import BACKGROUND, BOLOMETRIC
from embersift.recipe import Recipe
from embersift.screening import tally
from embersift.spread import (
    CHOICES,
    Combination,
    combinations,
    default_combinations,
    own_combination,
    spread,
)

TABLE = mock.population(3000, 4)
FEW = {
    "accretion": ["two-regime", "constant"],
    "bolometric": ["duras2020", "lopez2024", "shen2020"],
    "binaries": ["lehmer2021+lehmer2019", "lehmer2019"],
    "gas": ["mineo2012gas", "none"],
}
DEEP = {"name": "deep", "band": [0.5, 2.0], "flux_limit": 2e-17, "galactic_nh": 2e20}
RECIPES = {
    "default": Recipe(),
    "observation": Recipe.from_dict({"observation": [DEEP]}),
    "circle": Recipe.from_dict({"observation": [DEEP | {"aperture": 2.0}]}),
    "total": Recipe.from_dict(
        {"observation": [DEEP | {"aperture": 2.0}, {"name": "hard", "band": [2.0, 7.0]}],
         "screen": {"criterion": "total", "flux_of": "total", "floor": 0}}
    ),
}  # fmt: skip


def fraction(recipe: Recipe, table: pd.DataFrame = TABLE) -> list[float]:
    return tally(embersift.screen(table, recipe), recipe)["hidden_fraction"].tolist()


def shares(table: pd.DataFrame, one: Combination, column: str = "hidden_fraction") -> list[float]:
    here = np.logical_and.reduce([table[kind] == getattr(one, kind) for kind in CHOICES])
    return table.loc[here & (table["bin"] != "all"), column].tolist()


def same(one: object, other: object) -> bool:
    return np.array_equal(np.asarray(one), np.asarray(other), equal_nan=True)


@pytest.mark.parametrize("name", RECIPES)
def test_central_values_are_those_of_screen_and_tally(name):
    recipe = RECIPES[name]
    found = spread(TABLE, recipe, choices=FEW, draws=1)
    for one in (own_combination(recipe), Combination("constant", "shen2020", "lehmer2019", "none")):
        table = found.table()
        counted = tally(embersift.screen(TABLE, one.recipe(recipe)), one.recipe(recipe))
        for column in ("hidden_fraction", "hidden_low", "hidden_high", "black_holes"):
            assert same(shares(table, one, column), counted[column])


def test_central_values_of_a_weighted_catalogue_are_those_of_tally():
    weighted = TABLE.assign(weight=np.random.default_rng(1).uniform(0.1, 3.0, len(TABLE)))
    found = spread(weighted, Recipe(), choices=FEW, draws=3)
    own = own_combination(Recipe())
    assert same(shares(found.table(), own), fraction(Recipe(), weighted))


def test_bin_all_holds_every_black_hole():
    found = spread(TABLE, Recipe(), choices=FEW, draws=1).table()
    whole = found[found["bin"] == "all"]
    parts = found[found["bin"] != "all"].groupby([*CHOICES, "threshold"], sort=False)
    assert whole["black_holes"].tolist() == parts["black_holes"].sum().tolist()
    assert same(whole["hidden_fraction"], parts["hidden"].sum() / parts["black_holes"].sum())


@pytest.mark.parametrize("name", [*RECIPES, "weighted"])
def test_draw_is_a_screening_with_the_drawn_coefficients(name, monkeypatch):
    """The shared parts give what the whole chain gives, one combination and draw at a time."""
    recipe, table = RECIPES.get(name, Recipe()), TABLE
    if name == "weighted":
        # by whole numbers, so that sums are exact in any order
        table = TABLE.assign(weight=np.arange(len(TABLE)) % 5)
    found = spread(table, recipe, choices=FEW, draws=4, seed=11)
    plain_light = Background.light
    for one in (
        own_combination(recipe),
        Combination("constant", "lopez2024", "lehmer2019", "none"),
    ):
        at = found.combinations.every.index(one)
        for draw in (0, 3):
            law = BOLOMETRIC[one.bolometric]
            correction = coefficient_draws(law, 4, 11)[draw]
            host = {n: coefficient_draws(BACKGROUND[n], 4, 11)[draw]
                    for n in ("lehmer2021", "lehmer2019")}  # fmt: skip
            with monkeypatch.context() as patch:
                patch.setattr(Chain, "_correction_values", lambda self, c=correction: c)
                patch.setattr(
                    Background,
                    "light",
                    lambda self, s, values=None, h=host: plain_light(self, s, h),
                )
                expected = fraction(one.recipe(recipe), table)
            got = found.fractions[draw, at, :, :-1]
            assert same(got.ravel(), expected)


def test_combination_draws_the_same_in_any_company():
    """Common random numbers: bit for bit, whatever else is compared."""
    one = Combination("constant", "lopez2024", "lehmer2019", "none")
    alone = spread(TABLE, choices={k: [getattr(one, k)] for k in CHOICES}, draws=20)
    company = spread(TABLE, choices=FEW, draws=20)
    at = company.combinations.every.index(one)
    assert same(alone.fractions[:, 0], company.fractions[:, at])
    assert np.nanstd(alone.fractions[:, 0, 0, -1]) > 0.0


def test_laws_without_errors_do_not_spread():
    # neither law has a published error known to us
    found = spread(
        TABLE, draws=5,
        choices={"accretion": ["two-regime", "xie2012"], "bolometric": ["shen2020", "marconi2004"],
                 "binaries": ["aird2017", "mineo2012+gilfanov2004"], "gas": ["mineo2012gas"]},
    )  # fmt: skip
    table = found.table()
    assert found.drawn == {}
    for column in ("spread_low", "spread_median", "spread_high"):
        assert same(table[column], table["hidden_fraction"])


def without_light(host, c):
    """A law of no number below 1e9 Msun, and of no light above."""
    light = np.where(host.mstar < 1e9, np.nan, 0.0)
    return {"hmxb": light, "lmxb": light.copy()}


@pytest.mark.parametrize("formula", [BACKGROUND["lehmer2019"].formula, without_light])
@pytest.mark.parametrize("criterion", ["agn", "total"])
def test_vanishing_errors_do_not_spread(formula, criterion, monkeypatch):
    """Also where a law gives no number, or no light, and where no light of the hole is left."""
    law = BACKGROUND["lehmer2019"]
    tiny = {n: replace(c, minus=1e-14, plus=1e-14) for n, c in law.coefficients.items()}
    patched = replace(law, coefficients=tiny, formula=formula)
    monkeypatch.setattr(
        "embersift.host.BACKGROUND", MappingProxyType({**BACKGROUND, "lehmer2019": patched})
    )
    # below 0.5 keV such a column leaves exactly nothing
    table = TABLE.assign(nh=np.where(np.arange(len(TABLE)) % 2, 1e26, 0.0))
    soft = {"name": "soft", "band": [0.3, 0.5]}
    recipe = Recipe.from_dict({"observation": [soft], "screen": {"criterion": criterion}})
    found = spread(
        table, recipe, draws=3,
        choices={"accretion": "two-regime", "bolometric": "shen2020", "binaries": "lehmer2019",
                 "gas": FEW["gas"]},
    )  # fmt: skip
    assert set(found.drawn) == {"binaries lehmer2019"}
    central = np.stack([frame["hidden_fraction"] for frame in found.tallies])
    assert same(found.fractions.reshape(3, *central.shape), np.stack([central] * 3))


def test_fractions_are_fractions():
    found = spread(TABLE, draws=10)
    table = found.table()
    assert len(found.combinations.every) == 200
    held = table[table["black_holes"] > 0]
    ordered = ["hidden_low", "hidden_fraction", "hidden_high"]
    assert (np.diff(held[ordered], axis=1) >= 0.0).all()
    assert (np.diff(held[["spread_low", "spread_median", "spread_high"]], axis=1) >= 0.0).all()
    assert held[[*ordered, "spread_low", "spread_high"]].to_numpy().min() >= 0.0
    assert held[[*ordered, "spread_low", "spread_high"]].to_numpy().max() <= 1.0
    assert table.groupby(list(CHOICES))["own"].first().sum() == 1


def test_result_does_not_depend_on_order_or_threads():
    recipe = RECIPES["observation"]
    table = mock.population(45_000, 8)
    first = spread(table, recipe, choices=FEW, draws=2, threads=1)
    for other in (
        spread(table, recipe, choices=FEW, draws=2, threads=3),
        spread(table.sample(frac=1.0, random_state=1), recipe, choices=FEW, draws=2, threads=2),
    ):
        assert same(first.fractions, other.fractions)
        pd.testing.assert_frame_equal(first.table(), other.table())


def test_fractions_do_not_depend_on_the_chunk(monkeypatch):
    whole = spread(TABLE, choices=FEW, draws=3)
    for size in (1, 97, 1000):
        part = TABLE if size > 1 else TABLE.iloc[:60]
        expected = whole if size > 1 else spread(part, choices=FEW, draws=3)
        with monkeypatch.context() as patch:
            patch.setattr("embersift.spread.CHUNK", size)
            assert same(spread(part, choices=FEW, draws=3).fractions, expected.fractions)


# Far above any background, fed at 1e-3 of the Eddington rate: with the constant law the X-rays are
# 0.01 L_Edd / k, above the floor; two-regime is a hundred times fainter, below it. k is about 10
# in both corrections, and neither binaries nor gas matter in a galaxy without stars to speak of.
FAINT = pd.DataFrame(
    {"mstar": [1.0] * 40, "sfr": [0.0] * 40, "mbh": [1e5] * 40, "oh12": [8.0] * 40,
     "mdot": [2.2e-6] * 40, "redshift": [0.05] * 40}
)  # fmt: skip


def test_ranking_names_the_one_choice_that_matters():
    recipe = Recipe().with_settings({"catalogue.trusted": ["mstar"], "tally.edges": [-1, 12]})
    found = spread(FAINT, recipe, choices=FEW, draws=1)
    ranked = found.ranking()
    for _, here in ranked.groupby("threshold"):
        first = here.iloc[0]
        assert (first["rank"], first["choice"], first["law"]) == (1, "accretion", "constant")
        assert first["instead_of"] == "two-regime"
        assert first[["change", "change_low", "change_high"]].tolist() == [-1.0, -1.0, -1.0]
        assert first["combinations"] == 12
        assert (here["change"].iloc[1:] == 0.0).all()
    limits = found.between_laws().query("bin == 'all' and threshold == 2").iloc[0]
    assert limits[["own", "lowest", "median", "highest"]].tolist() == [1.0, 0.0, 0.5, 1.0]
    assert limits["combinations"] == 24


def test_ranking_is_a_mean_of_differences():
    found = spread(TABLE, choices=FEW, draws=1)
    table = found.table()
    whole = table[(table["bin"] == "all") & (table["threshold"] == 2)]
    # on a full grid the mean of the differences is the difference of the means
    means = whole.groupby("bolometric")["hidden_fraction"].mean()
    ranked = found.ranking().query("threshold == 2").set_index("law")["change"]
    assert ranked["shen2020"] == pytest.approx(means["shen2020"] - means["duras2020"], abs=1e-12)
    assert set(found.ranking()["choice"]) == set(CHOICES)
    with pytest.raises(RecipeError, match="no bin"):
        found.ranking("9-9.6")


# --- which combinations -----------------------------------------------------------------------


def test_default_set_is_200_combinations_with_the_recipes_own_first():
    every = default_combinations(Recipe())
    assert len(every) == len(set(every)) == 200
    assert every[0] == own_combination(Recipe())
    other = Recipe().with_settings({"agn.accretion": "isco"})
    assert len(default_combinations(other)) == 240
    assert default_combinations(other)[0].accretion == "isco"


def test_a_single_law_may_be_given_as_a_word():
    plan = combinations(Recipe(), {"accretion": "constant", "gas": "none"})
    assert len(plan.every) == 20
    assert plan.reference.accretion == "constant"  # the recipe's own is not among them
    assert plan.reference.bolometric == plan.own.bolometric


def test_total_law_is_never_added_to_a_gas_law():
    plan = combinations(Recipe(), {"binaries": ["mineo2014", "lehmer2019"]})
    assert {one.gas for one in plan.every if one.binaries == "mineo2014"} == {"none"}
    assert any("mineo2014" in why and "counted twice" in why for why in plan.skipped)
    with pytest.raises(RecipeError, match="No combination"):
        combinations(Recipe(), {"binaries": ["mineo2014"], "gas": ["mineo2012gas"]})


def test_recipe_of_a_total_law_is_one_of_the_combinations():
    recipe = Recipe.from_dict({"background": {"total": "mineo2014"}})
    choices = {"accretion": "two-regime", "bolometric": "duras2020"}
    found = spread(TABLE, recipe, choices=choices, draws=1)
    own = own_combination(recipe)
    assert own.binaries == "mineo2014"
    assert same(shares(found.table(), own), fraction(recipe))


def test_own_law_of_a_recipe_is_compared_and_drawn():
    mine = {"light": ["hmxb", "lmxb"], "band": [2.0, 10.0], "imf": "kroupa",
            "log_per_mstar": [29.0, 0.1], "log_per_sfr": [39.5, 0.1]}  # fmt: skip
    recipe = Recipe.from_dict({"law": {"mine": mine}, "background": {"binaries": "mine"}})
    found = spread(TABLE, recipe, choices=FEW | {"binaries": None}, draws=2)
    assert found.drawn["binaries mine"] == ("log_per_mstar", "log_per_sfr")
    assert same(shares(found.table(), own_combination(recipe)), fraction(recipe))


def test_default_law_that_the_recipe_rules_out_is_left_out_with_a_reason():
    recipe = Recipe().with_settings({"agn.anchor": "soft", "agn.bolometric": "hopkins2007"})
    plan = combinations(recipe)
    assert not any(one.bolometric == "lopez2024" for one in plan.every)
    assert any("lopez2024" in why for why in plan.skipped)
    with pytest.raises(LawError, match="soft"):
        combinations(recipe, {"bolometric": ["lopez2024"]})


@pytest.mark.parametrize("draws", [0, -1])
def test_no_draws_are_refused(draws):
    with pytest.raises(RecipeError, match="draws"):
        spread(TABLE, draws=draws)


@pytest.mark.parametrize(
    ("choices", "message"),
    [
        ({"accretion": ["two-regimes"]}, "two-regime"),
        ({"bolometric": ["duras2021"]}, "duras2020"),
        ({"binaries": ["lehmer2019", "lehmer2020"]}, "lehmer"),
        ({"binaries": ["lehmer2021+nobody"]}, "nobody"),
        ({"gas": ["mineo2012ga"]}, "mineo2012gas"),
    ],
)
def test_unknown_law_is_refused_with_the_nearest(choices, message):
    with pytest.raises(LawError, match=message):
        spread(TABLE, choices=choices, draws=1)


@pytest.mark.parametrize("choices", [{"acretion": ["constant"]}, {"gas": []}])
def test_wrong_choices_are_refused(choices):
    with pytest.raises(RecipeError, match=r"spread\."):
        combinations(Recipe(), choices)


def test_empty_table_is_refused():
    with pytest.raises(CatalogueError, match="no rows"):
        spread(TABLE.iloc[:0], draws=1)


def test_catalogue_without_black_holes_has_no_fraction():
    found = spread(TABLE.assign(mbh=0.0, mdot=0.0), choices=FEW, draws=2)
    assert found.table()["hidden_fraction"].isna().all()
    assert found.table()["spread_low"].isna().all()
    assert found.ranking().empty


def test_progress_ends_where_it_said():
    seen: list[tuple[int, int]] = []
    spread(TABLE, choices=FEW, draws=3, progress=lambda done, steps: seen.append((done, steps)))
    assert [done for done, _ in seen] == list(range(1, seen[0][1] + 1))
    assert len({steps for _, steps in seen}) == 1
