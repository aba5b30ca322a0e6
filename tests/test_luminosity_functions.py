"""The luminosity functions against their papers' totals and against adaptive quadrature."""

from __future__ import annotations

import doctest
import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.special import gamma, gammainc

from embersift.errors import LawError
from embersift.laws import luminosity_functions
from embersift.laws.luminosity_functions import LUMINOSITY_FUNCTIONS, LuminosityFunction

FUNCTIONS = tuple(LUMINOSITY_FUNCTIONS.values())
LEHMER2021 = LUMINOSITY_FUNCTIONS["lehmer2021"]
METALLICITIES = (7.0, 7.4, 7.69, 8.2, 8.69, 9.2)


def oh12_for(function: LuminosityFunction) -> float | None:
    return 8.2 if function.needs_oh12 else None


def log_total(name: str, oh12: float | None = None) -> float:
    """Log of the light [erg/s] of one Msun/yr, or of one Msun."""
    function = LUMINOSITY_FUNCTIONS[name]
    units = 1.0 if function.per == "sfr" else 1e11
    return math.log10(1e38 * float(function.moment(1, 0.01, function.high, oh12)) / units)


def lehmer2021_density(l38: float, oh12: float) -> float:
    """The formula as printed, in erg/s and logs: Lehmer et al. 2021, ApJ 907, 17."""
    dex = oh12 - 8.69
    log_l = 38.0 + math.log10(l38)
    cut = math.exp(-(10.0 ** (log_l - 39.98 - 0.60 * dex)))
    if log_l < 38.54:
        return float(1.29 * cut * l38**-1.74)
    steep = 1.16 + 1.34 * dex
    return float(1.29 * cut * (10.0**0.54) ** (steep - 1.74) * l38**-steep)


def integral_of(power: float, low: float, high: float, oh12: float) -> float:
    """Adaptive quadrature in ln L, split at the break and around the cut."""
    breaks = [
        low,
        *(x for x in (10.0**0.54, 10.0, 100.0, 300.0, 1000.0) if low < x < high),
        high,
    ]
    return sum(
        quad(
            lambda t: math.exp((power + 1.0) * t) * lehmer2021_density(math.exp(t), oh12),
            math.log(a),
            math.log(b),
            epsabs=0.0,
            epsrel=1e-12,
            limit=200,
        )[0]
        for a, b in pairwise(breaks)
    )


def test_examples_of_the_module_run() -> None:
    result = doctest.testmod(luminosity_functions)
    assert result.attempted
    assert not result.failed


@pytest.mark.parametrize("function", FUNCTIONS, ids=lambda f: f.name)
def test_function_says_what_it_is(function: LuminosityFunction) -> None:
    assert LUMINOSITY_FUNCTIONS[function.name] is function
    for words in (function.summary, function.source.citation, function.formula_text):
        assert words
    assert 0.0 < function.low < function.high < math.inf
    statuses = {function.status, *(c.status for c in function.coefficients.values())}
    if "MEM" in statuses:
        assert "memory" in function.status_note


# --- totals -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "quoted", "within"),
    [
        # Grimm, Gilfanov & Sunyaev 2003: 6.7e39 erg/s per Msun/yr
        ("grimm2003", math.log10(6.7e39), 0.003),
        # Lehmer et al. 2019, its totals: 10^39.71 (-0.09 +0.14) and 10^29.25 (-0.06 +0.07)
        ("lehmer2019-hmxb", 39.71, 0.09),
        ("lehmer2019-lmxb", 29.25, 0.005),
        # Gilfanov 2004: about 8e28 per Msun (from memory)
        ("gilfanov2004", math.log10(8e28), 0.06),
    ],
)
def test_integral_is_the_total_that_the_paper_quotes(
    name: str, quoted: float, within: float
) -> None:
    assert LUMINOSITY_FUNCTIONS[name].for_totals
    assert log_total(name) == pytest.approx(quoted, abs=within)


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        # coefficient sheet, host side, section 3 (CALC, three digits)
        ("grimm2003", 6.67e39),
        ("lehmer2019-hmxb", 4.82e39),
        ("lehmer2019-lmxb", 10**29.247),
        ("gilfanov2004", 9.0e28),
        ("mineo2012", 3.88e39),
    ],
)
def test_integral_is_that_of_the_sheet(name: str, expected: float) -> None:
    assert 10 ** log_total(name) == pytest.approx(expected, rel=2e-3)


def test_function_that_contradicts_its_own_total_is_marked() -> None:
    # Mineo, Gilfanov & Sunyaev 2012 quote 2.61e39 erg/s per Msun/yr; their function gives 3.88e39
    assert log_total("mineo2012") - math.log10(2.61e39) > 0.15
    assert [f.name for f in FUNCTIONS if not f.for_totals] == ["mineo2012"]


