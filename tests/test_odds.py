"""Odds against sampling, scipy's multivariate normal and the hard verdict; counts against scipy."""

import itertools

import numpy as np
import pytest
from scipy import stats

from embersift.errors import RecipeError
from embersift.exact_sums import as_floats
from embersift.odds import (
    ACCURACY,
    Scatter,
    odds,
)
from embersift.poisson_binomial import (
    EXACT_ROWS,
    expected_visible,
    poisson_binomial,
    poisson_binomial_interval,
)
from embersift.verdict import VISIBLE, judge

DRAWS = 1_000_000
LIMIT, FLOOR = 1e-16, 1e39

# flux_agn, flux_background [LIMIT], lx_agn [FLOOR]
CORNERS = np.array(
    [
        [1e3, 1e-2, 1e4],  # certain
        [1e-4, 1e-6, 1e4],  # hopelessly faint
        [1.0, 0.5, 1.0],  # every bound near
        [1.3, 0.4, 1.5],
        [0.7, 0.2, 0.6],
        [1.1, 0.0, 1.2],  # no background
        [2.0, 1.0, 1e4],  # excess near, floor far
        [1.0, 1e-5, 1e4],  # limit near, background far below: total and AGN alone agree
        [0.5, 0.5, 1e4],  # total right at the limit
        [0.9, 0.1, 30.0],
        [1e-3, 1.2, 1e4],  # only the background is bright enough
        [50.0, 20.0, 1.01],  # floor near, the rest far
        [0.0, 0.0, 0.0],  # a black hole without light
        [0.0, 1.0, 3.0],  # light that nothing lets out
        [3.0, 2.0, 0.8],
    ]
)
SCATTERS = [
    Scatter(0.3, 0.3, 0.2),
    Scatter(0.3, 0.25, 0.0),
    Scatter(0.0, 0.3, 0.2),
    Scatter(0.3, 0.0, 0.2),
    Scatter(0.0, 0.4, 0.0),
    Scatter(0.37, 0.02, 0.02),
    Scatter(0.02, 0.3, 1.0),
]


def rows(table=CORNERS):
    agn, background, lx = np.asarray(table, dtype=float).T.copy()
    return {
        "flux_agn": agn * LIMIT,
        "flux_background": background * LIMIT,
        "lx_agn": lx * FLOOR,
        "flux_limit": LIMIT,
        "floor": FLOOR,
    }


def draw(given, scatter, threshold, criterion, flux_of, background=None, draws=DRAWS, seed=11):
    """The fates of design.md 4.6, drawn: the oracle shares nothing with the quadrature."""
    random = np.random.default_rng(seed)
    k = 10.0 ** (scatter.agn * random.standard_normal(draws))
    v = 10.0 ** (scatter.variability * random.standard_normal(draws))
    b = 10.0 ** (scatter.background * random.standard_normal(draws))
    shares = []
    for agn, dark, lx in zip(
        given["flux_agn"], given["flux_background"], given["lx_agn"], strict=True
    ):
        flux = agn * k * v
        host = dark * b if background is None else background(random, draws) * dark
        with np.errstate(divide="ignore", invalid="ignore"):
            excess = flux / host
        excess[(flux == 0.0) & (host == 0.0)] = 0.0
        if criterion == "total":
            excess += 1.0
        counted = flux + host if flux_of == "total" else flux
        passed = (
            (counted >= given["flux_limit"]) & (lx * k >= given["floor"]) & (excess >= threshold)
        )
        shares.append(passed.mean())
    return np.array(shares)


def agree(got, sampled, extra=0.0, draws=DRAWS):
    # 4 sigma of the sampling; one draw more or less where it is all or nothing
    error = np.sqrt(np.maximum(got * (1.0 - got), 1.0 / draws) / draws)
    np.testing.assert_array_less(np.abs(got - sampled), 4.0 * error + ACCURACY + extra)


@pytest.mark.parametrize("scatter", SCATTERS, ids=str)
@pytest.mark.parametrize(
    ("criterion", "flux_of", "threshold"),
    [("agn", "agn", 2.0), ("agn", "total", 2.0), ("total", "agn", 2.0), ("total", "total", 1.0)],
)
def test_odds_agree_with_a_million_draws(scatter, criterion, flux_of, threshold):
    choices = {"threshold": threshold, "criterion": criterion, "flux_of": flux_of}
    got = odds(**rows(), scatter=scatter, **choices)
    agree(got, draw(rows(), scatter, **choices))


