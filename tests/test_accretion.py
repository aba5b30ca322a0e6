"""The accretion laws against their papers, closed forms and what any disc must obey."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from embersift.constants import EDDINGTON_PER_MSUN, RATE_TO_LUMINOSITY
from embersift.errors import LawError
from embersift.laws.accretion import ACCRETION, isco_efficiency, isco_radius
from embersift.laws.declaration import AccretionLaw, Array, Check, Disc

LAWS = tuple(ACCRETION.values())
RATES = np.logspace(-12, 5, 400)


def ratio(
    name: str, rate: float, efficiency: float = 0.1, spin: float = 0.0, delta: float = 0.1
) -> float:
    return float(
        ACCRETION[name].eddington_ratio(np.array([rate]), Disc(efficiency, spin, delta))[0]
    )


def efficiency_at(name: str, mdot_ten: float, delta: float = 0.1) -> float:
    """Efficiency at a rate given in units of 10 L_Edd/c2."""
    return ratio(name, 10.0 * mdot_ten, delta=delta) / (10.0 * mdot_ten)


@pytest.mark.parametrize(
    ("law", "check"),
    [
        pytest.param(law, check, id=f"{law.name}-{number}")
        for law in LAWS
        for number, check in enumerate(law.checks)
    ],
)
def test_law_gives_its_declared_check_values(law: AccretionLaw, check: Check) -> None:
    disc = Disc(**{name: x for name, x in check.inputs.items() if name in Disc._fields})
    light = float(law.eddington_ratio(np.array([check.inputs["mdot"]]), disc)[0])
    got = {"eddington_ratio": light, "efficiency": light / check.inputs["mdot"]}
    assert got[check.quantity] == pytest.approx(check.expected, rel=check.rtol)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_law_says_what_it_is(law: AccretionLaw) -> None:
    assert law.name == next(name for name, one in ACCRETION.items() if one is law)
    for words in (law.summary, law.source.citation, law.formula_text, law.outside):
        assert words
    assert law.checks
    statuses = {law.status, law.source.status, *(c.status for c in law.coefficients.values())}
    statuses |= {span.status for span in law.ranges}
    if "MEM" in statuses:
        assert law.status_note


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_no_inflow_gives_no_light_and_missing_inflow_stays_missing(law: AccretionLaw) -> None:
    rate = np.array([0.0, np.nan, 1.0])
    light = law.eddington_ratio(rate, Disc())
    assert light[0] == 0.0
    assert np.isnan(light[1])
    assert light[2] > 0.0
    np.testing.assert_array_equal(rate, [0.0, np.nan, 1.0])  # the caller's array is left alone


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_infinite_inflow_is_not_missing(law: AccretionLaw) -> None:
    # a catalogue row with a vanishing mass has an infinite rate: bright, never NaN
    light = law.eddington_ratio(np.array([np.inf]), Disc())
    assert light[0] > 1.0


# --- the last stable orbit ------------------------------------------------------------------


@pytest.mark.parametrize(
    ("spin", "radius", "efficiency"),
    # Bardeen, Press & Teukolsky 1972: closed forms
    [
        (0.0, 6.0, 1.0 - math.sqrt(8.0 / 9.0)),
        (1.0, 1.0, 1.0 - 1.0 / math.sqrt(3.0)),
        (-1.0, 9.0, 1.0 - math.sqrt(25.0 / 27.0)),
    ],
)
def test_last_orbit_has_its_closed_forms(spin: float, radius: float, efficiency: float) -> None:
    assert isco_radius(spin) == pytest.approx(radius, rel=1e-12)
    assert isco_efficiency(spin) == pytest.approx(efficiency, rel=1e-12)


@given(st.floats(-1.0, 1.0))
@settings(max_examples=200, deadline=None)
def test_last_orbit_is_where_stability_ends(spin: float) -> None:
    # Bardeen, Press & Teukolsky 1972, eq. 2.20: r^2 - 6 r + 8 a sqrt(r) - 3 a^2 = 0, which the
    # explicit root of eq. 2.21 must satisfy
    r = isco_radius(spin)
    terms = (r**2, -6.0 * r, 8.0 * spin * math.sqrt(r), -3.0 * spin**2)
    assert abs(sum(terms)) < 1e-7 * sum(abs(term) for term in terms)


@given(st.floats(-0.999, 0.999))
@settings(max_examples=200, deadline=None)
def test_efficiency_is_the_binding_energy_of_the_last_orbit(spin: float) -> None:
    # Bardeen, Press & Teukolsky 1972, eq. 2.12: energy of a circular orbit at radius r
    root = math.sqrt(isco_radius(spin))
    energy = (root**3 - 2.0 * root + spin) / (
        root**1.5 * math.sqrt(root**3 - 3.0 * root + 2.0 * spin)
    )
    assert isco_efficiency(spin) == pytest.approx(1.0 - energy, rel=1e-6)


@pytest.mark.parametrize(
    ("spin", "radius", "efficiency"),
    # table of the coefficient sheet (CALC)
    [
        (-0.5, 7.5546, 0.0451),
        (0.3, 4.9786, 0.0694),
        (0.5, 4.2330, 0.0821),
        (0.67, 3.5281, 0.0994),
        (0.7, 3.3931, 0.1036),
        (0.9, 2.3209, 0.1558),
        (0.95, 1.9372, 0.1901),
        (0.98, 1.6140, 0.2339),
        (0.99, 1.4545, 0.2640),
        (0.998, 1.2370, 0.3210),
    ],
)
def test_last_orbit_matches_the_table(spin: float, radius: float, efficiency: float) -> None:
    assert isco_radius(spin) == pytest.approx(radius, abs=6e-5)
    assert isco_efficiency(spin) == pytest.approx(efficiency, abs=6e-5)


@pytest.mark.parametrize("spin", [1.0000001, -1.5, math.nan, math.inf])
@pytest.mark.parametrize("name", ["isco", "madau2014"])
def test_impossible_spin_is_refused(name: str, spin: float) -> None:
    with pytest.raises(LawError, match=r"between -1 and 1.*agn\.spin"):
        ratio(name, 1.0, spin=spin)


# --- two regimes ----------------------------------------------------------------------------


@pytest.mark.parametrize(("name", "f_critical"), [("two-regime", 0.1), ("merloni2008", 0.03)])
@pytest.mark.parametrize("efficiency", [0.06, 0.1, 0.3])
def test_branches_meet_without_a_step(name: str, f_critical: float, efficiency: float) -> None:
    joint = f_critical / efficiency
    below, above = (ratio(name, joint * (1.0 + d), efficiency) for d in (-1e-9, 1e-9))
    assert below == pytest.approx(f_critical, rel=1e-8)
    assert above == pytest.approx(f_critical, rel=1e-8)


def test_thin_branch_is_the_constant_law_to_the_last_bit() -> None:
    rate = RATES[RATES * 0.1 >= 0.1]
    np.testing.assert_array_equal(
        ACCRETION["two-regime"].eddington_ratio(rate, Disc(0.1)),
        ACCRETION["constant"].eddington_ratio(rate, Disc(0.1)),
    )


def test_worked_chain_of_the_sheet() -> None:
    # coefficient sheet, section 2.10 (CALC): 1e5 Msun, 1e-4 and 1e-6 Msun/yr, eps = 0.1
    eddington = 1e5 * EDDINGTON_PER_MSUN
    rate = 1e-4 * RATE_TO_LUMINOSITY / eddington
    assert ratio("constant", rate) == pytest.approx(0.04505, rel=2e-4)
    assert ratio("constant", rate) * eddington == pytest.approx(5.663e41, rel=2e-4)
    assert ratio("constant", rate / 0.9) * eddington == pytest.approx(6.292e41, rel=2e-4)
    assert ratio("constant", rate / 100.0) * eddington == pytest.approx(5.663e39, rel=2e-4)
    assert ratio("two-regime", rate / 100.0) * eddington == pytest.approx(2.551e37, rel=3e-4)


# --- fits of hot flows ----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("name", "delta", "joint", "left", "right"),
    # coefficient sheet, sections 2.6 and 2.7 (CALC): efficiency on either side of each joint
    [
        ("xie2012", 0.5, 2.9e-5, 0.0354, 0.0353),
        ("xie2012", 0.5, 3.3e-3, 0.0506, 0.0491),
        ("xie2012", 0.1, 9.4e-5, 0.00764, 0.00737),
        ("xie2012", 0.1, 5.0e-3, 0.0216, 0.0216),
        ("xie2012", 1e-3, 7.6e-5, 0.00203, 0.00202),
        ("xie2012", 1e-3, 4.5e-3, 0.0137, 0.0139),
        ("inayoshi2019", 0.1, 0.023, 0.0563, 0.0567),
        ("inayoshi2019", 0.1, 1e-4, 0.0132, 0.01297),
    ],
)
def test_segments_meet_as_published(
    name: str, delta: float, joint: float, left: float, right: float
) -> None:
    assert efficiency_at(name, joint * (1.0 - 1e-9), delta) == pytest.approx(left, rel=4e-3)
    assert efficiency_at(name, joint * (1.0 + 1e-9), delta) == pytest.approx(right, rel=4e-3)


@pytest.mark.parametrize(
    ("delta", "last", "end"),
    # coefficient sheet, section 2.6: the delta = 0.5 fit ends at 0.0835
    [(0.5, 5.3e-3, 0.0835), (0.1, 6.6e-3, None), (1e-3, 7.1e-3, None)],
)
def test_above_its_last_segment_xie2012_is_the_chosen_thin_disc(
    delta: float, last: float, end: float | None
) -> None:
    if end is not None:
        assert efficiency_at("xie2012", last, delta) == pytest.approx(end, rel=1e-3)
    rate = 10.0 * last * (1.0 + 1e-9)
    assert ratio("xie2012", rate, 0.2, delta=delta) == pytest.approx(0.2 * rate, rel=1e-12)
    assert ratio("xie2012", 50.0, 0.2, delta=delta) == pytest.approx(10.0, rel=1e-12)


def test_xie2012_lists_the_heating_shares_it_has() -> None:
    with pytest.raises(LawError, match=r"delta = 0\.3.*0\.5, 0\.1, 0\.001.*agn\.delta"):
        ratio("xie2012", 1.0, delta=0.3)


@given(st.floats(1e-7, 5e-3), st.sampled_from([(0.5, 0.1), (0.1, 1e-3)]))
@settings(max_examples=100, deadline=None)
def test_hotter_electrons_shine_brighter(mdot: float, deltas: tuple[float, float]) -> None:
    # Xie & Yuan 2012: the efficiency grows with delta, at any rate below the thin disc
    more, less = deltas
    assert efficiency_at("xie2012", mdot, more) > efficiency_at("xie2012", mdot, less)


@pytest.mark.parametrize(("mdot", "dex"), [(1e-6, 0.44), (1e-4, 0.24), (1e-3, 0.24)])
def test_inayoshi2019_lies_above_xie2012_by_what_the_sheet_says(mdot: float, dex: float) -> None:
    # coefficient sheet, section 2.7 (CALC)
    step = math.log10(efficiency_at("inayoshi2019", mdot) / efficiency_at("xie2012", mdot, 0.1))
    assert step == pytest.approx(dex, abs=0.006)


def test_inayoshi2019_holds_its_efficiency_below_its_range_and_marks_the_row() -> None:
    held = efficiency_at("inayoshi2019", 1e-8)
    for mdot in (1e-9, 1e-12, 1e-20):
        assert efficiency_at("inayoshi2019", mdot) == pytest.approx(held, rel=1e-12)
    rate = np.array([0.9e-7, 1e-7, 1.0, np.nan])
    marks = ACCRETION["inayoshi2019"].stretched(mdot=rate)
    assert marks.tolist() == [True, False, False, False]


# --- above the Eddington limit --------------------------------------------------------------


@pytest.mark.parametrize(
    ("spin", "crossing"),
    # where the fit and the thin disc cross, from a root finder outside the package (CALC); the
    # coefficient sheet (section 2.9) puts the switch at L / L_Edd of about 0.3 to 0.5
    [(0.0, 0.2475), (0.5, 0.2667), (0.9, 0.5252)],
)
def test_slim_disc_takes_over_where_the_law_says(spin: float, crossing: float) -> None:
    rate = crossing / isco_efficiency(spin)
    for factor, is_thin in ((1e-3, True), (0.999, True), (1.001, False), (100.0, False)):
        slim = ratio("madau2014", factor * rate, spin=spin)
        thin = ratio("isco", factor * rate, spin=spin)
        assert (slim == thin) is is_thin
        assert slim <= thin


@given(st.floats(-1.0, 1.0), st.floats(-6.0, 5.0))
@settings(max_examples=200, deadline=None)
def test_slim_disc_never_outshines_the_thin_one(spin: float, log_rate: float) -> None:
    assert ratio("madau2014", 10.0**log_rate, spin=spin) <= ratio("isco", 10.0**log_rate, spin=spin)


def test_slim_disc_saturates_near_the_eddington_limit() -> None:
    # Madau et al. 2014: photon trapping keeps L to a few L_Edd, whatever the rate
    assert 3.0 < ratio("madau2014", np.inf, spin=0.0) < 10.0


# --- what holds for every disc --------------------------------------------------------------


@pytest.mark.parametrize("name", ["constant", "two-regime", "merloni2008", "isco", "madau2014"])
@given(
    rates=st.lists(st.floats(1e-15, 1e6), min_size=2, max_size=20),
    spin=st.floats(-1.0, 1.0),
    efficiency=st.floats(0.01, 0.42),
)
@settings(max_examples=60, deadline=None)
def test_more_inflow_never_means_less_light(
    name: str, rates: list[float], spin: float, efficiency: float
) -> None:
    ordered = np.sort(np.array(rates))
    light = ACCRETION[name].eddington_ratio(ordered, Disc(efficiency, spin))
    assert all(b >= a * (1.0 - 1e-14) for a, b in pairwise(light.tolist()))


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
@pytest.mark.parametrize("spin", [-1.0, 0.0, 0.998])
@pytest.mark.parametrize("delta", [0.5, 0.1, 1e-3])
def test_no_disc_releases_more_than_the_rest_energy(
    law: AccretionLaw, spin: float, delta: float
) -> None:
    light: Array = law.eddington_ratio(RATES, Disc(0.1, spin, delta))
    assert np.all(np.isfinite(light))
    assert np.all(light > 0.0)
    # 0.4226: the last orbit of a hole that spins as fast as it can (BPT 1972)
    assert np.all(light <= 0.4227 * RATES)


@pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)
def test_thin_discs_are_marked_above_the_eddington_limit(law: AccretionLaw) -> None:
    above = np.array([0.5, 1.0, 1.0001, np.nan])
    expected = [False, False, law.name != "madau2014", False]
    assert law.stretched(eddington_ratio=above).tolist() == expected