@pytest.mark.parametrize(("oh12", "quoted"), [(8.2, 39.94), (8.6, 39.64)])
def test_lehmer2021_gives_the_totals_of_the_papers_own_table(oh12: float, quoted: float) -> None:
    # the paper's table, rounded to 0.01 and from the full posterior (verified)
    assert log_total("lehmer2021", oh12) == pytest.approx(quoted, abs=0.02)


@pytest.mark.parametrize(
    ("oh12", "above_36", "above_39"),
    [(8.2, 54.2, 1.76), (8.69, 53.0, 0.64)],  # coefficient sheet, host side, 3.5 (CALC)
)
def test_mean_numbers_of_lehmer2021(oh12: float, above_36: float, above_39: float) -> None:
    assert float(LEHMER2021.number_above(0.01, oh12)) == pytest.approx(above_36, abs=0.05)
    assert float(LEHMER2021.number_above(10.0, oh12)) == pytest.approx(above_39, abs=0.005)


# --- moments ----------------------------------------------------------------------------------


@pytest.mark.parametrize("oh12", METALLICITIES)
@pytest.mark.parametrize("n", [0, 1, 2, 3])
@pytest.mark.parametrize(
    ("low", "high"), [(0.01, 1e4), (0.02, 0.021), (1.0, 30.0), (10.0, 1e4), (900.0, 1e4)]
)
def test_moments_with_an_exponential_cut_agree_with_adaptive_quadrature(
    oh12: float, n: int, low: float, high: float
) -> None:
    got = float(LEHMER2021.moment(n, low, high, oh12))
    assert got == pytest.approx(integral_of(n, low, high, oh12), rel=1e-9)


def test_high_moment_is_an_incomplete_gamma_function() -> None:
    # above the break at solar O/H: A Lb^(g2-g1) Lc^p [P(p, b/Lc) - P(p, a/Lc)] Gamma(p), p = 3 - g2
    slope, fold = 1.16, 10**1.98
    p = 3.0 - slope
    norm = 1.29 * (10**0.54) ** (slope - 1.74)
    expected = norm * fold**p * gamma(p) * (gammainc(p, 1e4 / fold) - gammainc(p, 4.0 / fold))
    assert float(LEHMER2021.moment(2, 4.0, 1e4, 8.69)) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(("slope", "n"), [(1.0, 0), (2.0, 1), (3.0, 2)])
def test_power_that_integrates_to_a_logarithm(slope: float, n: int) -> None:
    function = LUMINOSITY_FUNCTIONS["grimm2003"]
    expected = 3.3 * math.log(210.0 / 0.01)
    for off in (0.0, 1e-15, -1e-12, 1e-9):
        values = {"norm": 3.3, "slope_1": slope + off}
        got = float(function.moment(n, 0.01, 210.0, values=values))
        assert got == pytest.approx(expected, rel=1e-7)


def test_shallow_end_of_gilfanov2004_is_the_logarithm_of_its_slope_one() -> None:
    # 440.4 (L/0.19)^-1 integrates to 440.4 x 0.19 ln(0.19 / 0.01)
    got = LUMINOSITY_FUNCTIONS["gilfanov2004"].moment(0, 0.01, 0.19)
    assert float(got) == pytest.approx(440.4 * 0.19 * math.log(19.0), rel=1e-13)


INTERVAL = st.tuples(*(st.floats(-2.5, 4.5) for _ in range(3)))


@settings(max_examples=60, deadline=None)
@given(
    function=st.sampled_from(FUNCTIONS),
    logs=INTERVAL,
    n=st.integers(0, 3),
    oh12=st.floats(6.5, 9.6),
)
def test_moments_of_neighbouring_intervals_add_up(
    function: LuminosityFunction, logs: tuple[float, float, float], n: int, oh12: float
) -> None:
    a, b, c = (10.0**x for x in sorted(logs))
    parts = function.moment(n, a, b, oh12) + function.moment(n, b, c, oh12)
    np.testing.assert_allclose(parts, function.moment(n, a, c, oh12), rtol=1e-10, atol=1e-300)


@pytest.mark.parametrize("function", FUNCTIONS, ids=lambda f: f.name)
def test_density_is_the_slope_of_the_number(function: LuminosityFunction) -> None:
    l38 = np.geomspace(0.0103, 0.93 * function.high, 40)
    step = 1e-4
    oh12 = oh12_for(function)
    slope = function.moment(0, l38 * (1 - step), l38 * (1 + step), oh12) / (2 * step * l38)
    np.testing.assert_allclose(function.density(l38, oh12), slope, rtol=2e-4)