def gaussian_bounds(agn, background, lx, scatter, threshold):
    """k, t = k + v and s = t - b: least values and covariance, for scipy."""
    variances = np.square([scatter.agn, scatter.variability, scatter.background])
    to = np.array([[1, 0, 0], [1, 1, 0], [1, 1, -1]])
    least = [-np.log10(lx), -np.log10(agn), np.log10(threshold * background / agn)]
    return np.array(least), to @ np.diag(variances) @ to.T


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize(
    "scatter", [Scatter(0.3, 0.3, 0.2), Scatter(0.5, 0.05, 0.1), Scatter(0.1, 0.4, 0.6)], ids=str
)
def test_three_gaussian_bounds_are_scipys_multivariate_normal(scatter, seed):
    table = 10.0 ** np.random.default_rng(seed).normal(0.0, 0.4, (12, 3))
    got = odds(**rows(table), threshold=1.5, scatter=scatter)
    for row, value in zip(table, got, strict=True):
        least, covariance = gaussian_bounds(*row, scatter, 1.5)
        # P(x >= least) = P(-x <= -least)
        gaussian = stats.multivariate_normal(
            np.zeros(3), covariance, seed=0, maxpts=1_000_000, abseps=1e-6, releps=1e-6
        )
        wanted = gaussian.cdf(-least)
        assert value == pytest.approx(wanted, abs=ACCURACY)


def test_two_gaussian_bounds_are_scipys_multivariate_normal():
    table = 10.0 ** np.random.default_rng(4).normal(0.0, 0.4, (30, 3))
    scatter = Scatter(0.3, 0.2, 0.1)
    got = odds(**{**rows(table), "floor": 0.0}, threshold=2.0, scatter=scatter)
    for row, value in zip(table, got, strict=True):
        least, covariance = gaussian_bounds(*row, scatter, 2.0)
        wanted = stats.multivariate_normal(np.zeros(2), covariance[1:, 1:]).cdf(-least[1:])
        assert value == pytest.approx(wanted, abs=ACCURACY)


def test_one_bound_is_the_normal_distribution():
    # median at the limit: a half; one sigma above: 0.8413 (any table of the normal distribution)
    given = rows([[1.0, 0.0, 1e9], [10**0.3, 0.0, 1e9], [10**-0.6, 0.0, 1e9]])
    got = odds(**given, threshold=2.0, scatter=Scatter(agn=0.3))
    np.testing.assert_allclose(got, [0.5, 0.841344746, 0.022750132], atol=ACCURACY)


def test_both_medians_at_their_bounds_give_a_quarter_and_the_arcsine():
    # Sheppard 1899: P(U > 0, V > 0) = 1/4 + asin(rho)/(2 pi)
    scatter = Scatter(agn=0.3, background=0.4)
    got = odds(**rows([[1.0, 0.5, 1e9]]), threshold=2.0, scatter=scatter)
    assert got[0] == pytest.approx(0.25 + np.arcsin(0.6) / (2 * np.pi), abs=1e-9)


@pytest.mark.parametrize("criterion", ["agn", "total"])
@pytest.mark.parametrize("flux_of", ["agn", "total"])
@pytest.mark.parametrize("threshold", [1.0, 2.0, 5.0])
def test_without_scatter_odds_are_the_verdict_and_equality_passes(criterion, flux_of, threshold):
    steps = np.array([0.0, 0.25, 0.5, 1.0, 2.0, 4.0, 5.0])
    given = rows(np.array(list(itertools.product(steps, steps, [0.0, 0.5, 1.0, 2.0]))))
    agn, background = given["flux_agn"], given["flux_background"]
    with np.errstate(divide="ignore", invalid="ignore"):
        excess = agn / background
    excess[(agn == 0.0) & (background == 0.0)] = 0.0
    yes = np.ones(agn.shape, dtype=bool)
    fates = judge(
        usable=yes,
        has_hole=yes,
        accreting=yes,
        flux_counted=agn + background if flux_of == "total" else agn,
        flux_limit=LIMIT,
        lx_agn=given["lx_agn"],
        floor=FLOOR,
        excess=excess + (criterion == "total"),
        threshold=threshold,
    )
    got = odds(
        **given, threshold=threshold, criterion=criterion, flux_of=flux_of, scatter=Scatter()
    )
    assert np.array_equal(got, fates == VISIBLE)


@pytest.mark.parametrize("flux_of", ["agn", "total"])
def test_odds_tend_to_the_verdict_as_scatter_tends_to_zero(flux_of):
    table = 10.0 ** np.random.default_rng(5).uniform(-1.0, 1.0, (2000, 3))
    hard = odds(**rows(table), threshold=2.0, flux_of=flux_of, scatter=Scatter())
    for tiny in itertools.product([0.0, 1e-7], repeat=3):
        soft = odds(**rows(table), threshold=2.0, flux_of=flux_of, scatter=Scatter(*tiny))
        np.testing.assert_allclose(soft, hard, atol=ACCURACY)


