"""Ranking: odds from assumed distributions, and how many targets should succeed."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from test_reach import chain_of, one_source, random_sources

from embersift.errors import RecipeError
from embersift.obscuration import NhTable
from embersift.ranking import (
    LogNormal,
    LogUniform,
    PowerLaw,
    expected_successes,
    odds_of_success,
    odds_over_nh,
    rank,
    read_distribution,
    target_table,
)
from embersift.reach import reach

RATIOS = np.array([0.0, 1e-9, 1e-5, 3e-4, 0.01, 0.5, 1.0, 3.0, np.inf])


def test_log_uniform_survival_is_scipys():
    assert LogUniform(1e-5, 1.0).survival(RATIOS) == pytest.approx(
        stats.loguniform(1e-5, 1.0).sf(RATIOS), rel=1e-12, abs=1e-15
    )


def test_log_normal_survival_is_scipys():
    reference = stats.lognorm(s=0.7 * np.log(10.0), scale=2e-3)
    assert LogNormal(2e-3, 0.7).survival(RATIOS) == pytest.approx(
        reference.sf(RATIOS), rel=1e-11, abs=1e-300
    )


@pytest.mark.parametrize("slope", [0.3, 0.65, 2.0])
def test_falling_power_law_survival_is_scipys(slope):
    # number per dex as ratio^-slope is a truncated Pareto law of that index
    reference = stats.truncpareto(b=slope, c=1e5, scale=1e-5)
    assert PowerLaw(-slope, 1e-5, 1.0).survival(RATIOS) == pytest.approx(
        reference.sf(RATIOS), rel=1e-9, abs=1e-15
    )


def test_flat_power_law_is_log_uniform():
    for slope in (0.0, 1e-13, 1e-9):
        assert PowerLaw(slope, 1e-4, 2.0).survival(RATIOS) == pytest.approx(
            stats.loguniform(1e-4, 2.0).sf(RATIOS), rel=1e-7, abs=1e-15
        )


def test_an_unknown_reach_has_unknown_odds():
    for law in (LogUniform(1e-3, 1.0), LogNormal(0.01, 1.0), PowerLaw(-0.5, 1e-3, 1.0)):
        assert np.isnan(law.survival([np.nan])).all()


def test_distributions_are_read_as_written():
    assert read_distribution("log-uniform(1e-5, 1)") == LogUniform(1e-5, 1.0)
    assert read_distribution(" log-normal( 0.01,0.5 )") == LogNormal(0.01, 0.5)
    assert read_distribution("power-law(-0.65, 1e-5, 1)") == PowerLaw(-0.65, 1e-5, 1.0)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("log-uniform(1, 1e-5)", "the lower must be"),
        ("log-uniform(0, 1)", "above 0"),
        ("log-normal(0.1, 0)", "must be above 0"),
        ("log-normal(0.1)", "has 1 values"),
        ("power-law(-1, a, 2)", "numbers are expected"),
        ("power-law(-1, nan, 2)", "the lower must be"),
        ("lognormal(0.1, 1)", "Did you mean log-normal"),
        ("nonsense", "is not a distribution"),
    ],
)
def test_impossible_distributions_are_refused(text, message):
    with pytest.raises(RecipeError, match=message):
        read_distribution(text)


@settings(max_examples=25, deadline=None)
@given(st.lists(st.floats(0.0, 1.0), min_size=1, max_size=7), st.floats(0.3, 0.95))
def test_interval_of_successes_is_that_of_all_outcomes(odds, level):
    # the oracle writes out every combination of success and failure
    pmf = np.zeros(len(odds) + 1)
    for outcome in itertools.product([0, 1], repeat=len(odds)):
        pmf[sum(outcome)] += np.prod(
            [p if hit else 1 - p for p, hit in zip(odds, outcome, strict=True)]
        )
    (found,) = expected_successes(odds, [len(odds)], level)
    tail = (1 - level) / 2
    assert found.expected == pytest.approx(sum(odds))
    assert pmf[: found.low].sum() <= tail + 1e-12
    assert pmf[found.high + 1 :].sum() <= tail + 1e-12
    assert pmf[: found.low + 1].sum() > tail - 1e-12
    assert pmf[found.high :].sum() > tail - 1e-12


def test_equal_odds_give_the_binomial_interval():
    found = expected_successes(np.full(200, 0.13), [50, 200, 1000], 0.9)
    assert [one.targets for one in found] == [50, 200]
    for one in found:
        low, high = stats.binom(one.targets, 0.13).interval(0.9)
        assert (one.low, one.high) == (low, high)


def test_best_odds_per_exposure_come_first():
    ranked = rank([0.2, 0.9, np.nan, 0.5], [1.0, 10.0, 1.0, 2.0])
    assert ranked.order.tolist() == [3, 0, 1, 2]
    assert ranked.expected.tolist() == pytest.approx([0.5, 0.7, 1.6, 1.6])
    assert rank([0.5, 0.5], 3.0).order.tolist() == [0, 1]


@pytest.mark.parametrize(
    ("odds", "exposure", "message"),
    [
        ([0.5], 0.0, "exposure: 0"),
        ([0.5], [-1.0], "exposure: -1"),
        ([0.5, 0.5], [1.0, 2.0, 3.0], "3 exposures were given for 2 targets"),
        ([1.5], 1.0, "between 0 and 1"),
    ],
)
def test_impossible_rankings_are_refused(odds, exposure, message):
    with pytest.raises(RecipeError, match=message):
        rank(odds, exposure)


def test_impossible_counts_are_refused():
    with pytest.raises(RecipeError, match="level"):
        expected_successes([0.5], [1], 1.0)
    with pytest.raises(RecipeError, match="cannot be counted"):
        expected_successes([0.5], [0])


def test_odds_are_the_share_of_drawn_ratios_that_pass():
    # Monte Carlo over the assumed distribution, judged by comparison with the reach
    found = reach(random_sources(50), chain_of())["soft", 2.0]
    law = LogNormal(0.01, 1.0)
    odds = odds_of_success(found, law)
    draws = 10 ** np.random.default_rng(1).normal(-2.0, 1.0, 20000)
    known = np.isfinite(found.eddington)
    share = (draws[:, None] >= found.eddington[known]).mean(axis=0)
    assert np.abs(odds[known] - share).max() < 0.02  # five standard errors


def test_a_target_out_of_reach_has_no_odds():
    found = reach(one_source(nh=1e26), chain_of())["soft", 2.0]
    assert odds_of_success(found, LogUniform(1e-5, 1.0))[0] == 0.0


def test_a_table_of_one_thin_bin_is_that_column():
    table = NhTable((22.4999, 22.5001), (1.0,))
    law = LogUniform(1e-5, 1.0)
    chain = chain_of()
    averaged = odds_over_nh(random_sources(20), chain, law, table, nodes=2)
    sources = random_sources(20)._replace(nh=np.full(20, 10**22.5))
    for key, found in reach(sources, chain).items():
        assert averaged[key] == pytest.approx(odds_of_success(found, law), abs=1e-4)


def test_the_target_list_passes_coordinates_through():
    found = reach(random_sources(4), chain_of())["soft", 2.0]
    ranked = rank(odds_of_success(found, LogUniform(1e-6, 1.0)), 50.0)
    table = target_table(ranked, found, ["007", "b", "c", "d"], {"ra": [1.0, 2.0, 3.0, 4.0]})
    assert list(table)[:3] == ["rank", "id", "ra"]
    names = dict(zip(["007", "b", "c", "d"], [1.0, 2.0, 3.0, 4.0], strict=True))
    assert [names[name] for name in table["id"]] == table["ra"].tolist()
    assert (np.diff(table["odds_per_exposure"]) <= 0.0).all()
    assert table["expected"][-1] == pytest.approx(table["odds"].sum())
