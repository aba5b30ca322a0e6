"""Light of a disc inside an extraction circle, against quadrature in other coordinates."""

import math
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, special, stats

from embersift.sky.aperture import (
    HALF_LIGHT,
    circle_radius_kpc,
    disc_share,
    disc_share_exact,
    kpc_per_arcsec,
    rhalf_to_scale,
)

RADII = (0.25, 0.5, 1.0, 2.0)
SHEET = {
    # coefficient sheet, observer's side, section 9 (computed there with independent libraries)
    0.0: (0.026499, 0.090204, 0.264241, 0.593994),
    0.5: (0.018800, 0.072976, 0.241634, 0.577014),
    1.0: (0.011496, 0.045938, 0.180182, 0.525438),
    2.0: (0.004246, 0.017179, 0.071742, 0.321699),
    3.0: (0.001564, 0.006353, 0.026990, 0.133681),
}

lengths = st.one_of(st.floats(0.0, 50.0), st.floats(1e-4, 2.0))


def share_around_the_circle(radius, offset):
    """The disc's light summed in polar coordinates of the circle, not of the nucleus."""

    def light(angle, distance):
        from_nucleus = math.sqrt(
            offset**2 + distance**2 + 2.0 * offset * distance * math.cos(angle)
        )
        return distance * math.exp(-from_nucleus) / math.pi

    value, _ = integrate.dblquad(light, 0.0, radius, 0.0, math.pi, epsabs=1e-11, epsrel=1e-10)
    return value


@pytest.mark.parametrize("offset", SHEET)
@pytest.mark.parametrize("function", [disc_share, disc_share_exact])
def test_share_of_the_sheet(function, offset):
    np.testing.assert_allclose(function(RADII, offset), SHEET[offset], rtol=0, atol=1e-6)


@pytest.mark.parametrize(
    ("radius", "offset"), [(0.1, 0.3), (0.7, 0.69), (1.0, 4.0), (3.0, 1.0), (6.0, 7.5), (12.0, 9.0)]
)
def test_exact_share_is_the_same_in_coordinates_of_the_circle(radius, offset):
    expected = share_around_the_circle(radius, offset)
    assert float(disc_share_exact(radius, offset)) == pytest.approx(expected, rel=1e-6)


@given(radius=lengths, offset=lengths)
@settings(max_examples=200, deadline=None)
def test_table_is_within_1e_5_of_quadrature(radius, offset):
    expected = float(disc_share_exact(radius, offset))
    assert float(disc_share(radius, offset)) == pytest.approx(expected, abs=1e-5)


@given(offset=st.floats(1e-3, 60.0), depth=st.floats(-1.0, 1.0))
@settings(max_examples=200, deadline=None)
def test_table_holds_where_the_edge_of_the_circle_meets_the_nucleus(offset, depth):
    radius = abs(offset + depth)
    expected = float(disc_share_exact(radius, offset))
    assert float(disc_share(radius, offset)) == pytest.approx(expected, abs=1e-5)


@given(radius=st.floats(1e-4, 50.0), offset=st.floats(0.0, 20.0))
@settings(max_examples=200, deadline=None)
def test_small_shares_keep_their_own_accuracy(radius, offset):
    expected = float(disc_share_exact(radius, offset))
    tolerance = 1e-4 if expected > 1e-6 else 2e-3
    assert float(disc_share(radius, offset)) == pytest.approx(expected, rel=tolerance, abs=0.0)


@pytest.mark.parametrize("seam", [(8.0, 1e-9), (12.0, 1e-9)])
def test_the_two_tables_agree_where_they_meet(seam):
    offset, step = seam
    radius = np.linspace(0.01, 45.0, 400)
    below, above = disc_share(radius, offset - step), disc_share(radius, offset + step)
    np.testing.assert_allclose(below, above, rtol=0, atol=1e-5)


def test_centred_circle_follows_the_gamma_distribution():
    # the radius of a photon of an exponential disc is gamma distributed with shape 2
    radius = np.geomspace(1e-9, 60.0, 200)
    np.testing.assert_allclose(disc_share(radius, 0.0), stats.gamma(2.0).cdf(radius), rtol=1e-12)


def test_small_circle_holds_the_local_brightness_times_its_area():
    # mean of a smooth function over a small circle: value + a^2/8 of its Laplacian, here
    # exp(-r) (1 - 1/r); the next term is below 1e-6
    radius = 0.05
    for offset in (0.5, 2.0, 7.0, 11.0, 40.0, 200.0):
        mean = math.exp(-offset) * (1.0 + radius**2 / 8.0 * (1.0 - 1.0 / offset))
        expected = 0.5 * radius**2 * mean
        assert float(disc_share(radius, offset)) == pytest.approx(expected, rel=2e-3)
        assert float(disc_share_exact(radius, offset)) == pytest.approx(expected, rel=1e-5)


