"""Reach: what is reported lands on the criterion, and no deeper look gains beyond saturation."""

from dataclasses import replace

import numpy as np
import pytest

from embersift.bands import Band
from embersift.catalogue import Sources
from embersift.chain import Chain
from embersift.errors import RecipeError
from embersift.inversion import ABOVE, BELOW, Curve
from embersift.laws import ACCRETION, BOLOMETRIC
from embersift.reach import SET_BY, reach, reach_columns, scaled_exposure
from embersift.recipe import Observation, Recipe
from embersift.sky.distance import FlatUniverse
from embersift.verdict import FATES

VISIBLE = FATES.index("visible")
LOOKS = (
    Observation("soft", Band(0.5, 2.0), 1e-16, galactic_nh=1e20, aperture=2.0),
    Observation("hard", Band(2.0, 10.0), 1e-14),
)
# laws whose luminosity steps up somewhere: no rate lies on the criterion within the step
STEPPED = {"xie2012", "inayoshi2019"}


def random_sources(rows=300, seed=1):
    rng = np.random.default_rng(seed)
    z = 10 ** rng.uniform(-3, 0.5, rows)
    return Sources(
        mstar=10 ** rng.uniform(7, 11, rows),
        sfr=10 ** rng.uniform(-4, 2, rows),
        oh12=rng.uniform(7.5, 9.0, rows),
        mbh=10 ** rng.uniform(4, 9, rows),
        mdot=np.full(rows, np.nan),
        z=z,
        distance=FlatUniverse(70.0, 0.3).luminosity_distance(z),
        offset=rng.uniform(0, 2, rows),
        rhalf=rng.uniform(0.3, 3, rows),
        nh=np.where(rng.random(rows) < 0.5, 0.0, 10 ** rng.uniform(20, 23.5, rows)),
        weight=np.ones(rows),
        problems=np.zeros(rows, dtype=np.uint64),
    )


def one_source(**given):
    plain = {
        "mstar": 3e9, "sfr": 0.3, "oh12": 8.2, "mbh": 1e5, "mdot": np.nan, "z": 0.05,
        "distance": 222.289055, "offset": np.nan, "rhalf": np.nan, "nh": 0.0, "weight": 1.0,
    } | given  # fmt: skip
    full = {name: np.array([value], dtype=float) for name, value in plain.items()}
    return Sources(**full, problems=np.zeros(1, dtype=np.uint64))


def chain_of(looks=LOOKS, **settings):
    recipe = Recipe().with_settings({key.replace("__", "."): v for key, v in settings.items()})
    return Chain(replace(recipe, observation=looks))


def visible(chain, sources, mdot, name, threshold):
    fates = chain.run(sources._replace(mdot=mdot), threads=1).fates
    return fates[f"fate_{name}_{threshold:g}"] == VISIBLE


@pytest.mark.parametrize("accretion", ACCRETION)
@pytest.mark.parametrize("bolometric", BOLOMETRIC)
def test_reach_fed_back_lands_on_the_criterion(accretion, bolometric):
    # the oracle is the screening itself: visible at the reach and above, not just below it
    sources = random_sources()
    rng = np.random.default_rng(2)
    chain = chain_of(agn__accretion=accretion, agn__bolometric=bolometric, agn__k=10.0)
    for (name, threshold), found in reach(sources, chain).items():
        known = np.isfinite(found.mdot)
        assert known.sum() > 200
        mdot = np.where(known, found.mdot, 1e-3)
        assert visible(chain, sources, mdot, name, threshold)[known].all()
        assert not visible(chain, sources, mdot * (1 - 1e-10), name, threshold)[known].any()
        for _ in range(5):
            more = mdot * 10 ** rng.uniform(0.0, 3.0, mdot.size)
            assert visible(chain, sources, more, name, threshold)[known].all()
        lx = chain.run(sources._replace(mdot=mdot), threads=1).luminosities.lx_agn
        off = np.abs(lx / found.lx - 1.0)[known]
        if accretion in STEPPED:
            # the largest step: xie2012's efficiency goes from 0.076 to 0.1 at its last joint
            assert np.mean(off < 1e-6) > 0.95
            off = off[off > 1e-6]
            assert (off < 0.4).all()
        else:
            assert (off < 1e-6).all()


