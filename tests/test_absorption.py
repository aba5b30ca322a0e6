"""Photoelectric absorption against element-by-element cross-sections and published values."""

import itertools

import numpy as np
import pytest
from scipy.integrate import quad

from embersift.bands import Band
from embersift.sky.absorption import EDGES, cross_section, power_law_transmission

NONE = np.zeros(1)


def transmission(band, nh, z=0.0, gamma=1.8, galactic=0.0):
    share = power_law_transmission(gamma, Band(*band), galactic, np.array([nh]), np.array([z]))
    return float(share[0])


@pytest.mark.parametrize(
    ("energy", "ratio"),
    [(0.5, 1.016), (1.0, 1.004), (2.0, 1.002), (4.0, 1.004), (6.0, 0.984), (7.5, 0.998)],
)
def test_cross_section_is_the_sum_over_the_elements_of_the_paper(energy, ratio):
    # Elemental cross-sections of xraydb (Elam tables, an independent compilation), summed over the
    # abundances that Morrison & McCammon 1983 adopted from Anders & Ebihara 1982 (from memory).
    # The ratios were measured once with xraydb 4.5; both tables' own accuracy is a few per cent.
    import xraydb

    abundance = {"H": 12, "He": 11.0, "C": 8.65, "N": 7.96, "O": 8.87, "Ne": 8.14, "Na": 6.32}
    abundance |= {"Mg": 7.60, "Al": 6.49, "Si": 7.57, "S": 7.28, "Ar": 6.58, "Ca": 6.35}
    abundance |= {"Cr": 5.69, "Fe": 7.52, "Ni": 6.26}
    summed = 0.0
    for element, log_number in abundance.items():
        per_gram = xraydb.mu_elam(element, energy * 1e3, kind="photo")
        summed += 10 ** (log_number - 12.0) * per_gram * xraydb.atomic_mass(element) / 6.02214076e23
    measured = float(cross_section(np.array([energy]))[0]) / summed
    assert measured == pytest.approx(ratio, abs=0.004)
    assert measured == pytest.approx(1.0, abs=0.03)


def test_cross_section_continues_as_inverse_cube_above_ten_kev():
    ten, twenty = cross_section(np.array([10.0, 20.0]))
    assert twenty == pytest.approx(ten / 8.0, rel=1e-12)


@pytest.mark.parametrize(
    ("band", "shares"),
    [
        ((0.5, 2.0), [0.9703, 0.7599, 0.2112, 0.0009]),
        ((2.0, 10.0), [0.9991, 0.9910, 0.9175, 0.5592, 0.0876]),
        ((0.5, 8.0), [0.9866, 0.8905, 0.6055, 0.2843, 0.0295]),
        ((0.3, 10.0), [0.9735, 0.8309, 0.5745, 0.3057, 0.0478]),
    ],
)
def test_transmission_of_a_power_law(band, shares):
    # coefficient sheet, observer's side, section 1 (computed there with independent code)
    for exponent, share in zip(range(20, 25), shares, strict=False):
        assert transmission(band, 10.0**exponent) == pytest.approx(share, abs=6e-5)


@pytest.mark.parametrize(
    ("z", "nh", "shares"),
    [
        (0.5, 1e22, (0.4423, 0.9692, 0.7392)),
        (1.0, 1e23, (0.1150, 0.8664, 0.5299)),
        (3.0, 1e24, (0.0518, 0.7651, 0.4346)),
    ],
)
def test_absorber_at_redshift(z, nh, shares):
    # coefficient sheet, observer's side, section 9
    for band, share in zip([(0.5, 2.0), (2.0, 10.0), (0.5, 8.0)], shares, strict=True):
        assert transmission(band, nh, z) == pytest.approx(share, abs=6e-5)


@pytest.mark.parametrize("z", [0.0, 0.13, 1.7])
def test_both_columns_together_equal_adaptive_quadrature(z):
    # scipy's adaptive integrator, told where the edges of both frames lie
    band, nh, galactic, gamma = (0.4, 7.5), 3e22, 5e21, 1.7

    def integrand(energy):
        depth = nh * cross_section(np.array([energy * (1 + z)]))[0]
        depth += galactic * cross_section(np.array([energy]))[0]
        return energy ** (1 - gamma) * np.exp(-depth)

    points = sorted({float(e) for e in [*EDGES, *(EDGES / (1 + z))] if band[0] < e < band[1]})
    bounds = [band[0], *points, band[1]]
    passed = sum(
        quad(integrand, a, b, epsabs=0, epsrel=1e-10)[0] for a, b in itertools.pairwise(bounds)
    )
    whole = quad(lambda e: e ** (1 - gamma), *band)[0]
    assert transmission(band, nh, z, gamma, galactic) == pytest.approx(passed / whole, rel=1e-8)


def test_no_column_lets_everything_through_and_an_unknown_one_nothing_known():
    assert transmission((2, 10), 0.0) == 1.0
    assert np.isnan(transmission((2, 10), np.nan))
