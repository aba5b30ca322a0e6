"""The proposal commands on files: reach, ranking, counts, yield, obscuration."""

import os
import re
import shlex
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from astropy.table import Table
from typer.testing import CliRunner

from embersift.cli import app
from embersift.mock import population

ROOT = Path(__file__).parent.parent


def run(*words, code=0):
    result = CliRunner().invoke(app, [str(word) for word in words])
    assert result.exit_code == code, result.output + result.stderr
    return result


def refused(*words):
    return " ".join(run(*words, code=2).stderr.split())


@pytest.fixture
def galaxies(tmp_path):
    path = tmp_path / "galaxies.csv"
    population(120, seed=8).to_csv(path, index=False)
    return path


DEEP = ("--limit", "deep=0.5-2:1e-16", "--threshold", 2)


def test_the_worked_proposal_runs_as_printed(tmp_path, monkeypatch):
    text = (ROOT / "docs" / "proposals.md").read_text(encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    os.symlink(ROOT / "demo_catalog", tmp_path / "demo_catalog")
    for block in re.findall(r"```sh\n(.*?)```", text, re.S):
        for line in block.strip().splitlines():
            result = CliRunner().invoke(app, shlex.split(line)[1:])
            assert result.exit_code == 0, f"{line}\n{result.output}{result.stderr}"


def test_what_reach_reports_passes_when_it_is_screened(galaxies, tmp_path):
    table = pd.read_csv(galaxies)
    run("reach", galaxies, *DEEP, "--out", tmp_path / "reach.csv", "--quiet")
    reached = pd.read_csv(tmp_path / "reach.csv")
    good = (reached["reach_reason_deep_2"].fillna("") == "").to_numpy()
    for factor, expected in ((1.0, "visible"), (1.0 - 1e-6, None)):
        table["mdot"] = np.where(good, reached["reach_mdot_deep_2"] * factor, 0.0)
        path = tmp_path / f"fed{factor}.csv"
        table.to_csv(path, index=False)
        run("screen", path, *DEEP, "--out", tmp_path / "fed.csv", "--overwrite", "--quiet")
        fates = pd.read_csv(tmp_path / "fed.csv")["fate_deep_2"].to_numpy()
        if expected:
            assert set(fates[good]) == {expected}
        else:
            assert "visible" not in set(fates[good])


def test_galaxies_need_neither_rates_nor_masses(galaxies, tmp_path):
    bare = tmp_path / "bare.csv"
    pd.read_csv(galaxies).drop(columns=["mdot", "mbh"]).to_csv(bare, index=False)
    run("reach", bare, *DEEP, "--out", tmp_path / "reach.ecsv", "--quiet")
    written = Table.read(tmp_path / "reach.ecsv")
    assert np.isfinite(written["reach_lx_deep_2"]).sum() > 100
    assert str(written["reach_lx_deep_2"].unit) == "erg / s"
    run("reach", bare, *DEEP, "--mbh", 1e5, "--out", tmp_path / "mass.csv", "--quiet")
    assert pd.read_csv(tmp_path / "mass.csv")["reach_eddington_deep_2"].notna().sum() > 100


def test_counts_follow_flux_and_exposure(galaxies, tmp_path):
    # by hand: a source at the flux limit gives limit x factor x exposure counts
    out = tmp_path / "counts.csv"
    run("reach", galaxies, "--limit", "deep=0.5-2:1e-14", "-t", 2, "--exposure", 20,
        "--set", "proposal.counts_per_flux=1e11", "--out", out, "--quiet")  # fmt: skip
    table = pd.read_csv(out)
    by_depth = table[table["reach_set_by_deep_2"] == "depth"]
    np.testing.assert_allclose(by_depth["counts_deep_2"], 1e-14 * 1e11 * 20e3, rtol=1e-9)


def test_ranking_passes_coordinates_through_and_puts_the_best_first(galaxies, tmp_path):
    table = pd.read_csv(galaxies).assign(ra=np.linspace(0, 359, 120))
    table.to_csv(galaxies, index=False)
    out = tmp_path / "targets.csv"
    result = run("reach", galaxies, *DEEP, "--exposure", 50, "--rank", "--out", out)
    ranked = pd.read_csv(out)
    assert "ra" in ranked.columns
    assert (np.diff(ranked["odds"].dropna()) <= 0).all()
    assert "expected successes" in result.output


def test_odds_average_over_the_table_of_columns(galaxies, tmp_path):
    # two narrow bins: the odds must be the shares of the fates at the two columns
    def fates(*more):
        out = tmp_path / "o.csv"
        run("screen", galaxies, "--limit", "deep=0.5-2:3e-15", "-t", 1, *more, "--out", out,
            "--overwrite", "--quiet")  # fmt: skip
        return pd.read_csv(out)

    seen = [fates("--set", f"agn.nh={nh}")["fate_deep_1"] == "visible" for nh in (1e20, 3e22)]
    low, high = np.log10(1e20), np.log10(3e22)
    edges = f"agn.nh_edges=[{low - 1e-6},{low + 1e-6},{high - 1e-6},{high + 1e-6}]"
    averaged = fates("--set", edges, "--set", "agn.nh_fractions=[0.25,0.0,0.75]")
    fate = averaged["fate_deep_1"]
    expected = 0.25 * seen[0] + 0.75 * seen[1]
    usable = fate != "unusable"
    np.testing.assert_allclose(averaged["odds_deep_1"][usable], expected[usable], atol=1e-9)
    assert 0 < seen[1].sum() < seen[0].sum()


def test_without_scatter_odds_are_the_verdict(galaxies, tmp_path):
    out = tmp_path / "odds.csv"
    run("screen", galaxies, *DEEP, "--odds", "--set", "odds.agn_scatter=0", "--set",
        "odds.background_scatter=0", "--out", out, "--quiet")  # fmt: skip
    table = pd.read_csv(out)
    usable = table["fate_deep_2"] != "unusable"
    visible = (table["fate_deep_2"] == "visible").astype(float)
    np.testing.assert_array_equal(table["odds_deep_2"][usable], visible[usable])


def test_the_tally_sums_the_odds(galaxies, tmp_path):
    out, counts = tmp_path / "odds.csv", tmp_path / "counts.csv"
    run("screen", galaxies, *DEEP, "--odds", "--out", out, "--quiet")
    run("tally", out, "--out", counts, "--quiet")
    p = pd.read_csv(out)["odds_deep_2"].dropna().to_numpy()
    tally = pd.read_csv(counts)
    assert tally["expected_visible"].sum() == pytest.approx(p.sum(), rel=1e-9)
    # independent rows: the variances add (Poisson-binomial)
    variance = (tally["expected_spread"] ** 2).sum()
    assert variance == pytest.approx((p * (1 - p)).sum(), rel=1e-9)


def test_a_yield_scales_with_the_volume(galaxies, tmp_path):
    out = tmp_path / "seen.csv"
    run("screen", galaxies, *DEEP, "--out", out, "--quiet")
    totals = []
    for box in (50, 100):
        table = tmp_path / f"yield{box}.csv"
        run("yield", out, "--area", 10, "--redshifts", "0,0.1", "--box", box, "--out", table)
        totals.append(pd.read_csv(table)["expected"].sum())
    assert totals[0] == pytest.approx(8 * totals[1], rel=1e-9)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--exposure", 0], "above 0"),
        (["--exposure", -5], "above 0"),
        (["--wanted", 1e-3], "needs the exposure"),
        (["--eddington", "0"], "above 0"),
        (["--scaling", "linear"], "background or photon"),
        (["--rank"], "proposal.exposure"),
        (["--rank", "--exposure", 5, "--observation", "wide"], "no observation 'wide'"),
        (["--exposure", 5, "--rank", "--set", 'proposal.distribution="gauss(1)"'], "gauss"),
        (["--set", "agn.nh_edges=[20,22]", "--set", "agn.nh_fractions=[0.9]"], "sum to 0.9"),
        (["--limit", "cdfs-8ms"], "Did you mean cdfs-7ms"),
        (["--set", "proposal.effective_area=none.arf", "--exposure", 5], "none.arf"),
    ],
)
def test_what_cannot_be_meant_is_explained(galaxies, tmp_path, options, words):
    before = sorted(os.listdir(tmp_path))
    message = refused("reach", galaxies, *DEEP, *options)
    assert words in message
    assert sorted(os.listdir(tmp_path)) == before