@pytest.mark.parametrize("delta", [0.5, 0.1, 0.001])
def test_every_heating_share_of_the_hot_flow_is_inverted(delta):
    sources = random_sources(seed=3)
    chain = chain_of(agn__accretion="xie2012", agn__delta=delta)
    for (name, threshold), found in reach(sources, chain).items():
        known = np.isfinite(found.mdot)
        mdot = np.where(known, found.mdot, 1e-3)
        assert visible(chain, sources, mdot, name, threshold)[known].all()
        assert not visible(chain, sources, mdot * (1 - 1e-10), name, threshold)[known].any()


@pytest.mark.parametrize("criterion", ["agn", "total"])
@pytest.mark.parametrize("flux_of", ["agn", "total"])
@pytest.mark.parametrize("rate", ["inflow", "growth"])
def test_every_way_to_judge_is_inverted(criterion, flux_of, rate):
    sources = random_sources(seed=4)
    chain = chain_of(
        screen__criterion=criterion, screen__flux_of=flux_of, catalogue__rate=rate,
        screen__thresholds=[1.0, 1.3, 2.5, 7.0], screen__headline=1.0,
    )  # fmt: skip
    for (name, threshold), found in reach(sources, chain).items():
        known = np.isfinite(found.mdot)
        mdot = np.where(known, found.mdot, 1e-3)
        assert visible(chain, sources, mdot, name, threshold)[known].all()
        assert not visible(chain, sources, mdot * (1 - 1e-10), name, threshold)[known].any()


def test_a_limit_gives_the_luminosities_of_the_sheet():
    # observing sheet, section 9: L(0.5-2) at a limit, Gamma 1.8; L(2-10) = L(0.5-2) / 0.6377
    for limit, z, expected in [
        (1.1e-14, 0.05, 6.44e40),
        (2.2e-16, 0.5, 1.948e41),
        (6.4e-18, 1.0, 2.911e40),
    ]:
        distance = FlatUniverse(70.0, 0.3).luminosity_distance(np.array([z]))[0]
        chain = chain_of((Observation("soft", Band(0.5, 2.0), limit),))
        source = one_source(z=z, distance=distance, mstar=1e6, sfr=0.0)
        found = reach(source, chain)["soft", 1.0]
        assert SET_BY[found.set_by[0]] == "depth"
        assert found.lx[0] * 0.6377 == pytest.approx(expected, rel=1e-3)


def test_a_published_dwarf_seen_at_its_own_flux():
    # NGC 4395, Iwasawa et al. 2000: L(2-10) = 4e39 erg/s at 2.6 Mpc, Gamma 1.7; the coefficient
    # sheet, AGN side, gives the flux 4.945e-12 erg/s/cm2. A limit of that flux reaches just that.
    chain = chain_of((Observation("asca", Band(2.0, 10.0), 4.945e-12),), agn__gamma=1.7)
    source = one_source(z=0.0, distance=2.6, mstar=1e9, sfr=0.1, mbh=1e5)
    found = reach(source, chain)["asca", 2.0]
    assert SET_BY[found.set_by[0]] == "depth"
    assert found.lx[0] == pytest.approx(4e39, rel=1e-3)


def test_the_eddington_ratio_of_a_tenfold_correction():
    # by hand: k 10, L_Edd = 1.25707e38 M, floor 1e39 and no limit: 1e40 / 1.25707e43
    chain = chain_of((Observation("any"),), agn__bolometric="constant", agn__k=10.0)
    found = reach(one_source(sfr=0.0, mstar=1e6), chain)["any", 1.0]
    assert SET_BY[found.set_by[0]] == "floor"
    assert found.lbol[0] == pytest.approx(1e40, rel=1e-9)
    assert found.eddington[0] == pytest.approx(1e40 / 1.25707e43, rel=2e-5)
    # two-regime: L / L_Edd = f^2 / 0.1, f = 0.1 mdot c2 / L_Edd, mdot c2 = 5.66296e46 erg/s
    f = np.sqrt(0.1 * 1e40 / 1.25707e43)
    assert found.mdot[0] == pytest.approx(f * 1.25707e43 / 0.1 / 5.66296e46, rel=3e-5)


