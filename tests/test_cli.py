"""The command line as a user meets it: what is printed, written, refused, and with which code."""

import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from astropy.table import Table
from typer.testing import CliRunner

from embersift.cli import app
from embersift.mock import population

DEMO = Path(__file__).parent.parent / "demo_catalog"


def run(*words, code=0):
    result = CliRunner().invoke(app, [str(word) for word in words])
    assert result.exit_code == code, result.output + result.stderr
    return result


def refused(*words):
    """Run a command that must stop with exit code 2, and return its one message."""
    result = run(*words, code=2)
    assert "Traceback" not in result.stderr
    return " ".join(result.stderr.split())


@pytest.fixture
def catalogue(tmp_path):
    path = tmp_path / "dwarfs.csv"
    population(300, seed=3).to_csv(path, index=False)
    return path


def test_screen_writes_its_columns_in_order_behind_the_input(catalogue):
    result = run(
        "screen", catalogue, "--limit", "deep=0.5-2:1e-16", "--threshold", 2, "--threshold", 2.5
    )
    written = Table.read(catalogue.with_name("dwarfs.screened.ecsv"))
    given = list(population(1, seed=3).columns)
    expected = [
        "lbol", "eddington_ratio", "lx_agn", "lx_hmxb", "lx_lmxb", "lx_gas", "lx_background",
        "excess", "flux_agn_deep", "flux_background_deep", "excess_deep",
        "fate_deep_2", "fate_deep_2.5", "stretched", "problem",
    ]  # fmt: skip
    assert written.colnames == given + expected
    assert str(written["lbol"].unit) == "erg / s"
    assert written.meta["embersift"]
    for word in ("lehmer2021", "duras2020", "Cautions", "deep", "unusable"):
        assert word in result.output


def test_without_an_observation_there_is_one_named_any(catalogue):
    run("screen", catalogue, "--quiet")
    assert "fate_any_2" in Table.read(catalogue.with_name("dwarfs.screened.ecsv")).colnames


def test_quiet_prints_nothing(catalogue):
    assert run("screen", catalogue, "--quiet").output == ""


@pytest.mark.parametrize("ending", ["csv", "ecsv", "fits", "vot", "parquet"])
def test_every_output_format_holds_the_same_verdicts(catalogue, ending):
    out = catalogue.with_name(f"out.{ending}")
    run("screen", catalogue, "--out", out, "--quiet")
    reference = catalogue.with_name("reference.csv")
    run("screen", catalogue, "--out", reference, "--quiet")
    expected = pd.read_csv(reference, keep_default_na=False)["fate_any_2"].tolist()
    if ending == "csv":
        found = pd.read_csv(out, keep_default_na=False)["fate_any_2"].tolist()
    elif ending == "parquet":
        found = pd.read_parquet(out)["fate_any_2"].tolist()
    else:
        found = [str(v).strip() for v in Table.read(out)["fate_any_2"]]
    assert found == expected
    counted = run("tally", out, "--edges", "7,8,9,10,11")
    assert "threshold 2" in counted.output


def test_csv_output_is_a_plain_table_with_its_recipe_beside_it(catalogue):
    out = catalogue.with_name("out.csv")
    run("screen", catalogue, "--out", out, "--set", "screen.floor=1e38", "--quiet")
    assert out.read_text().startswith("id,host_id,mstar,")
    again = catalogue.with_name("again.csv")
    run("screen", catalogue, "--recipe", f"{out}.recipe.toml", "--out", again, "--quiet")
    assert again.read_bytes() == out.read_bytes()


def test_ids_come_out_as_they_went_in(tmp_path):
    table = population(3, seed=3).drop(columns="host_id")
    table["id"] = ["007", "=1+1", "ünïcode"]
    path = tmp_path / "in.csv"
    table.to_csv(path, index=False)
    for ending in ("csv", "ecsv", "fits", "parquet"):
        out = tmp_path / f"out.{ending}"
        if ending == "fits":
            continue  # FITS strings are ASCII; see the next test
        run("screen", path, "--out", out, "--quiet")
        found = {
            "csv": lambda p=out: pd.read_csv(p, dtype=str)["id"].tolist(),
            "ecsv": lambda p=out: list(Table.read(p)["id"]),
            "parquet": lambda p=out: pd.read_parquet(p)["id"].tolist(),
        }[ending]()
        assert found == table["id"].tolist()


