"""IMFs, metallicity scales and rates: the published factors, and there and back again."""

from __future__ import annotations

import doctest
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from embersift.errors import LawError
from embersift.laws import conversions
from embersift.laws.conversions import (
    IMF_FACTORS,
    imf_factor,
    inflow_from_growth,
    oh12_from_mass_fraction,
    oh12_from_zsun,
)

IMFS = ("salpeter", "kroupa", "chabrier")
QUANTITIES = ("sfr", "mstar")


def test_examples_of_the_module_run() -> None:
    result = doctest.testmod(conversions)
    assert result.attempted
    assert not result.failed


@pytest.mark.parametrize(
    ("quantity", "to", "factor"),
    [
        # Madau & Dickinson 2014, ARA&A 52, 415: what a Salpeter value is multiplied by
        ("sfr", "chabrier", 0.63),
        ("sfr", "kroupa", 0.67),
        ("mstar", "chabrier", 0.61),
        ("mstar", "kroupa", 0.66),
    ],
)
def test_published_imf_factors(quantity: str, to: str, factor: float) -> None:
    assert imf_factor(quantity, "salpeter", to) == factor  # type: ignore[arg-type]


@given(st.sampled_from(QUANTITIES), *(st.sampled_from(IMFS) for _ in range(3)))
def test_imf_conversions_chain_and_come_back(quantity: str, a: str, b: str, c: str) -> None:
    assert imf_factor(quantity, a, a) == 1.0  # type: ignore[arg-type]
    there, on = imf_factor(quantity, a, b), imf_factor(quantity, b, c)  # type: ignore[arg-type]
    assert there * on == pytest.approx(imf_factor(quantity, a, c), rel=1e-14)  # type: ignore[arg-type]


def test_fewer_stars_make_the_same_light_under_a_lighter_imf() -> None:
    # Salpeter counts many faint stars that the others do not
    for quantity in QUANTITIES:
        assert imf_factor(quantity, "salpeter", "kroupa") < 1.0  # type: ignore[arg-type]
        assert imf_factor(quantity, "kroupa", "chabrier") < 1.0  # type: ignore[arg-type]


def test_unverified_imf_factors_say_so() -> None:
    status = {(q, imf): IMF_FACTORS[q][imf].status for q in QUANTITIES for imf in IMFS[1:]}
    assert status.pop(("sfr", "chabrier")) == "V"
    assert set(status.values()) == {"MEM"}


def test_unknown_imf_is_refused_with_the_nearest_name() -> None:
    with pytest.raises(LawError, match="Did you mean kroupa"):
        imf_factor("sfr", "krupa", "salpeter")


@given(st.floats(5.0, 10.0), st.floats(8.0, 9.0))
def test_solar_units_come_back(oh12: float, solar: float) -> None:
    back = oh12_from_zsun(10.0 ** (oh12 - solar), solar)
    assert float(back) == pytest.approx(oh12, abs=1e-12)


@given(st.floats(1e-8, 0.9), st.sampled_from([0.0134, 0.0142, 0.02]))
def test_mass_fraction_is_the_solar_ratio_of_its_own_scale(z: float, solar: float) -> None:
    got = float(oh12_from_mass_fraction(z, solar))
    assert got == pytest.approx(float(oh12_from_zsun(z / solar)), abs=1e-12)
    assert got - math.log10(z) == pytest.approx(8.69 - math.log10(solar), abs=1e-12)


def test_the_sun_is_the_sun_on_every_scale() -> None:
    # Asplund et al. 2009: 8.69; solar mass fractions 0.0134, 0.0142 (protosolar), 0.02 (older)
    assert float(oh12_from_zsun(1.0)) == 8.69
    for solar in (0.0134, 0.0142, 0.02):
        assert float(oh12_from_mass_fraction(solar, solar)) == pytest.approx(8.69, abs=1e-12)


def test_solar_scale_mistaken_for_another_is_worth_a_sixth_of_a_dex() -> None:
    # log10(0.02 / 0.0134) = 0.174
    mistaken = float(oh12_from_mass_fraction(0.01, 0.0134) - oh12_from_mass_fraction(0.01, 0.02))
    assert mistaken == pytest.approx(0.174, abs=5e-4)


def test_no_metals_means_no_number_and_no_warning() -> None:
    z = np.array([0.0, -1.0, np.nan, 0.5])
    for got in (oh12_from_zsun(z), oh12_from_mass_fraction(z, 0.02)):
        np.testing.assert_array_equal(np.isnan(got), [True, True, True, False])
    np.testing.assert_array_equal(z, [0.0, -1.0, np.nan, 0.5])


@pytest.mark.parametrize("solar", [0.0, -0.02, math.nan])
def test_solar_mass_fraction_must_be_positive(solar: float) -> None:
    with pytest.raises(LawError, match="must be positive"):
        oh12_from_mass_fraction(0.01, solar)


@given(st.floats(0.0, 1e3), st.floats(0.0, 0.42))
def test_what_flows_in_grows_the_hole_or_is_radiated(rate: float, efficiency: float) -> None:
    inflow = float(inflow_from_growth(rate, efficiency))
    assert inflow - efficiency * inflow == pytest.approx(rate, rel=1e-12)


def test_a_tenth_radiated_is_a_ninth_more_inflow() -> None:
    # coefficient sheet, AGN side, 2.10: 5.663e41 erg/s from inflow, 6.292e41 from growth
    got = inflow_from_growth(np.array([5.663, 0.0, np.nan]), 0.1)
    assert got[0] == pytest.approx(6.292, rel=2e-4)
    assert got[1] == 0.0
    assert np.isnan(got[2])


@pytest.mark.parametrize("efficiency", [-0.1, 1.0, 1.5, math.nan])
def test_impossible_efficiency_is_refused(efficiency: float) -> None:
    with pytest.raises(LawError, match=r"agn\.efficiency"):
        inflow_from_growth(1.0, efficiency)
