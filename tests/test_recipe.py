"""Recipes: what is accepted, what is refused and in which words, and that text reads back."""

import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from embersift.bands import Band
from embersift.errors import RecipeError
from embersift.recipe import SECTIONS, Observation, Recipe, accepted_keys
from embersift.recipe_text import starter, to_toml


def test_defaults_are_the_boundary_and_cut_of_common_practice():
    # coefficient sheet, observer's side, section 7: 1e39 erg/s, and two times the host's light
    recipe = Recipe()
    assert recipe.screen.floor == 1e39
    assert recipe.screen.headline == 2.0
    assert recipe.screen.headline in recipe.screen.thresholds


def test_the_starter_recipe_is_the_default_recipe():
    assert Recipe.from_dict(tomllib.loads(starter())) == Recipe()


def test_every_key_of_the_starter_is_explained():
    text = starter()
    for kind in SECTIONS.values():
        for name in accepted_keys(kind):
            assert f"\n{name} = " in text or f"\n# {name} = " in text


def test_commented_examples_of_the_starter_are_accepted():
    # a user who removes the # in front of any one key must get a recipe that reads
    section = ""
    for line in starter().splitlines():
        if line.startswith("["):
            section = line.strip("[]")
        name, equals, value = line.removeprefix("# ").partition(" = ")
        if (
            line.startswith("# ")
            and equals
            and section in SECTIONS
            and name in accepted_keys(SECTIONS[section])
        ):
            Recipe.from_dict({section: {name: tomllib.loads(f"x = {value}")["x"]}})


def test_a_resolved_recipe_reads_back_to_itself():
    recipe = Recipe.from_dict(
        {
            "catalogue": {
                "columns": {"mstar": {"column": 'M "star" é', "unit": "1e10 Msun / littleh"}},
                "h": 0.678,
                "missing": [-99.0, -1e30],
                "imf": "chabrier",
            },
            "background": {"binaries": "lehmer2016", "gas": "none"},
            "observation": [{"name": "deep", "band": [0.5, 2], "flux_limit": 1e-16}],
            "screen": {"thresholds": [1.5, 3], "headline": 3},
            "law": {"own law": {"light": ["hmxb"], "band": [0.5, 8.0]}},
        }
    )
    assert Recipe.from_dict(tomllib.loads(to_toml(recipe))) == recipe


@settings(max_examples=100, deadline=None)
@given(
    limit=st.floats(0, 1e-5),
    low=st.floats(0.03, 9.0),
    width=st.floats(0.01, 90.0),
    thresholds=st.lists(
        st.floats(1e-3, 1e6), min_size=1, max_size=4, unique_by=lambda t: format(t, ".9g")
    ),
    text=st.text(min_size=1, max_size=30),
)
def test_any_accepted_recipe_survives_being_written(limit, low, width, thresholds, text):
    recipe = Recipe.from_dict(
        {
            "catalogue": {"columns": {"mstar": text}},
            "observation": [{"name": "a", "band": [low, low + width], "flux_limit": limit}],
            "screen": {"thresholds": thresholds},
        }
    )
    assert Recipe.from_dict(tomllib.loads(to_toml(recipe))) == recipe