def test_an_existing_output_is_kept_unless_overwrite(catalogue):
    out = catalogue.with_name("out.csv")
    out.write_text("precious")
    assert "--overwrite" in refused("screen", catalogue, "--out", out)
    assert out.read_text() == "precious"
    run("screen", catalogue, "--out", out, "--overwrite", "--quiet")
    assert out.read_text() != "precious"


def test_the_input_is_never_touched(catalogue):
    before = catalogue.read_bytes()
    assert "dwarfs.csv" in refused("screen", catalogue, "--out", catalogue, "--overwrite")
    assert catalogue.read_bytes() == before


def test_strict_ends_with_three_when_a_row_is_unusable(catalogue):
    table = pd.read_csv(catalogue)
    table.loc[5, "mstar"] = -1.0
    table.to_csv(catalogue, index=False)
    run("screen", catalogue, "--quiet")
    result = run("screen", catalogue, "--strict", "--quiet", "--overwrite", code=3)
    assert "unusable" in result.stderr


def test_text_in_a_numeric_column_marks_its_row(catalogue):
    lines = catalogue.read_text().splitlines()
    cells = lines[4].split(",")
    cells[3] = "n/c"
    lines[4] = ",".join(cells)
    catalogue.write_text("\n".join(lines) + "\n")
    result = run("screen", catalogue)
    assert "sfr: not a number: 1 row unusable (row 4)" in " ".join(result.output.split())
    written = Table.read(catalogue.with_name("dwarfs.screened.ecsv"))
    assert written["fate_any_2"][3] == "unusable"
    assert written["problem"][3].startswith("sfr: not a number")
    assert written["sfr"][3] == "n/c"


REFUSALS = [
    (["--threshold", 0], "expected a number above 0"),
    (["--threshold", -1], "expected a number above 0"),
    (["--limit", "deep=2-0.5:1e-16"], "upside down"),
    (["--limit", "deep=0.5-2:-1e-16"], "at least 0"),
    (["--limit", "deep"], "NAME=LO-HI:FLUX"),
    (["--limit", "a=0.5-2:1e-16", "--limit", "a=2-10:1e-15"], "two observations of one name"),
    (["--set", "screen.flor=1"], "Did you mean floor"),
    (["--set", "screen.floor"], "section.key=value"),
    (["--set", "agn.accretion=two-regimes"], "Did you mean two-regime"),
    (["--redshift", -1], "expected a number above 0"),
    (["--recipe", "none.toml"], "cannot be read"),
    (["--out", "no/such/folder/out.csv"], "no/such/folder"),
    (["--out", "out.xyz"], "out.xyz"),
]


@pytest.mark.parametrize(("options", "words"), REFUSALS)
def test_options_that_cannot_be_meant_are_explained(catalogue, options, words, monkeypatch):
    monkeypatch.chdir(catalogue.parent)
    before = sorted(os.listdir())
    assert words in refused("screen", catalogue.name, *options)
    assert sorted(os.listdir()) == before


def test_a_screened_table_is_not_screened_again(catalogue):
    run("screen", catalogue, "--quiet")
    message = refused("screen", catalogue.with_name("dwarfs.screened.ecsv"))
    assert "lbol" in message
    assert "Is it an output of embersift?" in message


def test_a_file_that_is_not_there_is_named(tmp_path):
    assert "nothing.csv" in refused("screen", tmp_path / "nothing.csv")


def test_tally_reads_the_units_of_the_catalogue_from_the_screened_file(tmp_path):
    table = population(400, seed=3)
    plain = tmp_path / "plain.csv"
    table.to_csv(plain, index=False)
    run("screen", plain, "--quiet")
    table["mstar"] = np.log10(table["mstar"].where(table["mstar"] > 0))
    logs = tmp_path / "logs.csv"
    table.rename(columns={"mstar": "lgM"}).to_csv(logs, index=False)
    mapping = 'catalogue.columns.mstar={ column = "lgM", unit = "dex(Msun)" }'
    run("screen", logs, "--set", mapping, "--quiet")
    outs = []
    for name in ("plain", "logs"):
        out = tmp_path / f"{name}.json"
        run("tally", tmp_path / f"{name}.screened.ecsv", "--out", out, "--quiet")
        outs.append(json.loads(out.read_text()))
    visible = [[row["visible"] for row in rows] for rows in outs]
    assert visible[0] == visible[1]


