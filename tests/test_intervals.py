"""Binomial intervals and effective numbers, against general libraries and printed values."""

from __future__ import annotations

from decimal import Decimal, getcontext

import numpy as np
import pytest
from astropy.stats import binom_conf_interval
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from scipy.optimize import brentq
from statsmodels.stats.proportion import proportion_confint

from embersift.errors import RecipeError
from embersift.intervals import ONE_SIGMA_INSIDE, binomial_interval, effective_number

METHODS = ["wilson", "jeffreys"]


def test_one_sigma_is_what_a_gaussian_holds_within_one_sigma():
    assert pytest.approx(stats.norm.cdf(1) - stats.norm.cdf(-1), abs=1e-15) == ONE_SIGMA_INSIDE


@pytest.mark.parametrize(
    ("k", "wilson", "jeffreys"),
    [
        # coefficient sheet, observer's side, 9 (astropy, statsmodels and scipy agree), n = 10
        (0, (0.0, 0.09091), (0.0, 0.09233)),
        (1, (0.03887, 0.23385), (0.04189, 0.23376)),
        (3, (0.17882, 0.45754), (0.17993, 0.45775)),
        (10, (0.90909, 1.0), (0.90767, 1.0)),
    ],
)
def test_intervals_of_ten_trials_are_those_of_the_sheet(k, wilson, jeffreys):
    for method, expected in [("wilson", wilson), ("jeffreys", jeffreys)]:
        np.testing.assert_allclose(binomial_interval(k, 10, method=method), expected, atol=5e-6)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("level", [0.6826894921370859, 0.9, 0.9973])
def test_intervals_agree_with_astropy(method, level):
    n = np.repeat([1, 2, 7, 40, 1000, 100000], 5)
    k = (n * np.tile([0.0, 0.11, 0.5, 0.93, 1.0], 6)).round().astype(int)
    expected = binom_conf_interval(k, n, confidence_level=level, interval=method)
    np.testing.assert_allclose(
        binomial_interval(k, n, level=level, method=method), expected, rtol=1e-10, atol=1e-14
    )


@settings(max_examples=80, deadline=None)
@given(
    n=st.integers(2, 10**6),
    share=st.floats(0.0, 1.0),
    level=st.floats(0.05, 0.999),
    method=st.sampled_from(METHODS),
)
def test_intervals_agree_with_statsmodels(n, share, level, method):
    # inside only: at the ends statsmodels leaves Jeffreys' outer limit off 0 and 1
    k = min(max(round(share * n), 1), n - 1)
    expected = proportion_confint(k, n, alpha=1.0 - level, method=method)
    found = binomial_interval(k, n, level=level, method=method)
    np.testing.assert_allclose(found, expected, rtol=1e-8)


NUMBERS = st.floats(0.01, 1e5)


@settings(max_examples=80, deadline=None)
@given(n=NUMBERS, share=st.floats(0.001, 0.999), level=st.floats(0.1, 0.99))
def test_wilson_limits_of_real_numbers_solve_the_score_equation(n, share, level):
    # Wilson 1927: a limit p lies z standard deviations of p itself from the observed share
    z = stats.norm.isf(0.5 - 0.5 * level)
    k = share * n

    def score(p):
        return (k / n - p) ** 2 - z * z * p * (1.0 - p) / n

    low, high = binomial_interval(k, n, level=level)
    assert low == pytest.approx(brentq(score, 0.0, k / n, xtol=1e-15), rel=1e-7)
    assert high == pytest.approx(brentq(score, k / n, 1.0, xtol=1e-15), rel=1e-7)


@settings(max_examples=80, deadline=None)
@given(n=NUMBERS, share=st.floats(0.001, 0.999), level=st.floats(0.1, 0.99))
def test_jeffreys_limits_of_real_numbers_are_beta_quantiles(n, share, level):
    k = share * n
    expected = stats.beta(k + 0.5, n - k + 0.5).interval(level)
    found = binomial_interval(k, n, level=level, method="jeffreys")
    np.testing.assert_allclose(found, expected, rtol=1e-8)