def test_apertures_need_a_positive_radius(galaxies, tmp_path):
    recipe = tmp_path / "r.toml"
    recipe.write_text('[[observation]]\nname = "a"\nband = [0.5, 2]\naperture = 0\n')
    assert "aperture = 0" in refused("screen", galaxies, "--recipe", recipe)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ([], "survey.area"),
        (["--area", 10, "--redshifts", "0.1,0.0", "--box", 50], "the lower comes first"),
        (["--area", 10, "--redshifts", "0,0.1"], "box"),
        (["--area", -1, "--redshifts", "0,0.1", "--box", 50], "above 0"),
    ],
)
def test_a_yield_that_cannot_be_made_is_explained(galaxies, tmp_path, options, words):
    out = tmp_path / "seen.csv"
    run("screen", galaxies, *DEEP, "--out", out, "--quiet")
    assert words in refused("yield", out, *options)


def test_a_grid_of_masses_serves_galaxies_without_one(galaxies, tmp_path):
    bare = tmp_path / "bare.csv"
    pd.read_csv(galaxies).drop(columns=["mdot", "mbh"]).to_csv(bare, index=False)
    out = tmp_path / "grid.csv"
    run("reach", bare, *DEEP, "--mbh", "1e4,1e6", "--eddington", 1e-3, "--out", out, "--quiet")
    table = pd.read_csv(out)
    light, heavy = (table[f"reach_eddington_deep_2_mbh_{m}"] for m in ("10000", "1e+06"))
    both = light.notna() & heavy.notna()
    assert both.sum() > 50
    assert (light[both] > heavy[both]).all()  # the same light is more of a lighter hole's limit
    assert table["reach_eddington_deep_2"].isna().all()
    assert any(name.startswith("reach_mbh_deep_2_at_") for name in table.columns)


