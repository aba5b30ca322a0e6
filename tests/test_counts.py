"""Counting statistics against the papers' tables, scipy and astropy."""

import math

import numpy as np
import pytest
from astropy.stats import poisson_conf_interval
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from embersift.counts import (
    ONE_SIGMA,
    expected_counts,
    exposure_for_probability,
    li_ma_significance,
    no_source_probability,
    poisson_interval,
    poisson_interval_with_background,
)
from embersift.errors import RecipeError


@pytest.mark.parametrize(
    ("source", "background", "ratio", "expected"),
    # coefficient sheet, observer's side, section 9
    [(3, 1, 20, 4.1649e-4), (5, 10, 20, 4.9157e-4), (10, 50, 10, 4.3120e-2)],
)
def test_no_source_probability_of_the_sheet(source, background, ratio, expected):
    assert float(no_source_probability(source, background, ratio)) == pytest.approx(
        expected, rel=2e-5
    )


@given(source=st.integers(0, 300), background=st.integers(0, 300), ratio=st.floats(0.05, 500.0))
@settings(max_examples=100, deadline=None)
def test_no_source_probability_is_the_upper_tail_of_a_binomial(source, background, ratio):
    # scipy.stats sums the same tail under its own parametrisation
    expected = stats.binom.sf(source - 1, source + background, 1.0 / (1.0 + ratio))
    assert float(no_source_probability(source, background, ratio)) == pytest.approx(
        expected, rel=1e-9, abs=1e-300
    )


def test_no_source_probability_falls_with_source_counts_also_between_integers():
    chance = no_source_probability(np.linspace(0.0, 30.0, 301), 12.0, 5.0)
    assert chance[0] == 1.0
    assert np.all(np.diff(chance) < 0.0)


def test_no_source_probability_of_impossible_counts_is_nan():
    chance = no_source_probability([-1, 3, 3, 3, np.nan], [1, -1, 1, 1, 1], [9, 9, 0, -2, 9])
    assert np.isnan(chance).all()


@pytest.mark.parametrize(
    ("on", "off", "alpha", "expected"),
    # coefficient sheet, observer's side, section 9
    [(10, 5, 0.3, 3.5854), (100, 500, 0.1, 5.8494), (20, 10, 1, 1.8434)],
)
def test_li_ma_of_the_sheet(on, off, alpha, expected):
    assert float(li_ma_significance(on, off, alpha)) == pytest.approx(expected, abs=5e-5)


@pytest.mark.parametrize(
    ("on", "off", "alpha"), [(0, 7, 0.5), (6, 0, 0.2), (25, 40, 0.4), (3, 90, 0.1), (1, 1, 2.0)]
)
def test_li_ma_is_a_ratio_of_poisson_likelihoods(on, off, alpha):
    # the paper's derivation: best background with and without a source, by scipy's Poisson
    best = (on + off) / (1.0 + alpha)
    none = stats.poisson.logpmf(on, alpha * best) + stats.poisson.logpmf(off, best)
    free = stats.poisson.logpmf(on, on) + stats.poisson.logpmf(off, off)
    size = math.sqrt(2.0 * (free - none))
    expected = math.copysign(size, on - alpha * off)
    assert float(li_ma_significance(on, off, alpha)) == pytest.approx(expected, abs=1e-7)


def test_li_ma_is_zero_at_the_expectation_and_where_nothing_was_counted():
    # the root of a rounding error of 1e-14
    found = li_ma_significance([0, 5, 33], [0, 50, 100], [1, 0.1, 0.33])
    np.testing.assert_allclose(found, 0.0, atol=1e-6)


def test_li_ma_of_impossible_counts_is_nan():
    assert np.isnan(li_ma_significance([-1, 1, 1, np.nan], [1, -1, 1, 1], [1, 1, 0, 1])).all()


@pytest.mark.parametrize(
    ("n", "lower", "upper"),
    # Gehrels 1986, ApJ, 303, 336, Tables 1 and 2, by the coefficient sheet, section 9
    [(0, 0.0, 1.841), (1, 0.173, 3.300), (5, 2.840, 8.382), (10, 6.891, 14.267)],
)
def test_poisson_interval_of_the_paper(n, lower, upper):
    found = poisson_interval(n)
    assert [float(limit) for limit in found] == pytest.approx([lower, upper], abs=6e-4)


def test_poisson_interval_is_astropys():
    n = np.array([0, 1, 2, 7, 30, 400, 10000])
    for level, sigma in ((ONE_SIGMA, 1.0), (stats.norm.cdf(2.5), 2.5)):
        expected = poisson_conf_interval(n, interval="frequentist-confidence", sigma=sigma)
        np.testing.assert_allclose(poisson_interval(n, level), expected, rtol=1e-9)


def test_poisson_interval_of_missing_counts_is_nan():
    lower, upper = poisson_interval([np.nan, -1.0, 0.0])
    assert np.isnan(lower).tolist() == np.isnan(upper).tolist() == [True, True, False]


@pytest.mark.parametrize(
    ("n", "background", "level", "lower", "upper"),
    # Kraft, Burrows & Nousek 1991, ApJ, 374, 344, by the coefficient sheet, section 9
    [(5, 2.5, 0.99, 0.0, 10.67), (10, 3.0, 0.95, 1.98, 14.60)],
)
def test_interval_with_background_of_the_paper(n, background, level, lower, upper):
    found = poisson_interval_with_background(n, background, level)
    assert [float(limit) for limit in found] == pytest.approx([lower, upper], abs=5e-3)