def test_tally_counts_every_hole_once(catalogue):
    run("screen", catalogue, "--quiet")
    out = catalogue.with_name("counts.csv")
    run("tally", catalogue.with_name("dwarfs.screened.ecsv"), "--out", out)
    counts = pd.read_csv(out)
    screened = Table.read(catalogue.with_name("dwarfs.screened.ecsv"))
    for threshold in (1, 2, 5):
        here = counts[counts["threshold"] == threshold]
        fates = [str(f) for f in screened[f"fate_any_{threshold}"]]
        holes = sum(f not in ("unusable", "no_black_hole") for f in fates)
        assert here["black_holes"].sum() == holes
        assert here["visible"].sum() == fates.count("visible")


def test_tally_splits_central_from_off_centre(catalogue):
    run("screen", catalogue, "--quiet")
    result = run("tally", catalogue.with_name("dwarfs.screened.ecsv"), "--split", "central")
    assert "offset above 1 kpc" in result.output


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--by", "mbh"], "needs edges"),
        (["--by", "mass", "--edges", "1,2"], "no column 'mass'"),
        (["--edges", "9,8"], "each above the last"),
        (["--edges", "a,b"], "write numbers with commas"),
        (["--split", "disc"], "only central"),
        (["--out", "counts.fits"], ".csv, .ecsv or .json"),
    ],
)
def test_a_tally_that_cannot_be_made_is_explained(catalogue, options, words):
    run("screen", catalogue, "--quiet")
    assert words in refused("tally", catalogue.with_name("dwarfs.screened.ecsv"), *options)


def test_a_plain_catalogue_is_not_a_screened_table(catalogue):
    assert "not a screened table" in refused("tally", catalogue)


def test_check_reports_and_writes_nothing(catalogue):
    table = pd.read_csv(catalogue)
    table.loc[1, "mstar"] = -1.0
    table.loc[7, "id"] = table.loc[6, "id"]
    table.to_csv(catalogue, index=False)
    before = sorted(os.listdir(catalogue.parent))
    text = " ".join(run("check", catalogue).output.split())
    assert "mstar: not positive: 1 row unusable (row 2)" in text
    assert "repeats an id" in text
    assert sorted(os.listdir(catalogue.parent)) == before


def test_check_says_what_would_stop_a_screening(catalogue):
    table = pd.read_csv(catalogue)
    table["mbh"] = 5.0
    table.to_csv(catalogue, index=False)
    assert "would stop a screening" in run("check", catalogue).output


def test_laws_lists_each_law_and_shows_one_in_full():
    overview = run("laws").output
    for name in ("two-regime", "duras2020", "lehmer2021", "mineo2012gas", "brorby2016"):
        assert name in overview
    one = run("laws", "lehmer2021").output
    assert "2011.09476" in one
    assert "kroupa" in one.lower()
    assert "@article" in run("laws", "lehmer2021", "--bibtex").output
    assert "Did you mean lehmer2021" in refused("laws", "lehmer2012")


def test_recipe_can_be_written_and_used(catalogue, tmp_path):
    path = tmp_path / "starter.toml"
    run("recipe", "--out", path)
    assert path.read_text() == run("recipe").output
    run("screen", catalogue, "--recipe", path, "--quiet")
    assert "--overwrite" in refused("recipe", "--out", path)


@pytest.mark.parametrize("ending", ["csv", "ecsv", "fits", "parquet", "vot"])
def test_mock_is_reproducible_and_says_it_is_invented(tmp_path, ending):
    one, two = tmp_path / f"one.{ending}", tmp_path / f"two.{ending}"
    result = run("mock", "--rows", 50, "--seed", 4, "--out", one)
    run("mock", "--rows", 50, "--seed", 4, "--out", two)
    assert "invented" in result.output
    assert b"invented" in one.read_bytes()
    run("screen", one, "--quiet")


def test_longer_mocks_begin_with_the_shorter_ones():
    pd.testing.assert_frame_equal(population(70_000, 2).head(500), population(500, 2))


def test_the_demo_is_what_mock_makes(tmp_path):
    made = tmp_path / "made.csv"
    run("mock", "--rows", 2400, "--seed", 1, "--out", made)
    # values, not bytes: how a float is spelled depends on the writer that is installed
    pd.testing.assert_frame_equal(pd.read_csv(made), pd.read_csv(DEMO / "tern_shoal.csv"))