def test_few_of_very_many_keep_their_digits():
    # the textbook formula at 60 digits, where float64 would subtract equal numbers
    getcontext().prec = 60
    k, n = Decimal(3), Decimal(10) ** 15
    z = Decimal(float(stats.norm.isf(0.5 - 0.5 * 0.95)))
    middle, root = k + z * z / 2, z * (k * (n - k) / n + z * z / 4).sqrt()
    low, high = binomial_interval(3, 1e15, level=0.95)
    assert low == pytest.approx(float((middle - root) / (n + z * z)), rel=1e-12)
    assert high == pytest.approx(float((middle + root) / (n + z * z)), rel=1e-12)


@settings(max_examples=100, deadline=None)
@given(
    n=st.floats(1e-6, 1e9),
    level=st.floats(0.01, 0.999),
    method=st.sampled_from(METHODS),
)
def test_none_and_all_touch_their_ends_exactly(n, level, method):
    none_low, none_high = binomial_interval(0.0, n, level=level, method=method)
    all_low, all_high = binomial_interval(n, n, level=level, method=method)
    assert none_low == 0.0
    assert all_high == 1.0
    assert 0.0 < none_high <= 1.0
    assert 0.0 <= all_low < 1.0


@settings(max_examples=100, deadline=None)
@given(n=st.integers(1, 10**5), share=st.floats(0, 1), method=st.sampled_from(METHODS))
def test_successes_and_failures_mirror_each_other(n, share, method):
    k = round(share * n)
    low, high = binomial_interval(k, n, method=method)
    other_low, other_high = binomial_interval(n - k, n, method=method)
    assert low == pytest.approx(1.0 - other_high, abs=1e-12)
    assert high == pytest.approx(1.0 - other_low, abs=1e-12)
    assert low <= k / n <= high


@pytest.mark.parametrize("method", METHODS)
def test_nothing_counted_and_impossible_numbers_have_no_interval(method):
    k = [0.0, 3.0, -1.0, np.nan, 1.0, np.inf]
    n = [0.0, 2.0, 5.0, 4.0, np.nan, np.inf]
    assert np.isnan(binomial_interval(k, n, method=method)).all()


def test_numbers_broadcast():
    low, high = binomial_interval(np.arange(3)[:, None], [5, 10])
    assert low.shape == high.shape == (3, 2)


@pytest.mark.parametrize("level", [0.0, 1.0, -0.5, 68.0, np.nan])
def test_a_level_outside_0_to_1_is_refused(level):
    with pytest.raises(RecipeError, match="probability between 0 and 1"):
        binomial_interval(1, 2, level=level)


def test_an_unknown_interval_is_refused_with_the_nearest_name():
    with pytest.raises(RecipeError, match="Did you mean jeffreys"):
        binomial_interval(1, 2, method="jeffrey")


WEIGHTS = st.lists(st.floats(0.01, 100.0), min_size=1, max_size=30)


@settings(max_examples=80, deadline=None)
@given(weights=WEIGHTS, scale=st.floats(1e-6, 1e6))
def test_effective_number_ignores_scale_and_lies_between_one_and_all(weights, scale):
    w = np.array(weights)
    n = effective_number(w.sum(), (w * w).sum())
    assert 1.0 - 1e-12 <= n <= w.size * (1.0 + 1e-12)
    assert effective_number(scale * w.sum(), scale**2 * (w * w).sum()) == pytest.approx(n)


def test_effective_number_of_equal_weights_is_their_number():
    assert effective_number(7 * 0.3, 7 * 0.3**2) == pytest.approx(7.0)
    assert effective_number(0.0, 0.0) == 0.0


def test_effective_number_is_the_sample_of_the_same_scatter():
    # variance of a weighted mean of independent values of unit variance is 1 / n_effective
    draw = np.random.default_rng(2)
    w = draw.lognormal(0.0, 1.0, 40)
    means = (draw.standard_normal((20000, 40)) * w).sum(axis=1) / w.sum()
    n = effective_number(w.sum(), (w * w).sum())
    assert 1.0 / means.var() == pytest.approx(float(n), rel=0.05)