@pytest.mark.parametrize("flux_of", ["agn", "total"])
@pytest.mark.parametrize("scatter", SCATTERS, ids=str)
def test_odds_never_rise_with_limit_floor_or_threshold(scatter, flux_of):
    table = 10.0 ** np.random.default_rng(6).normal(0.0, 0.7, (300, 3))
    for key, values in {
        "flux_limit": LIMIT * np.logspace(-2, 2, 21),
        "floor": FLOOR * np.logspace(-2, 2, 11),
        "threshold": np.logspace(-1, 1, 11),
    }.items():
        choices = {**rows(table), "threshold": 2.0, "flux_of": flux_of, "scatter": scatter}
        found = [odds(**{**choices, key: value}) for value in values]
        assert np.diff(found, axis=0).max() <= ACCURACY


def test_a_brighter_limit_than_any_flux_leaves_nothing_and_no_limit_everything():
    choices = {"threshold": 0.0, "scatter": Scatter(0.3, 0.3, 0.2)}
    given = {**rows(CORNERS[:12]), "floor": 0.0}
    for flux_of in ("agn", "total"):
        none = odds(**{**given, "flux_limit": np.inf}, flux_of=flux_of, **choices)
        every = odds(**{**given, "flux_limit": 0.0}, flux_of=flux_of, **choices)
        np.testing.assert_allclose(none, 0.0, atol=ACCURACY)
        np.testing.assert_allclose(every, 1.0, atol=ACCURACY)


def test_rows_do_not_depend_on_their_neighbours():
    table = 10.0 ** np.random.default_rng(7).normal(0.0, 0.5, (40_000, 3))
    choices = {"threshold": 2.0, "scatter": Scatter(0.3, 0.3, 0.2), "flux_of": "total"}
    whole = odds(**rows(table), **choices)
    np.testing.assert_allclose(odds(**rows(table[17_000:17_050]), **choices),
                               whole[17_000:17_050], atol=1e-14)  # fmt: skip


def test_masks_and_missing_numbers():
    given = rows([[9.0, 1.0, 9.0]] * 6)
    given["flux_agn"][3] = np.nan
    given["flux_agn"][4] = np.nan
    got = odds(
        **given,
        threshold=2.0,
        scatter=Scatter(),
        usable=np.array([True, False, True, True, True, True]),
        active=np.array([True, True, False, True, False, True]),
        blended=np.array([False, False, False, False, False, True]),
    )
    np.testing.assert_array_equal(got, [1.0, np.nan, 0.0, np.nan, 0.0, 0.0])


# --- other backgrounds ------------------------------------------------------------------------


@pytest.mark.parametrize("flux_of", ["agn", "total"])
@pytest.mark.parametrize(
    "scatter", [Scatter(0.3, 0.0, 0.2), Scatter(0.3), Scatter(), Scatter(0.05)]
)
def test_a_log_normal_given_as_survival_is_the_log_normal(scatter, flux_of):
    given, sigma = rows(np.delete(CORNERS[:12], 5, axis=0)), 0.3

    def survival(flux, which):
        median = given["flux_background"][which]
        median = median[:, None] if flux.ndim == 2 else median
        with np.errstate(divide="ignore"):
            return stats.norm.sf((np.log10(flux) - np.log10(median)) / sigma)

    choices = {"threshold": 2.0, "flux_of": flux_of}
    got = odds(**given, scatter=scatter, background_survival=survival, **choices)
    both = Scatter(scatter.agn, sigma, scatter.variability)
    np.testing.assert_allclose(got, odds(**given, scatter=both, **choices), atol=5e-5)


@pytest.mark.parametrize("flux_of", ["agn", "total"])
def test_a_background_that_is_often_no_more_than_its_gas_agrees_with_draws(flux_of):
    # with probability exp(-0.7) gas alone, else gas and one binary with a power-law luminosity
    gas, slope, silent = 0.4, 0.6, np.exp(-0.7)
    given = rows(CORNERS[[2, 3, 4, 6, 8, 9, 14]])

    def survival(flux, which):
        median = given["flux_background"][which]
        ratio = flux / (median[:, None] if flux.ndim == 2 else median)
        binaries = (1.0 - silent) * np.maximum((ratio - gas) / 0.05, 1.0) ** -slope
        return np.where(ratio <= gas, 1.0, binaries)

    def background(random, draws):
        binary = 0.05 * random.random(draws) ** (-1.0 / slope)
        return gas + np.where(random.random(draws) < silent, 0.0, binary)

    scatter = Scatter(0.3, 0.0, 0.2)
    got = odds(
        **given,
        threshold=2.0,
        scatter=scatter,
        flux_of=flux_of,
        background_survival=survival,
        background_least=gas * given["flux_background"],
    )
    # the one binary begins at once at 0.05: a second kink that the quadrature is not told of
    agree(got, draw(given, scatter, 2.0, "agn", flux_of, background), extra=5e-4)