def test_the_demo_holds_every_kind_of_fate(tmp_path):
    out = tmp_path / "demo.csv"
    run("screen", DEMO / "tern_shoal.csv", "--recipe", DEMO / "recipe.toml", "--out", out)
    screened = pd.read_csv(out)
    found = set(np.unique(screened.filter(like="fate_").to_numpy(dtype=str)))
    wanted = {"unusable", "no_black_hole", "dormant", "visible", "faint", "outshone"}
    wanted |= {"underfloor", "faint+underfloor", "faint+outshone", "underfloor+outshone"}
    wanted |= {"faint+underfloor+outshone"}
    assert found == wanted


def test_help_imports_nothing_scientific():
    code = (
        "import sys, contextlib, io\n"
        "from embersift.cli import app\n"
        "with contextlib.redirect_stdout(io.StringIO()), contextlib.suppress(SystemExit):\n"
        "    app(['--help'])\n"
        "heavy = {'numpy', 'scipy', 'pandas', 'astropy', 'pyarrow'} & set(sys.modules)\n"
        "print(sorted(heavy))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_the_package_runs_as_a_module():
    done = subprocess.run(
        [sys.executable, "-m", "embersift", "--version"], capture_output=True, text=True, check=True
    )
    assert done.stdout.startswith("embersift ")


def test_an_interrupt_leaves_no_output_and_ends_with_130(catalogue, monkeypatch):
    def interrupted(*args, **kwargs):
        raise KeyboardInterrupt

    monkeypatch.setattr("embersift.running.screen_table", interrupted)
    before = sorted(os.listdir(catalogue.parent))
    run("screen", catalogue, code=130)
    assert sorted(os.listdir(catalogue.parent)) == before


@pytest.mark.parametrize("ending", ["csv", "ecsv", "fits", "vot", "parquet"])
def test_units_of_the_input_file_reach_the_tally_whatever_the_output_format(tmp_path, ending):
    from astropy import units as u

    table = Table.from_pandas(population(200, seed=3).dropna())
    table = table[(np.asarray(table["mstar"]) > 0) & (np.asarray(table["mbh"]) > 0)]
    plain = tmp_path / "plain.ecsv"
    table.write(plain, format="ascii.ecsv")
    table["mstar"] = np.log10(np.asarray(table["mstar"]))
    table["mstar"].unit = u.dex(u.Msun)
    logs = tmp_path / "logs.ecsv"
    table.write(logs, format="ascii.ecsv")
    counts = []
    for path in (plain, logs):
        out = tmp_path / f"{path.stem}.out.{ending}"
        run("screen", path, "--out", out, "--quiet")
        run("tally", out, "--out", tmp_path / f"{path.stem}.json", "--quiet")
        rows = json.loads((tmp_path / f"{path.stem}.json").read_text())
        counts.append([(row["bin"], row["black_holes"], row["visible"]) for row in rows])
    assert counts[0] == counts[1]
    assert sum(count for name, count, _ in counts[0] if name != "below") > 0


def test_placeholders_in_a_column_of_logs_are_not_black_holes(tmp_path):
    table = population(40, seed=3).dropna()
    table = table[(table["mstar"] > 0) & (table["mbh"] > 0) & np.isfinite(table["mdot"])]
    table["mbh"] = np.log10(table["mbh"])
    table.iloc[0, table.columns.get_loc("mbh")] = -99.0
    table.iloc[1, table.columns.get_loc("mbh")] = 0.0
    path = tmp_path / "logs.csv"
    table.to_csv(path, index=False)
    out = tmp_path / "out.csv"
    run("screen", path, "--set", 'catalogue.columns.mbh={ column = "mbh", unit = "dex(Msun)" }',
        "--out", out, "--quiet")  # fmt: skip
    screened = pd.read_csv(out)
    assert screened["fate_any_2"].tolist()[:2] == ["unusable", "unusable"]
    assert screened["problem"][0].startswith("mbh: below 10 Msun")


@pytest.mark.parametrize("setting", ["agn.nh=22", "catalogue.redshift=2000"])
def test_values_that_are_logs_or_out_of_range_are_refused(catalogue, setting):
    assert "expected" in refused("screen", catalogue, "--set", setting)


def test_a_recipe_beside_an_output_is_not_replaced_unasked(catalogue):
    recipe = catalogue.with_name("keep.csv.recipe.toml")
    recipe.write_text("[screen]\nfloor = 1e38  # mine\n")
    message = refused("screen", catalogue, "-r", recipe, "--out", catalogue.with_name("keep.csv"))
    assert "keep.csv.recipe.toml" in message
    assert "# mine" in recipe.read_text()
    assert not catalogue.with_name("keep.csv").exists()