REFUSED = [
    ({"scren": {}}, "no section [scren]. Did you mean screen"),
    ({"screen": {"flor": 1}}, "screen.flor is not a key. Did you mean floor"),
    ({"screen": {"floor": "low"}}, "screen.floor = 'low': expected a number"),
    ({"screen": {"floor": True}}, "screen.floor = True: expected a number"),
    ({"screen": {"thresholds": [0]}}, "screen.thresholds[0] = 0: expected a number above 0"),
    ({"screen": {"thresholds": [-2]}}, "expected a number above 0"),
    ({"screen": {"thresholds": []}}, "at least one threshold"),
    ({"screen": {"thresholds": [2, 2.0]}}, "the same threshold stands twice"),
    ({"screen": {"thresholds": [1], "headline": 2}}, "screen.headline = 2 is not among"),
    ({"screen": {"criterion": "agm"}}, "expected agn or total. Did you mean agn"),
    ({"observation": [{"name": "a", "band": [2, 0.5]}]}, "the band is upside down"),
    ({"observation": [{"name": "a", "band": [0.5, 2], "flux_limit": -1e-16}]}, "at least 0"),
    ({"observation": [{"name": "a", "band": [0.5, 2]}] * 2}, "two observations are named 'a'"),
    ({"observation": [{"name": "../etc", "band": [0.5, 2]}]}, "letters, digits"),
    ({"observation": [{"name": "a"}]}, "at least a name and a band"),
    ({"observation": {"name": "a"}}, "[[observation]]"),
    ({"catalogue": {"columns": {"mstr": "M"}}}, "Did you mean mstar"),
    ({"catalogue": {"columns": {"mstar": "M", "mbh": "M"}}}, "one column cannot be two quantities"),
    ({"catalogue": {"columns": {"mstar": {"column": "M", "units": "g"}}}}, "Known: column, unit"),
    ({"background": {"total": "mineo2014", "gas": "mineo2012gas"}}, "counted twice"),
    ({"background": {"binaries": "lehmer2016", "hmxb": "lehmer2021"}}, "counted twice"),
    ({"tally": {"edges": [3, 2]}}, "each above the last"),
    ({"tally": {"edges": [3]}}, "at least two values"),
    ({"agn": {"spin": 2.0}}, "at most 1"),
    ({"agn": {"nh": float("nan")}}, "expected a number"),
]


@pytest.mark.parametrize(("content", "words"), REFUSED)
def test_what_cannot_be_meant_is_refused_in_plain_words(content, words):
    with pytest.raises(RecipeError) as refusal:
        Recipe.from_dict(content)
    assert words in str(refusal.value)


def test_an_infinite_flux_limit_is_accepted():
    recipe = Recipe.from_dict(
        {"observation": [{"name": "blind", "band": [2, 10], "flux_limit": float("inf")}]}
    )
    assert recipe.observation[0].flux_limit == float("inf")


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"[screen\n", "not valid TOML"),
        (b"\xff\xfe\x00", "not valid TOML"),
        (b"a = " + b"[" * 20000 + b"]" * 20000, "not valid TOML"),
        (b"[screen]\nfloor = 1\nfloor = 2\n", "not valid TOML"),
    ],
)
def test_a_file_that_is_no_recipe_says_so_with_its_name(tmp_path, content, words):
    path = tmp_path / "recipe.toml"
    path.write_bytes(content)
    with pytest.raises(RecipeError) as refusal:
        Recipe.from_toml(path)
    assert words in str(refusal.value)
    assert "recipe.toml" in str(refusal.value)


def test_a_recipe_that_is_not_there_says_so(tmp_path):
    with pytest.raises(RecipeError, match="cannot be read"):
        Recipe.from_toml(tmp_path / "none.toml")


def test_settings_change_single_keys_and_keep_the_rest():
    recipe = Recipe().with_settings({"screen.floor": 0, "catalogue.columns.mstar": "M"})
    assert recipe.screen.floor == 0.0
    assert recipe.catalogue.columns["mstar"].column == "M"
    assert recipe.agn == Recipe().agn
    with pytest.raises(RecipeError, match=r"section\.key"):
        Recipe().with_settings({"floor": 0})


def test_limits_replace_the_default_observation_and_add_to_given_ones():
    deep = Observation("deep", Band(0.5, 2.0), 1e-16)
    wide = Observation("wide", Band(0.5, 2.0), 1e-14)
    one = Recipe().with_observations([deep])
    assert [o.name for o in one.observation] == ["deep"]
    assert [o.name for o in one.with_observations([wide]).observation] == ["deep", "wide"]