def test_going_deeper_than_saturation_gains_nothing():
    # the oracle is the screening with the limit moved to either side
    sources = random_sources(rows=10, seed=5)
    for flux_of in ("agn", "total"):
        chain = chain_of(screen__flux_of=flux_of)
        found = reach(sources, chain)["soft", 2.0]
        for row in range(10):
            galaxy = sources.rows(slice(row, row + 1))
            saturation = found.saturation_flux[row]

            def at(limit, galaxy=galaxy, flux_of=flux_of):
                look = (replace(LOOKS[0], flux_limit=float(limit)),)
                deeper = chain_of(look, screen__flux_of=flux_of)
                return deeper, reach(galaxy, deeper)["soft", 2.0]

            deeper, just_below = at(saturation * (1 - 1e-9))
            _, far_below = at(saturation * 1e-3)
            shallower, just_above = at(saturation * (1 + 1e-6))
            assert just_below.mdot[0] == far_below.mdot[0]
            assert SET_BY[just_below.set_by[0]] in ("glow", "floor")
            assert SET_BY[just_above.set_by[0]] == "depth"
            assert visible(deeper, galaxy, just_below.mdot, "soft", 2.0)[0]
            assert not visible(shallower, galaxy, just_below.mdot, "soft", 2.0)[0]


@pytest.mark.parametrize("scaling", ["background", "photon"])
def test_the_exposures_reach_saturation_and_the_wanted_ratio(scaling):
    # a limit falls as t^-1/2 under background and as t^-1 under photon noise
    power = {"background": 0.5, "photon": 1.0}[scaling]
    sources = random_sources(rows=25, seed=6)
    found = reach(sources, chain_of(), exposure=50.0, scaling=scaling, wanted=0.01)["soft", 2.0]
    limit = 1e-16 * (found.exposure_saturation / 50.0) ** -power
    assert limit == pytest.approx(found.saturation_flux, rel=1e-12)
    finite = np.isfinite(found.exposure_wanted)
    assert finite.any()
    assert not finite.all()
    for row in np.flatnonzero(finite):
        galaxy = sources.rows(slice(row, row + 1))
        reached = 1e-16 * (found.exposure_wanted[row] / 50.0) ** -power
        chain = chain_of((replace(LOOKS[0], flux_limit=float(reached)),))
        # at that depth the wanted ratio is the faintest that passes
        assert reach(galaxy, chain)["soft", 2.0].eddington[0] == pytest.approx(0.01, rel=1e-9)
    shallow = chain_of((replace(LOOKS[0], flux_limit=1e-30),))
    deepest = reach(sources, shallow)["soft", 2.0]
    # where no depth suffices, the host or the floor is above what 0.01 gives
    assert (deepest.eddington[~finite] > 0.01).all()


def test_four_times_the_exposure_halves_a_background_limit():
    flux = np.array([5e-17, 1e-16, 0.0])
    assert scaled_exposure(1e-16, flux, 10.0, "background").tolist() == [40.0, 10.0, np.inf]
    assert scaled_exposure(1e-16, flux, 10.0, "photon").tolist() == [20.0, 10.0, np.inf]


def test_works_without_mass_and_rate():
    found = reach(one_source(mbh=0.0), chain_of())["hard", 2.0]
    assert np.isfinite(found.lx[0])
    assert np.isfinite(found.lbol[0])
    assert np.isnan(found.eddington[0])
    assert np.isnan(found.mdot[0])
    known = reach(one_source(mbh=1e6), chain_of())["hard", 2.0]
    given = reach(one_source(mbh=np.nan), chain_of(), mbh=1e6)["hard", 2.0]
    assert known.lbol == found.lbol
    assert given.mdot == known.mdot
    # a mass of its own is not replaced
    assert reach(one_source(mbh=1e6), chain_of(), mbh=1e8)["hard", 2.0].mdot == known.mdot


@pytest.mark.parametrize("bolometric", BOLOMETRIC)
def test_the_lightest_hole_at_a_ratio_reaches_just_that_ratio(bolometric):
    chain = chain_of(agn__bolometric=bolometric, agn__k=10.0)
    grid = (1e-3, 0.03, 0.5)
    found = reach(one_source(mbh=0.0), chain, eddington=grid)["hard", 2.0]
    for ratio, mass in zip(grid, found.mbh[0], strict=True):
        light = chain.agn_light(
            np.array([ratio * mass * 1.25706534e38]), np.array([ratio]), np.array([mass])
        )
        assert light[0] == pytest.approx(found.lx[0], rel=1e-6)