def test_huge_circle_cuts_the_disc_along_a_straight_line():
    # the disc's light per unit length across it is |x| K1(|x|) / pi
    for depth in (-5.0, -1.0, -0.1, 0.0, 0.5, 3.0):
        tail, _ = integrate.quad(lambda x: x * special.k1(x) / math.pi, max(abs(depth), 1e-12), 60)
        expected = tail if depth < 0.0 else 1.0 - tail
        for offset in (1e7, 1e9):
            assert float(disc_share(offset + depth, offset)) == pytest.approx(expected, abs=1e-5)


def test_share_grows_with_the_circle_and_falls_with_the_offset():
    grid = np.linspace(0.0, 30.0, 301)
    share = disc_share(grid[:, None], grid[None, :])
    assert share.shape == (301, 301)
    assert np.all((share >= 0.0) & (share <= 1.0))
    assert np.diff(share, axis=0).min() > -1e-6
    assert np.diff(share, axis=1).max() < 1e-6


def test_limits():
    assert disc_share([0.0, 0.0, 0.0], [0.0, 3.0, 100.0]).tolist() == [0.0, 0.0, 0.0]
    assert disc_share([np.inf, np.inf, 1e300], [0.0, 3.0, 1.0]).tolist() == [1.0, 1.0, 1.0]
    assert disc_share([1.0, 5.0], [np.inf, 1e6]).tolist() == [0.0, 0.0]
    assert disc_share_exact([0.0, np.inf, 1.0], [2.0, 2.0, np.inf]).tolist() == [0.0, 1.0, 0.0]


def test_missing_and_impossible_inputs_give_nan():
    radius = [np.nan, 1.0, -1.0, 1.0, np.inf, np.nan]
    offset = [1.0, np.nan, 1.0, -1.0, np.inf, np.inf]
    assert np.isnan(disc_share(radius, offset)).all()
    assert np.isnan(disc_share_exact(radius, offset)).all()


def test_no_rows_give_no_shares():
    assert disc_share(np.empty(0), np.empty(0)).shape == (0,)


def test_a_row_does_not_depend_on_the_others_nor_on_threads():
    rng = np.random.default_rng(20)
    radius, offset = 10 ** rng.uniform(-3, 1.8, (2, 5000))
    offset[::7] = 0.0
    together = disc_share(radius, offset)
    pieces = np.array_split(np.arange(5000), 37)
    with ThreadPoolExecutor(4) as pool:
        apart = list(pool.map(lambda rows: disc_share(radius[rows], offset[rows]), pieces))
    np.testing.assert_array_equal(together, np.concatenate(apart))


def test_half_of_the_light_is_within_the_half_light_radius():
    # (1 + x) exp(-x) = 1/2 solved by the other branch of Lambert's function
    lambert = -1.0 - special.lambertw(-0.5 / math.e, -1).real
    assert pytest.approx(lambert, rel=1e-15) == HALF_LIGHT
    rhalf = np.array([0.3, 2.0])
    np.testing.assert_allclose(disc_share(rhalf / rhalf_to_scale(rhalf), 0.0), 0.5, rtol=1e-14)


@pytest.mark.parametrize(
    ("z", "distance", "scale"),
    [(0.01, 43.158235, 0.20511), (0.05, 222.289055, 0.97749), (0.5, 2832.938094, 6.10421)],
)
def test_scale_on_the_sky(z, distance, scale):
    # coefficient sheet, observer's side, section 9: luminosity distances and scales
    angular = np.array([distance / (1.0 + z) ** 2])
    assert float(kpc_per_arcsec(angular)[0]) == pytest.approx(scale, abs=6e-6)
    assert float(circle_radius_kpc(2.0, angular)[0]) == pytest.approx(2.0 * scale, abs=1.2e-5)


def test_scale_on_the_sky_is_astropys():
    from astropy import units
    from astropy.cosmology import FlatLambdaCDM

    universe = FlatLambdaCDM(70.0, 0.3, Tcmb0=0.0)
    z = np.array([0.02, 0.3, 2.0])
    angular = universe.angular_diameter_distance(z).to_value(units.Mpc)
    expected = universe.kpc_proper_per_arcmin(z).to_value(units.kpc / units.arcsec)
    np.testing.assert_allclose(kpc_per_arcsec(angular), expected, rtol=1e-12)
