"""Band conversions against published tables and numerical quadrature."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from embersift.bands import HARD, SOFT, Band
from embersift.sky.absorption import cross_section
from embersift.sky.spectrum import GasSpectrum, power_law_ratio


@pytest.mark.parametrize(
    ("gamma", "ratios"),
    [
        (1.7, [0.5482, 0.8727, 1.283, 1.379, 1.548, 1.699]),
        (1.8, [0.6377, 1.0465, 1.388, 1.479, 1.638, 1.832]),
        (1.9, [0.7413, 1.2584, 1.506, 1.593, 1.741, 1.990]),
        (2.0, [0.8614, 1.5175, 1.640, 1.723, 1.861, 2.179]),
    ],
)
def test_power_law_ratios_of_the_sheet(gamma, ratios):
    # coefficient sheet, AGN side, section 1.11
    bands = [(0.5, 2), (0.2, 2.3), (0.5, 7), (0.5, 8), (0.5, 10), (0.3, 10)]
    for band, ratio in zip(bands, ratios, strict=True):
        assert power_law_ratio(gamma, Band(*band), HARD) == pytest.approx(ratio, rel=5e-4)


@settings(max_examples=50, deadline=None)
@given(
    gamma=st.floats(0.0, 4.0),
    low=st.floats(0.1, 5.0),
    width=st.floats(0.1, 10.0),
)
def test_power_law_ratio_equals_numerical_quadrature(gamma, low, width):
    band = Band(low, low + width)
    wanted = quad(lambda e: e ** (1 - gamma), *band)[0] / quad(lambda e: e ** (1 - gamma), *HARD)[0]
    assert power_law_ratio(gamma, band, HARD) == pytest.approx(wanted, rel=1e-7)


@pytest.mark.parametrize(
    ("kt", "hard", "broad"),
    [
        (0.24, 1.93e-3, 1.0019),
        (0.3, 6.78e-3, 1.0068),
        (0.5, 5.24e-2, 1.0524),
        (0.71, 0.1375, 1.1375),
    ],
)
def test_gas_band_ratios_of_the_sheet(kt, hard, broad):
    # coefficient sheet, host side, section 2 (flat-Gaunt bremsstrahlung)
    gas = GasSpectrum((kt, kt), 0.0)
    assert gas.ratio(HARD, SOFT) == pytest.approx(hard, rel=3e-3)
    assert gas.ratio(Band(0.5, 8.0), SOFT) == pytest.approx(broad, rel=1e-4)


@pytest.mark.parametrize("z", [0.0, 0.05, 1.0, 6.0])
@pytest.mark.parametrize("band", [(0.5, 2.0), (2.0, 10.0), (0.2, 2.3)])
def test_observed_gas_equals_numerical_quadrature(z, band):
    # scipy's adaptive integrator over the redshifted spectrum behind a Galactic column
    kt, share, column = (0.24, 0.71), 1.0 / 3.0, 4e20
    norm = [quad(lambda e, t=t: np.exp(-e / t), *SOFT)[0] for t in kt]

    def integrand(energy):
        rest = energy * (1 + z)
        shape = (1 - share) * np.exp(-rest / kt[0]) / norm[0] + share * np.exp(
            -rest / kt[1]
        ) / norm[1]
        return (1 + z) * shape * np.exp(-column * cross_section(np.array([energy]))[0])

    edges = [0.284, 0.4, 0.532, 0.707, 0.867, 1.303, 1.84, 2.471, 3.21, 4.038, 7.111, 8.331]
    bounds = [band[0], *(e for e in edges if band[0] < e < band[1]), band[1]]
    wanted = sum(
        quad(integrand, a, b, epsabs=0, epsrel=1e-9)[0] for a, b in itertools.pairwise(bounds)
    )
    table = GasSpectrum(kt, share).observed_share(Band(*band), column)
    assert np.exp(table(np.array([np.log1p(z)])))[0] == pytest.approx(wanted, rel=1e-6)