def test_counts_follow_an_effective_area_file(galaxies, tmp_path):
    from astropy.io import fits

    # a flat area of 100 cm2: counts are 100 cm2 times photons; one photon carries E erg
    grid = np.linspace(0.3, 3.0, 271)
    columns = [
        fits.Column("ENERG_LO", "E", unit="keV", array=grid[:-1]),
        fits.Column("ENERG_HI", "E", unit="keV", array=grid[1:]),
        fits.Column("SPECRESP", "E", unit="cm**2", array=np.full(270, 100.0)),
    ]
    path = tmp_path / "flat.arf"
    fits.BinTableHDU.from_columns(columns, name="SPECRESP").writeto(path)
    out = tmp_path / "counts.csv"
    run("reach", galaxies, "--limit", "deep=0.5-2:1e-14", "-t", 2, "--exposure", 20, "--set",
        f'proposal.effective_area="{path}"', "--out", out, "--quiet")  # fmt: skip
    table = pd.read_csv(out)
    by_depth = table[table["reach_set_by_deep_2"] == "depth"]
    # mean photon energy of a Gamma 1.8 power law in 0.5-2 keV, by scipy
    from scipy.integrate import quad

    energy = quad(lambda e: e**-0.8, 0.5, 2)[0] / quad(lambda e: e**-1.8, 0.5, 2)[0] * 1.602177e-9
    expected = 1e-14 / energy * 100.0 * 20e3
    np.testing.assert_allclose(by_depth["counts_deep_2"], expected, rtol=1e-5)


def test_a_volume_per_row_serves_in_place_of_a_box(galaxies, tmp_path):
    table = pd.read_csv(galaxies)
    table.assign(volume=50.0**3).to_csv(galaxies, index=False)
    seen, counts = tmp_path / "seen.csv", tmp_path / "yield.csv"
    run("screen", galaxies, *DEEP, "--out", seen, "--quiet")
    run("yield", seen, "--area", 10, "--redshifts", "0,0.1", "--out", counts, "--quiet")
    by_row = pd.read_csv(counts)["expected"].sum()
    boxed = tmp_path / "box.csv"
    pd.read_csv(seen, dtype=str).drop(columns="volume").to_csv(boxed, index=False)
    run("yield", boxed, "--area", 10, "--redshifts", "0,0.1", "--box", 50, "--out",
        tmp_path / "two.csv", "--quiet")  # fmt: skip
    assert by_row == pytest.approx(pd.read_csv(tmp_path / "two.csv")["expected"].sum(), rel=1e-9)


def test_spread_writes_a_tidy_table_whose_own_laws_agree_with_the_tally(galaxies, tmp_path):
    out, seen, counts = tmp_path / "spread.csv", tmp_path / "seen.csv", tmp_path / "counts.csv"
    few = ("--set", 'spread.accretion=["two-regime","constant"]', "--set", 'spread.gas=["none"]')
    few += ("--set", 'spread.bolometric=["duras2020"]', "--set", "background.gas=none")
    result = run("spread", galaxies, *DEEP, *few, "--draws", 5, "--out", out)
    assert "what moves the hidden share most" in result.output
    table = pd.read_csv(out)
    run("screen", galaxies, *DEEP, "--set", "background.gas=none", "--out", seen, "--quiet")
    run("tally", seen, "--out", counts, "--quiet")
    own = table[table["own"] & (table["bin"] != "all")].set_index("bin")["hidden_fraction"]
    tally = pd.read_csv(counts).set_index("bin")["hidden_fraction"]
    common = own.dropna().index
    assert len(common) > 3
    np.testing.assert_array_equal(own[common], tally[common])


def test_no_draws_are_no_spread(galaxies):
    assert "at least 1" in refused("spread", galaxies, *DEEP, "--draws", 0)
    assert "Did you mean" in refused("spread", galaxies, "--set", 'spread.gas=["mineo2012gass"]')


def test_a_kind_of_binaries_may_be_left_out(galaxies, tmp_path):
    out = tmp_path / "none.csv"
    run("screen", galaxies, "--set", "background.lmxb=none", "--out", out, "--quiet")
    assert (pd.read_csv(out)["lx_lmxb"].dropna() == 0.0).all()
