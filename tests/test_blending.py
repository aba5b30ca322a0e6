"""Holes of one galaxy in one circle, and apertures in the chain."""

import numpy as np
import pytest
from test_chain import run, sources

from embersift.bands import Band
from embersift.chain import Chain
from embersift.recipe import Observation, Recipe
from embersift.sky.blending import blends
from embersift.verdict import FATES

HOST = np.array([1, 1, 2, 3, 3], dtype=np.uint64)
EVERY = np.ones(5, dtype=bool)


def test_only_holes_of_one_galaxy_within_the_circle_are_blended():
    flux = np.array([1.0, 3.0, 5.0, 2.0, 2.0])
    offset = np.array([0.0, 0.4, 0.0, 0.0, 9.0])
    found = blends(HOST, offset, np.full(5, 1.0), flux, EVERY)
    assert found.fainter.tolist() == [True, False, False, False, False]
    assert found.summed.tolist() == [1.0, 4.0, 5.0, 2.0, 2.0]


def test_the_first_of_equals_carries_the_light():
    found = blends(HOST, np.zeros(5), np.full(5, 1.0), np.ones(5), EVERY)
    assert found.fainter.tolist() == [False, True, False, False, True]


def test_three_in_a_row_blend_with_the_brightest_only():
    host = np.full(3, 7, dtype=np.uint64)
    # the middle one is brightest and reaches both; the outer two do not reach each other
    found = blends(
        host, np.array([0.0, 1.0, 2.0]), np.full(3, 1.0), np.array([1.0, 5.0, 1.0]), EVERY[:3]
    )
    assert found.fainter.tolist() == [True, False, True]
    assert found.summed.tolist() == [1.0, 7.0, 1.0]


def test_light_is_neither_lost_nor_counted_twice():
    draw = np.random.default_rng(3)
    host = draw.integers(0, 40, 200).astype(np.uint64)
    flux = draw.random(200)
    found = blends(host, draw.random(200) * 5, np.full(200, 1.0), flux, np.ones(200, dtype=bool))
    assert found.summed[~found.fainter].sum() == pytest.approx(flux.sum(), rel=1e-12)


def test_rows_without_offset_or_light_blend_with_nothing():
    offset = np.array([0.0, np.nan, 0.0, 0.0, 0.0])
    shines = np.array([True, True, True, True, False])
    found = blends(HOST, offset, np.full(5, 1.0), np.ones(5), shines)
    assert not found.fainter.any()


def seen_through(aperture, limit=0.0):
    recipe = Recipe().with_observations(
        [Observation("circle", Band(0.5, 8.0), limit, aperture=aperture)]
    )
    return recipe.with_settings({"agn.accretion": "constant"})


@pytest.mark.parametrize(("offset", "share"), [(0.0, 0.264241), (1.0, 0.180182), (3.0, 0.026990)])
def test_only_the_light_inside_the_circle_competes(offset, share):
    # coefficient sheet, observer's side, 9: shares of an exponential disc in a circle of one scale
    # length; at z 0.05 one arcsec is 0.97749 kpc, half the light lies within 1.678347 scale lengths
    whole = run(seen_through(None)).fluxes["circle"]
    circle = run(seen_through(1.0), rhalf=1.678347 * 0.97749, offset=offset * 0.97749).fluxes[
        "circle"
    ]
    assert circle.background[0] / whole.background[0] == pytest.approx(share, abs=1e-4)
    assert circle.agn[0] == whole.agn[0]


def test_without_a_size_the_whole_galaxy_competes():
    whole, circle = run(seen_through(None)), run(seen_through(1.0))
    np.testing.assert_array_equal(
        whole.fluxes["circle"].background, circle.fluxes["circle"].background
    )


def test_two_faint_holes_pass_a_limit_together_and_the_brighter_one_carries_it():
    two = sources(mdot=[1e-4, 0.9e-4], offset=[0.0, 0.2], rhalf=2.0)
    flux = Chain(seen_through(3.0)).run(two).fluxes["circle"].agn
    chain = Chain(seen_through(3.0, limit=float(flux.sum() * 0.99)))
    host = np.array([5, 5], dtype=np.uint64)
    apart = chain.run(two).fates["fate_circle_2"]
    together = chain.run(two, host=host).fates["fate_circle_2"]
    assert [FATES[c] for c in apart] == ["faint", "faint"]
    assert [FATES[c] for c in together] == ["visible", "faint+blended"]
