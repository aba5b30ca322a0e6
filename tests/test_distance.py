"""Luminosity distance against closed forms, published-style tables and other packages."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from embersift.constants import SPEED_OF_LIGHT_KM
from embersift.sky.distance import FlatUniverse

Z = np.array([1e-6, 1e-4, 0.01, 0.05, 0.5, 1.0, 3.0, 6.0, 20.0, 500.0])


def test_distances_equal_a_thirty_digit_quadrature():
    # shared coefficient sheet, observer's side, section 9: 30-digit quadrature, flat LCDM 70, 0.3
    z = np.array([0.01, 0.02, 0.05, 0.1, 0.5, 1.0, 2.0, 3.0, 6.0])
    mpc = [43.158235, 86.973268, 222.289055, 460.299936, 2832.938094, 6607.657612]
    mpc += [15539.586223, 25422.741745, 57728.440198]
    np.testing.assert_allclose(FlatUniverse(70.0, 0.3).luminosity_distance(z), mpc, rtol=2e-8)


def test_matter_only_universe_has_the_closed_form_of_einstein_and_de_sitter():
    # d_L = 2c/H0 (1+z) (1 - (1+z)^-1/2), any textbook
    closed = 2.0 * SPEED_OF_LIGHT_KM / 67.0 * (1 + Z) * -np.expm1(-0.5 * np.log1p(Z))
    np.testing.assert_allclose(FlatUniverse(67.0, 1.0).luminosity_distance(Z), closed, rtol=1e-11)


def test_empty_of_matter_universe_is_de_sitter_space():
    # Om = 0, flat: d_L = c/H0 z (1+z), any textbook
    closed = SPEED_OF_LIGHT_KM / 70.0 * Z * (1 + Z)
    np.testing.assert_allclose(FlatUniverse(70.0, 0.0).luminosity_distance(Z), closed, rtol=1e-10)


def test_distances_agree_with_astropy():
    from astropy.cosmology import FlatLambdaCDM

    z = np.logspace(-3, 2.9, 400)
    reference = FlatLambdaCDM(H0=70, Om0=0.3, Tcmb0=0).luminosity_distance(z).value
    np.testing.assert_allclose(
        FlatUniverse(70.0, 0.3).luminosity_distance(z), reference, rtol=5e-12
    )


@pytest.mark.filterwarnings("ignore")
def test_distances_agree_with_a_second_cosmology_package():
    # colossus (registry), integrating directly; relspecies off: no radiation
    from colossus.cosmology import cosmology

    flat = cosmology.setCosmology(
        "plain",
        params={
            "flat": True,
            "H0": 70.0,
            "Om0": 0.3,
            "Ob0": 0.05,
            "sigma8": 0.8,
            "ns": 0.96,
            "relspecies": False,
            "interpolation": False,
        },
        persistence="",
    )
    z = np.array([0.01, 0.05, 0.3, 1.0, 4.0])
    reference = flat.luminosityDistance(z) / 0.7  # colossus works in Mpc/h
    np.testing.assert_allclose(FlatUniverse(70.0, 0.3).luminosity_distance(z), reference, rtol=1e-6)


@settings(max_examples=60, deadline=None)
@given(z=st.floats(1e-8, 900.0), om0=st.floats(0.0, 1.0), h0=st.floats(50.0, 100.0))
def test_redshift_of_a_distance_is_the_redshift_it_came_from(z, om0, h0):
    universe = FlatUniverse(h0, om0)
    back = universe.redshift(universe.luminosity_distance(np.array([z])))
    np.testing.assert_allclose(back, z, rtol=1e-9)


def test_outside_the_table_is_missing_not_extrapolated():
    universe = FlatUniverse(70.0, 0.3)
    assert np.isnan(universe.luminosity_distance(np.array([1001.0, np.nan]))).all()
    assert np.isnan(universe.redshift(np.array([-1.0, 0.0, 1e12, np.nan]))).all()