def test_a_distribution_and_a_scatter_of_the_background_are_refused_together():
    with pytest.raises(RecipeError, match="count twice"):
        odds(
            **rows(),
            threshold=2.0,
            scatter=Scatter(0.3, 0.3),
            background_survival=lambda flux, which: np.ones(flux.shape),
        )


@pytest.mark.parametrize("value", [-0.1, np.nan, np.inf])
@pytest.mark.parametrize("name", ["agn", "background", "variability"])
def test_an_impossible_scatter_is_refused_by_name(name, value):
    with pytest.raises(RecipeError, match=name):
        Scatter(**{name: value})


# --- how many ---------------------------------------------------------------------------------


def enumerated(p):
    """Distribution of the count from all 2^n outcomes."""
    chances = np.zeros(p.size + 1)
    for outcome in itertools.product([0, 1], repeat=p.size):
        chances[sum(outcome)] += np.prod(np.where(outcome, p, 1.0 - p))
    return chances


@pytest.mark.parametrize("seed", range(3))
def test_counts_agree_with_all_4096_outcomes(seed):
    p = np.random.default_rng(seed).random(12)
    chances = enumerated(p)
    n = np.arange(13)
    mean, variance = poisson_binomial(p)
    assert mean == pytest.approx(chances @ n)
    assert variance == pytest.approx(chances @ (n - mean) ** 2)
    for level in (0.5, 0.6827, 0.9, 0.999):
        tails = [(1 - level) / 2, (1 + level) / 2]
        assert poisson_binomial_interval(p, level) == tuple(
            np.searchsorted(np.cumsum(chances), tails)
        )


@pytest.mark.parametrize("trials", [1, 2, 7, 100, 3000, EXACT_ROWS, 200_000])
@pytest.mark.parametrize("p", [1e-5, 0.013, 0.47, 0.98])
def test_equal_odds_give_the_binomial(trials, p):
    interval = poisson_binomial_interval(np.full(trials, p), 0.95)
    variance = trials * p * (1 - p)
    slack = 1 if trials > EXACT_ROWS and variance > 1e4 else 0
    np.testing.assert_allclose(interval, stats.binom.ppf([0.025, 0.975], trials, p), atol=slack)


def test_certain_rows_only_shift_the_count_and_nan_is_left_out():
    p = np.array([0.3, 0.6, 0.2])
    low, high = poisson_binomial_interval(p, 0.9)
    more = np.concatenate([p, np.ones(5), np.zeros(4), [np.nan]])
    assert poisson_binomial_interval(more, 0.9) == (low + 5, high + 5)
    assert poisson_binomial(more)[0] == pytest.approx(6.1)
    assert poisson_binomial_interval(np.array([1.0, 1.0, 0.0]), 0.9) == (2, 2)
    assert poisson_binomial_interval(np.array([]), 0.9) == (0, 0)


@pytest.mark.parametrize("level", [0.0, 1.0, -1.0, np.nan])
def test_an_impossible_level_is_refused(level):
    with pytest.raises(RecipeError, match="level"):
        poisson_binomial_interval(np.array([0.5]), level)


def test_expected_numbers_add_up_to_the_last_bit_however_the_rows_are_cut():
    random = np.random.default_rng(8)
    p, index = random.random(5000), random.integers(0, 4, 5000)
    p[::50] = np.nan
    p[1::50] = 1e-200
    weight = random.lognormal(size=5000)
    whole = expected_visible(p, index, 4, weight)
    cuts = np.split(random.permutation(5000), [1, 700, 701, 3000])
    parts = [expected_visible(p[c], index[c], 4, weight[c]) for c in cuts]
    total = parts[0]
    for part in parts[1:]:
        total = total + part
    assert np.array_equal(total.sums, whole.sums)
    assert np.array_equal(total.variances, whole.variances)
    assert np.array_equal(total.rows, whole.rows)
    np.testing.assert_array_equal(as_floats(total.sums), whole.mean)


def test_expected_number_and_spread_are_those_of_drawn_populations():
    random = np.random.default_rng(9)
    p, index = random.random(60), random.integers(0, 2, 60)
    weight = random.uniform(0.5, 2.0, 60)
    seen = (random.random((100_000, 60)) < p) * weight
    expected = expected_visible(p, index, 2, weight)
    for bin_ in (0, 1):
        counts = seen[:, index == bin_].sum(axis=1)
        assert expected.mean[bin_] == pytest.approx(counts.mean(), abs=4 * counts.std() / 316)
        assert expected.spread[bin_] == pytest.approx(counts.std(), rel=0.01)