@pytest.mark.parametrize("function", FUNCTIONS, ids=lambda f: f.name)
def test_density_falls_without_jumps(function: LuminosityFunction) -> None:
    l38 = np.geomspace(function.low, function.high, 20001)
    dn = function.density(l38, oh12_for(function))
    with np.errstate(divide="ignore"):
        steps = np.diff(np.log(dn[dn > 1e-200]))
    assert steps.max() < 0.0
    near = l38[: steps.size] < 100.0  # the exponential cut is steep further up
    assert steps[near].min() > -0.01


@pytest.mark.parametrize("oh12", [7.2, 8.69])
def test_density_is_the_printed_formula(oh12: float) -> None:
    l38 = np.geomspace(0.01, 1e3, 50)
    expected = [lehmer2021_density(x, oh12) for x in l38.tolist()]
    np.testing.assert_allclose(LEHMER2021.density(l38, oh12), expected, rtol=1e-12)


# --- limits, missing values, other coefficients -------------------------------------------------


@pytest.mark.parametrize("function", FUNCTIONS, ids=lambda f: f.name)
def test_nothing_lies_outside_the_limits(function: LuminosityFunction) -> None:
    oh12 = oh12_for(function)
    outside = np.array([0.0, 0.0099, 1.0001 * function.high, np.inf])
    np.testing.assert_array_equal(function.density(outside, oh12), 0.0)
    whole = function.moment(1, function.low, function.high, oh12)
    np.testing.assert_array_equal(function.moment(1, 0.0, np.inf, oh12), whole)
    np.testing.assert_array_equal(function.luminosity_above(0.0, oh12), whole)
    assert function.number_above(function.high, oh12) == 0.0
    assert function.moment(0, 5.0, 2.0, oh12) == 0.0


def test_missing_values_stay_missing_without_a_warning() -> None:
    got = LEHMER2021.moment(1, np.array([0.01, np.nan, 0.01]), 1e4, np.array([8.0, 8.0, np.nan]))
    np.testing.assert_array_equal(np.isnan(got), [False, True, True])
    assert np.isnan(LEHMER2021.density(1.0, np.nan))
    assert np.isnan(LUMINOSITY_FUNCTIONS["grimm2003"].density(np.nan))


def test_metallicity_must_be_given_where_it_matters_and_is_ignored_elsewhere() -> None:
    with pytest.raises(LawError, match="depends on O/H"):
        LEHMER2021.number_above(1.0)
    plain = LUMINOSITY_FUNCTIONS["lehmer2019-hmxb"]
    assert plain.number_above(1.0, 8.0) == plain.number_above(1.0)


def test_metallicity_is_held_at_the_edges() -> None:
    got = LEHMER2021.number_above(10.0, np.array([5.0, 7.0, 9.2, 11.0]))
    assert got[0] == got[1] > got[2] == got[3]


def test_metal_poor_galaxies_have_more_bright_sources() -> None:
    # the paper's main result: the bright end rises as O/H falls
    numbers = LEHMER2021.number_above(10.0, np.linspace(7.6, 9.2, 30))
    assert np.all(np.diff(numbers) < 0.0)


def test_arguments_broadcast_and_are_left_alone() -> None:
    l38, oh12 = np.array([[0.1], [1.0], [50.0]]), np.array([7.5, 8.0, 8.5, 9.0])
    before = l38.copy(), oh12.copy()
    grid = LEHMER2021.number_above(l38, oh12)
    assert grid.shape == (3, 4)
    for i, l_one in enumerate(l38[:, 0]):
        for j, oh_one in enumerate(oh12):
            assert grid[i, j] == pytest.approx(
                float(LEHMER2021.number_above(l_one, oh_one)), rel=1e-14
            )
    np.testing.assert_array_equal(l38, before[0])
    np.testing.assert_array_equal(oh12, before[1])


@pytest.mark.parametrize("function", FUNCTIONS, ids=lambda f: f.name)
def test_numbers_follow_the_norm(function: LuminosityFunction) -> None:
    oh12 = oh12_for(function)
    doubled = {**function.values, "norm": 2.0 * function.values["norm"]}
    np.testing.assert_allclose(
        function.moment(1, 0.01, 10.0, oh12, doubled),
        2.0 * function.moment(1, 0.01, 10.0, oh12),
        rtol=1e-14,
    )
    assert "norm" in function.values
    with pytest.raises(TypeError):
        function.values["norm"] = 1.0  # type: ignore[index]