def test_an_empty_block_has_an_empty_reach():
    found = reach(random_sources(0), chain_of(), exposure=1.0, wanted=0.1, eddington=[0.1])
    assert found["soft", 2.0].mdot.shape == (0,)


def test_a_missing_host_value_leaves_the_reach_open():
    found = reach(one_source(mstar=np.nan), chain_of())["soft", 2.0]
    assert np.isnan([found.lx[0], found.lbol[0], found.mdot[0]]).all()
    assert not found.not_monotonic[0]


def test_a_column_that_lets_nothing_through_is_out_of_reach():
    found = reach(one_source(nh=1e26), chain_of())["soft", 2.0]
    assert found.reason[0] == ABOVE
    assert found.lx[0] > 1e50
    assert np.isnan(found.mdot[0])


def test_nothing_asked_for_means_that_any_accretion_passes():
    chain = chain_of((Observation("any"),), screen__floor=0.0)
    found = reach(one_source(mstar=1e-30, sfr=0.0), chain)["any", 1.0]
    assert found.reason[0] == BELOW
    assert found.saturation_flux[0] == pytest.approx(0.0, abs=1e-50)


def test_steps_of_the_correction_are_marked():
    # vasudevan2009: k rises by steps at 0.04 and 0.4 of Eddington, so L_X falls there
    chain = chain_of(agn__bolometric="vasudevan2009")
    found = reach(random_sources(2000), chain)["hard", 2.0]
    marked = found.not_monotonic
    assert marked.any()
    assert not reach(random_sources(2000), chain_of())["hard", 2.0].not_monotonic.any()
    # L_X is proportional to ratio / k: what is met below a step of 102.5 / 37.4 or 37.4 / 21.2
    # is met again within that factor of it
    assert (found.eddington[marked] >= 0.04).all()


def test_the_last_crossing_of_a_function_that_falls_back():
    # by hand: x up to 1, then 0.5 x: 0.8 is met at 0.8, lost at 1, and met again at 1.6
    curve = Curve(lambda x: np.where(x < 1.0, x, 0.5 * x), 1e-3, 1e3)
    found = curve.last_crossing(np.array([0.3, 0.5, 0.8, 2.0, 1e-4, 1e4, np.nan]))
    assert found.x[:4] == pytest.approx([0.3, 0.5, 1.6, 4.0], rel=1e-14)
    assert found.again.tolist() == [False, False, True, False, False, False, False]
    assert found.place.tolist() == [0, 0, 0, 0, BELOW, ABOVE, 0]
    assert np.isnan(found.x[4:]).all()
    assert not curve.monotonic
    assert Curve(np.square, 1e-3, 1e3).monotonic


def test_columns_carry_observation_and_threshold():
    grid = (0.01, 0.1)
    result = reach(random_sources(5), chain_of(), exposure=10.0, wanted=0.1, eddington=grid)
    columns = reach_columns(result, grid)
    for start in (
        "reach_lx", "reach_lbol", "reach_eddington", "reach_mdot", "reach_set_by",
        "saturation_flux", "exposure_saturation", "exposure_wanted",
    ):  # fmt: skip
        assert columns[f"{start}_soft_2"].shape == (5,)
    assert columns["not_monotonic"].dtype == bool
    assert "reach_mbh_hard_5_at_0.1" in columns
    assert set(columns["reach_set_by_hard_1"]) <= set(SET_BY)


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ({"exposure": 0.0}, "exposure: 0"),
        ({"exposure": -5.0}, "exposure: -5"),
        ({"exposure": np.inf}, "finite"),
        ({"exposure": 5.0, "scaling": "fotons"}, "Did you mean photon"),
        ({"eddington": [0.1, 0.0]}, "eddington: 0"),
        ({"eddington": [-1.0]}, "eddington: -1"),
        ({"mbh": 0.0}, "mbh: 0"),
        ({"wanted": 0.1}, "needs the exposure"),
        ({"wanted": -0.1, "exposure": 1.0}, "wanted Eddington ratio: -0.1"),
    ],
)
def test_impossible_choices_are_refused(settings, message):
    with pytest.raises(RecipeError, match=message):
        reach(one_source(), chain_of(), **settings)


def test_an_exposure_needs_a_limit():
    with pytest.raises(RecipeError, match="flux limit above 0"):
        reach(one_source(), chain_of((Observation("any"),)), exposure=10.0)
