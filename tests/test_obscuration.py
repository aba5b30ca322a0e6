"""Averages over a table of columns."""

import numpy as np
import pytest

from embersift.bands import Band
from embersift.errors import RecipeError
from embersift.obscuration import NhTable, average_over_nh
from embersift.sky.absorption import power_law_transmission


def test_the_mean_log_column_is_that_of_the_bins():
    # by hand: 0.25 x 21 + 0.75 x 23
    table = NhTable((20.0, 22.0, 24.0), (0.25, 0.75))
    mean = average_over_nh(lambda nh: np.array([np.log10(nh)]), table)
    assert mean[0] == pytest.approx(22.5, rel=1e-12)


def test_a_constant_is_its_own_average():
    table = NhTable((20.0, 21.5, 22.0, 26.0), (0.2, 0.5, 0.3))
    assert average_over_nh(lambda nh: np.full(3, 0.7), table) == pytest.approx([0.7] * 3)


def test_an_average_transmission_agrees_with_many_draws():
    table = NhTable((20.0, 22.0, 23.5), (0.4, 0.6))

    def passed(nh):
        return power_law_transmission(
            1.8, Band(0.5, 8.0), 0.0, np.atleast_1d(nh), np.zeros(np.size(nh))
        )

    rng = np.random.default_rng(1)
    low = rng.random(20000) < 0.4
    log_nh = np.where(low, rng.uniform(20.0, 22.0, 20000), rng.uniform(22.0, 23.5, 20000))
    assert average_over_nh(passed, table)[0] == pytest.approx(passed(10**log_nh).mean(), abs=0.01)


def test_centres_are_half_way_between_edges():
    table = NhTable.from_centres([20.5, 21.5, 22.5], [0.2, 0.3, 0.5])
    assert table.edges == (20.0, 21.0, 22.0, 23.0)


def test_the_share_beyond_1e24_is_counted():
    assert NhTable((20.0, 23.0, 25.0), (0.6, 0.4)).thick_share == pytest.approx(0.2)
    assert NhTable((20.0, 24.0), (1.0,)).thick_share == 0.0
    assert NhTable((24.0, 26.0), (1.0,)).thick_share == 1.0


@pytest.mark.parametrize(
    ("edges", "fractions", "message"),
    [
        ((20.0, 22.0, 24.0), (0.5, 0.4), "sum to 0.9, not to 1"),
        ((20.0, 22.0, 24.0), (0.5, 0.500003), "not to 1"),
        ((20.0, 22.0), (0.5, 0.5), "one edge more"),
        ((20.0,), (), "one edge more"),
        ((22.0, 20.0, 24.0), (0.5, 0.5), "ascend"),
        ((20.0, np.nan, 24.0), (0.5, 0.5), "ascend"),
        ((1e20, 1e22), (1.0,), "log10 of NH"),
        ((20.0, 22.0, 24.0), (1.5, -0.5), "between 0 and 1"),
    ],
)
def test_impossible_tables_are_refused(edges, fractions, message):
    with pytest.raises(RecipeError, match=message):
        NhTable(edges, fractions)


def test_fractions_may_miss_1_by_rounding():
    assert NhTable((20.0, 22.0, 24.0), (0.3333333, 0.6666667)).fractions[0] == 0.3333333
    with pytest.raises(RecipeError, match="two centres"):
        NhTable.from_centres([21.0], [1.0])
