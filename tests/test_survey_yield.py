"""Yield of a survey: volumes and Poisson limits against astropy."""

import astropy.units as u
import numpy as np
import pytest
from astropy.cosmology import FlatLambdaCDM
from astropy.stats import poisson_conf_interval

from embersift.errors import RecipeError
from embersift.sky.distance import FlatUniverse
from embersift.survey_yield import WHOLE_SKY, survey_volume, survey_yield

UNIVERSE = FlatUniverse(70.0, 0.3)
COMMON = {"area": 140.0, "redshifts": (0.01, 0.3), "universe": UNIVERSE}


@pytest.mark.parametrize("z", [(0.0, 0.05), (0.01, 0.3), (1.0, 3.0)])
def test_shell_volume_is_astropys(z):
    cosmology = FlatLambdaCDM(70.0, 0.3, Tcmb0=0.0)
    sky = cosmology.comoving_volume(z[1]) - cosmology.comoving_volume(z[0])
    expected = sky.to_value(u.Mpc**3) * 140.0 / WHOLE_SKY
    assert survey_volume(140.0, *z, UNIVERSE) == pytest.approx(expected, rel=1e-7)


def test_whole_sky_is_41253_square_degrees():
    # any handbook
    assert pytest.approx(41252.96, abs=0.01) == WHOLE_SKY
    assert survey_volume(41253.0, 0.0, 0.1, UNIVERSE) == pytest.approx(
        survey_volume(WHOLE_SKY, 0.0, 0.1, UNIVERSE)
    )


def test_a_box_gives_scaled_poisson_limits():
    values = np.array([7.2, 7.8, 8.1, 8.2, 8.3, 9.5, np.nan])
    visible = np.array([True, True, True, True, False, True, True])
    found = survey_yield(values, visible, [7.0, 8.0, 9.0, 9.4], box=50.0, **COMMON)
    cosmology = FlatLambdaCDM(70.0, 0.3, Tcmb0=0.0)
    shell = cosmology.comoving_volume(0.3) - cosmology.comoving_volume(0.01)
    scale = shell.to_value(u.Mpc**3) * 140.0 / WHOLE_SKY / 50.0**3
    assert found.rows.tolist() == [2.0, 2.0, 0.0]
    assert found.expected == pytest.approx(scale * found.rows, rel=1e-7)
    low, high = poisson_conf_interval([2, 2, 0], interval="frequentist-confidence", sigma=1)
    assert found.low == pytest.approx(scale * low, rel=1e-6)
    assert found.high == pytest.approx(scale * high, rel=1e-6)


def test_a_volume_per_row_of_the_box_is_the_box():
    rng = np.random.default_rng(1)
    values, visible = rng.uniform(7.0, 10.0, 500), rng.random(500) < 0.3
    edges = [7.0, 8.0, 9.0, 10.0]
    box = survey_yield(values, visible, edges, box=20.0, **COMMON)
    rows = survey_yield(values, visible, edges, volume_per_row=8000.0, **COMMON)
    many = survey_yield(values, visible, edges, volume_per_row=np.full(500, 8000.0), **COMMON)
    for one, two, three in zip(box, rows, many, strict=True):
        assert one == pytest.approx(two)
        assert one == pytest.approx(three)


def test_unequal_rows_widen_the_interval():
    # by hand: (1 + 1/9)^2 / (1 + 1/81) effective rows out of 2
    found = survey_yield(
        np.array([7.5, 7.5]), np.array([True, True]), [7.0, 8.0],
        volume_per_row=[100.0, 900.0], **COMMON,
    )  # fmt: skip
    n = (1 + 1 / 9) ** 2 / (1 + 1 / 81)
    shell = survey_volume(140.0, 0.01, 0.3, UNIVERSE)
    assert found.expected[0] == pytest.approx(shell * (1 / 100 + 1 / 900))
    low, high = poisson_conf_interval([n], interval="frequentist-confidence", sigma=1)
    assert found.low[0] == pytest.approx(found.expected[0] / n * low[0])
    assert found.high[0] == pytest.approx(found.expected[0] / n * high[0])


def test_weights_count_rows_as_often():
    values, visible = np.array([7.5]), np.array([True])
    once = survey_yield(values, visible, [7.0, 8.0], box=10.0, **COMMON)
    thrice = survey_yield(values, visible, [7.0, 8.0], box=10.0, weight=[3.0], **COMMON)
    assert thrice.expected == pytest.approx(3.0 * once.expected)
    assert thrice.high == pytest.approx(3.0 * once.high)


@pytest.mark.parametrize(
    ("changed", "message"),
    [
        ({"area": 0.0}, "area is 0"),
        ({"area": -3.0}, "area is -3"),
        ({"area": 5e4}, "at most the whole sky"),
        ({"area": np.nan}, "area is nan"),
        ({"redshifts": (0.3, 0.01)}, "run from 0.3 to 0.01"),
        ({"redshifts": (-0.1, 0.1)}, "not negative"),
        ({"redshifts": (0.1, 0.1)}, "the lower comes first"),
        ({"box": 0.0}, "box"),
        ({"box": -1.0}, "box"),
        ({"box": None}, "give either"),
        ({"volume_per_row": 10.0}, "not both"),
        ({"box": None, "volume_per_row": [10.0, 0.0]}, r"volume_per_row.*row 1"),
        ({"weight": [1.0, -1.0]}, "negative number of times"),
    ],
)
def test_impossible_surveys_are_refused(changed, message):
    arguments = COMMON | {"box": 10.0} | changed
    with pytest.raises(RecipeError, match=message):
        survey_yield(np.array([7.5, 7.6]), np.array([True, True]), [7.0, 8.0], **arguments)
