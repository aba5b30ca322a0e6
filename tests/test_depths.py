"""Reference depths: the numbers of the sheet, their names, and how they are shown."""

import pytest

from embersift.depths import DEPTHS, depth, lines
from embersift.errors import RecipeError

# coefficient sheet, observer's side, section 3
SHEET = {
    "erass1-soft": (0.5, 2.0, 5e-14, 20626.5, "MEM"),
    "erass8-soft": (0.5, 2.0, 1.1e-14, 41253.0, "MEM"),
    "efeds-soft": (0.5, 2.0, 6.5e-15, 140.0, "MEM"),
    "cosmos-legacy-soft": (0.5, 2.0, 2.2e-16, 2.2, "V-abs"),
    "cosmos-legacy-hard": (2.0, 10.0, 1.5e-15, 2.2, "V-abs"),
    "cosmos-legacy-full": (0.5, 10.0, 8.9e-16, 2.2, "V-abs"),
    "xxl-soft": (0.5, 2.0, 1e-15, 50.0, "V-abs"),
    "xxl-hard": (2.0, 10.0, 3e-15, 50.0, "V-abs"),
    "xxl-90-soft": (0.5, 2.0, 5.8e-15, 50.0, "V-abs"),
    "xxl-90-hard": (2.0, 10.0, 3.8e-14, 50.0, "V-abs"),
    "stripe82x-soft": (0.5, 2.0, 8.7e-16, 31.0, "MEM"),
    "stripe82x-hard": (2.0, 10.0, 4.7e-15, 31.0, "MEM"),
    "aegis-xd-soft": (0.5, 2.0, 5e-17, 0.29, "MEM"),
    "aegis-xd-hard": (2.0, 10.0, 2e-16, 0.29, "MEM"),
    "cdfs-7ms-soft": (0.5, 2.0, 6.4e-18, 0.1345, "V-abs"),
    "cdfs-7ms-hard": (2.0, 7.0, 2.7e-17, 0.1345, "V-abs"),
    "cdfs-7ms-full": (0.5, 7.0, 1.9e-17, 0.1345, "V-abs"),
}


def test_every_preset_has_the_numbers_of_the_sheet():
    found = {
        name: (*preset.band, preset.flux_limit, preset.status) for name, preset in DEPTHS.items()
    }
    assert found == {
        name: (low, high, limit, status) for name, (low, high, limit, _, status) in SHEET.items()
    }
    for name, (_, _, _, area, _) in SHEET.items():
        assert DEPTHS[name].area == pytest.approx(area, rel=1e-4)


def test_a_plain_survey_name_is_its_soft_band():
    for survey in {preset.survey for preset in DEPTHS.values()}:
        assert depth(survey) is DEPTHS[f"{survey}-soft"]
        assert tuple(depth(survey).band) == (0.5, 2.0)


def test_a_number_from_memory_is_approximate():
    for preset in DEPTHS.values():
        assert preset.approximate == (preset.status == "MEM")


def test_every_preset_names_its_paper_when_shown():
    for name, preset in DEPTHS.items():
        shown = str(preset)
        assert name in shown
        assert preset.paper in shown
        assert preset.status in shown
        assert ("~" in shown) == preset.approximate


@pytest.mark.parametrize(
    ("wrong", "nearest"),
    [
        ("cdfs-7ms-sof", "cdfs-7ms-soft"),
        ("CDFS7Ms", "cdfs-7ms"),
        ("cosmos-hard", "cosmos-legacy-hard"),
        ("stripe-82", "stripe82x"),
    ],
)
def test_an_unknown_depth_is_refused_with_the_nearest_names(wrong, nearest):
    with pytest.raises(RecipeError, match=nearest):
        depth(wrong)


def test_a_band_that_a_survey_lacks_is_refused():
    with pytest.raises(RecipeError, match="efeds-soft"):
        depth("efeds-hard")


def test_the_presets_cannot_be_changed():
    with pytest.raises(TypeError):
        DEPTHS["mine"] = DEPTHS["cdfs-7ms-soft"]


def test_the_list_shows_all_presets_and_papers_in_80_columns():
    text = lines()
    assert max(len(line) for line in text) <= 80
    joined = " ".join(" ".join(text).split())
    for name, preset in DEPTHS.items():
        assert name in joined
        assert preset.paper in joined