@pytest.mark.parametrize("level", [0.6827, 0.9, 0.99])
def test_interval_with_background_is_astropys(level):
    # astropy itself stops with a math domain error at n = 0 and at no background
    n = np.array([1, 2, 5, 10, 25, 60])
    for background in (0.1, 1.5, 6.0, 20.0):
        expected = poisson_conf_interval(
            n,
            interval="kraft-burrows-nousek",
            background=background,
            confidence_level=level,
        )
        found = poisson_interval_with_background(n, background, level)
        # astropy's root finder stops at about 1e-6
        np.testing.assert_allclose(found, expected, rtol=2e-5, atol=2e-5)


@pytest.mark.parametrize(("n", "background"), [(0, 0), (1, 0), (5, 0), (40, 0), (500, 450)])
def test_interval_with_background_is_the_shortest_that_holds_its_probability(n, background):
    # the source's mean given n counts and a flat prior: a gamma distribution cut at the background
    level = 0.9
    lower, upper = (float(v) for v in poisson_interval_with_background(n, background, level))
    total = stats.gamma(n + 1.0)
    whole = total.sf(background)
    held = total.cdf(upper + background) - total.cdf(lower + background)
    assert held == pytest.approx(level * whole, rel=1e-9)
    for shift in (-1e-3, 1e-3):
        start = lower + shift
        if start >= 0.0:
            end = total.isf(total.sf(start + background) - level * whole) - background
            assert end - start >= upper - lower - 1e-9


@pytest.mark.parametrize("background", [0.0, 0.5, 30.0, 5000.0])
def test_no_counts_give_the_same_upper_limit_whatever_the_background(background):
    # with a flat prior and no counts the source's mean is exponential
    lower, upper = poisson_interval_with_background(0, background, 0.95)
    assert float(lower) == 0.0
    assert float(upper) == pytest.approx(stats.expon.ppf(0.95), rel=1e-12)


def test_interval_with_background_of_impossible_counts_is_nan():
    lower, upper = poisson_interval_with_background([np.nan, -1, 2, 3], [1, 1, -1, 5000], 0.9)
    assert np.isnan(lower).all()
    assert np.isnan(upper).all()


@pytest.mark.parametrize("level", [0.0, 1.0, 1.5, math.nan])
def test_impossible_levels_are_refused(level):
    for function in (
        lambda: poisson_interval(3, level),
        lambda: poisson_interval_with_background(3, 1, level),
        lambda: exposure_for_probability(1.0, 1.0, 1.0, level),
    ):
        with pytest.raises(RecipeError, match="between 0 and 1"):
            function()


def test_expected_counts():
    # 1e-15 erg/s/cm2 for 100 ks at 2e11 counts per erg/cm2: 20 counts
    assert float(expected_counts(1e-15, 1e5, 2e11)) == pytest.approx(20.0, rel=1e-14)
    assert np.isnan(expected_counts(np.nan, 1e5, 2e11))


@pytest.mark.parametrize("exposure", [0.0, -10.0, [1.0, np.nan, -3.0]])
def test_exposures_that_are_not_positive_are_refused(exposure):
    with pytest.raises(RecipeError, match=r"exposure is .* must be larger than 0"):
        expected_counts(1e-15, exposure, 2e11)


@given(
    source=st.floats(1e-6, 1.0),
    background=st.one_of(st.just(0.0), st.floats(1e-6, 1.0)),
    ratio=st.floats(0.5, 200.0),
    wanted=st.floats(1e-9, 0.3),
)
@settings(max_examples=100, deadline=None)
def test_exposure_reaches_the_probability_and_a_shorter_one_does_not(
    source, background, ratio, wanted
):
    def reached(t):
        counts = (source + background) * t, background * ratio * t
        return float(no_source_probability(*counts, ratio))

    t = float(exposure_for_probability(source, background, ratio, wanted))
    if math.isinf(t):
        assert reached(1e11 / (source + background)) > wanted
        return
    assert reached(t) <= wanted
    assert np.all(np.array([reached(part * t) for part in (0.05, 0.3, 0.9, 0.9999)]) > wanted)


def test_exposure_for_a_faint_source_is_that_of_a_gaussian():
    # many counts: the excess s t stands z times above the noise sqrt(b t (1 + 1/ratio))
    source, background, ratio = 1e-4, 1e-1, 8.0
    z = stats.norm.isf(1e-4)
    expected = z**2 * background * (1.0 + 1.0 / ratio) / source**2
    found = float(exposure_for_probability(source, background, ratio, 1e-4))
    assert found == pytest.approx(expected, rel=0.02)


def test_exposure_is_infinite_without_a_source_and_nan_for_missing_rates():
    found = exposure_for_probability(
        [0.0, 1e-12, np.nan, -1.0, 1.0], [1.0, 1.0, 1.0, 1.0, np.nan], 10.0, 1e-3
    )
    assert np.isinf(found).tolist() == [True, True, False, False, False]
    assert np.isnan(found).tolist() == [False, False, True, True, True]
