"""Files as they are in real life: every format read and written, damaged ones refused in words."""

import errno
import gzip
import os
import threading
import warnings

import h5py
import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from astropy import units as u
from astropy.table import MaskedColumn, Table

from embersift.errors import CatalogueError, OutputError
from embersift.tables import (
    Provenance,
    ReadOptions,
    read_provenance,
    read_table,
    units_of,
    write_table,
)
from embersift.tables import writing as writing_module

ABOUT = Provenance(
    "0.0", "[agn]\nspin = 0.5\n\n[screen]\nfloor = 1.0\n", (("law", "A, 2000, B, 1"),)
)


def galaxies():
    return Table(
        {
            "id": ["007", "a b", 'c,"d"'],
            "mstar": MaskedColumn([1e9, 2.5e8, 0.0], mask=[False, False, True], unit=u.Msun),
            "n": [1, 2, 3],
        }
    )


def refusal(path, options=None):
    with pytest.raises(CatalogueError) as stop:
        read_table(path, options)
    assert str(path) in str(stop.value)
    return str(stop.value)


# --- text tables ------------------------------------------------------------------------------


def text_table(tmp_path, content, name="t.csv"):
    path = tmp_path / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


@pytest.mark.parametrize("separator", [",", ";", "\t", "|", " ", "   "])
def test_the_separator_is_found(tmp_path, separator):
    content = "\n".join(separator.join(row) for row in (["id", "mstar"], ["007", "1.50"])) + "\n"
    table = read_table(text_table(tmp_path, content))
    assert table.columns.tolist() == ["id", "mstar"]
    assert table.iloc[0].tolist() == ["007", "1.50"]


def test_fields_stay_as_they_were_written(tmp_path):
    content = 'id,x,note\n007,1.50,"a, ""b"""\n=1+1,,NA\n'
    table = read_table(text_table(tmp_path, content))
    assert table.to_numpy().tolist() == [["007", "1.50", 'a, "b"'], ["=1+1", "", "NA"]]


def test_comments_are_skipped_wherever_they_stand(tmp_path):
    table = read_table(text_table(tmp_path, "# made by hand\nid,x\n# half way\n1,2\n# end\n"))
    assert table.to_numpy().tolist() == [["1", "2"]]


def test_a_quoted_field_may_begin_with_the_comment_sign(tmp_path):
    table = read_table(text_table(tmp_path, 'id,x\n"#1",2\n#2,3\n'))
    assert table.to_numpy().tolist() == [["#1", "2"]]


def test_line_ends_of_every_system_are_read(tmp_path):
    for end in ("\n", "\r\n", "\r"):
        table = read_table(text_table(tmp_path, end.join(["id,x", "1,2", "3,4", ""])))
        assert table["x"].tolist() == ["2", "4"]


def test_a_commented_header_of_a_simulation_is_the_header(tmp_path):
    table = read_table(text_table(tmp_path, "# run 7\n# id mstar\n1 2e9\n2 3e9\n", "sim.dat"))
    assert table.columns.tolist() == ["id", "mstar"]
    assert len(table) == 2


def test_bom_and_gzip_are_read_through(tmp_path):
    path = tmp_path / "t.csv.gz"
    path.write_bytes(gzip.compress("\ufeffid,x\n1,2\n".encode()))
    assert read_table(path).columns.tolist() == ["id", "x"]


BROKEN = [
    (b"", "the file is empty"),
    (b"\n\n", "no line but comments"),
    (b"# only\n# comments\n", "no line but comments"),
    (b"id,mstar\n", "2 columns and no rows"),
    (b"id,mstar,mstar\n1,2,3\n", "'mstar' more than once"),
    (b"1,2,3\n4,5,6\n", "there is no header"),
    (b"id,x\n1,2\n3,4,5\n", "line 3 has 3 fields, the header has 2"),
    (b"id,x,y\n1,2,3\n3,4\n", "line 3 has 2 fields, the header has 3"),
    (b"id,x\n\xff\xfe\xfa,2\n", "not UTF-8"),
    (bytes(range(256)) * 4, "binary"),
    (b"\x1f\x8b\x08\x00broken", "binary"),
]


@pytest.mark.parametrize(("content", "words"), BROKEN)
def test_a_text_table_that_cannot_be_right_is_refused_in_words(tmp_path, content, words):
    assert words in refusal(text_table(tmp_path, content))


def test_a_file_that_unpacks_to_a_mountain_is_refused(tmp_path):
    path = tmp_path / "bomb.csv.gz"
    path.write_bytes(gzip.compress(b"id,x\n" + b"1,2\n" * 5_000_000, compresslevel=9))
    assert "unpacks to more than" in refusal(path)


def test_a_cell_of_a_million_characters_is_only_a_long_cell(tmp_path):
    table = read_table(text_table(tmp_path, f"id,x\n{'y' * 1_000_000},2\n"))
    assert len(table["id"][0]) == 1_000_000


# --- other formats ----------------------------------------------------------------------------


@pytest.mark.parametrize("ending", ["ecsv", "fits", "vot"])
def test_tables_of_astropy_come_back_with_units_and_masks(tmp_path, ending):
    path = tmp_path / f"t.{ending}"
    kind = {"ecsv": "ascii.ecsv", "fits": "fits", "vot": "votable"}[ending]
    galaxies().write(path, format=kind)
    table = read_table(path)
    assert [str(v) for v in table["id"]] == ["007", "a b", 'c,"d"']
    assert units_of(table)["mstar"] in ("solMass", "Msun", "M_sun")
    values = np.ma.filled(np.ma.asarray(table["mstar"], dtype=float), np.nan)
    np.testing.assert_array_equal(values, [1e9, 2.5e8, np.nan])


def test_parquet_keeps_text_ids_and_units(tmp_path):
    path = tmp_path / "t.parquet"
    field = pa.field("mstar", pa.float64(), metadata={b"unit": b"1e10 Msun"})
    arrow = pa.table(
        {"id": ["007"], "mstar": [0.1]}, schema=pa.schema([("id", pa.string()), field])
    )
    pq.write_table(arrow, path)
    table = read_table(path)
    assert table["id"].tolist() == ["007"]
    assert units_of(table) == {"mstar": "1e10 Msun"}


def test_hdf5_reads_compound_tables_and_groups_of_columns(tmp_path):
    path = tmp_path / "t.h5"
    with h5py.File(path, "w") as file:
        file["table"] = np.array([(1, 2.0)], dtype=[("id", "i8"), ("mstar", "f8")])
        group = file.create_group("halos/z0")
        group["mstar"] = np.array([1.0, 2.0], dtype=">f8")
        group["mstar"].attrs["unit"] = "1e10 Msun"
        group["id"] = np.array([b"a", b"b"])
    assert "several tables" in refusal(path)
    assert read_table(path, ReadOptions(table="table"))["mstar"].tolist() == [2.0]
    group_table = read_table(path, ReadOptions(table="halos/z0"))
    assert group_table["id"].tolist() == ["a", "b"]
    assert units_of(group_table) == {"mstar": "1e10 Msun"}
    assert "Did you mean table" in refusal(path, ReadOptions(table="tabel"))


def test_columns_of_different_length_are_not_one_table(tmp_path):
    path = tmp_path / "t.h5"
    with h5py.File(path, "w") as file:
        file["a"], file["b"] = np.ones(2), np.ones(3)
    assert "different lengths (2, 3)" in refusal(path)


def test_a_fits_extension_is_chosen_by_name(tmp_path):
    from astropy.io import fits

    path = tmp_path / "t.fits"
    one, two = (
        fits.BinTableHDU(Table({"x": [1]}), name="one"),
        fits.BinTableHDU(Table({"x": [2]}), name="two"),
    )
    fits.HDUList([fits.PrimaryHDU(), one, two]).writeto(path)
    assert read_table(path)["x"].tolist() == [1]
    assert read_table(path, ReadOptions(table="two"))["x"].tolist() == [2]
    assert "Did you mean" in refusal(path, ReadOptions(table="tow"))


def test_a_fits_image_holds_no_table(tmp_path):
    from astropy.io import fits

    path = tmp_path / "image.fits"
    fits.PrimaryHDU(np.zeros((3, 3))).writeto(path)
    assert "holds no table" in refusal(path)


@pytest.mark.parametrize("ending", ["fits", "parquet", "vot", "h5", "ecsv"])
def test_a_truncated_file_is_refused_not_read_in_part(tmp_path, ending):
    whole = tmp_path / f"whole.{ending}"
    table = Table({"x": np.arange(20000.0)})
    if ending == "h5":
        with h5py.File(whole, "w") as file:
            file["x"] = np.arange(20000.0)
    elif ending == "parquet":
        table.to_pandas().to_parquet(whole)
    else:
        table.write(whole, format={"fits": "fits", "vot": "votable", "ecsv": "ascii.ecsv"}[ending])
    content = whole.read_bytes()
    cut = tmp_path / f"cut.{ending}"
    # a text format is cut inside its header, where the loss shows; elsewhere in the data
    cut.write_bytes(content[: 40 if ending == "ecsv" else len(content) // 2])
    refusal(cut)


@pytest.mark.parametrize(
    ("name", "content", "looks"),
    [
        ("t.csv", b"SIMPLE  =                    T", "FITS"),
        ("t.csv", b"PAR1xxxxPAR1", "Parquet"),
        ("t.csv", b"\x89HDF\r\n\x1a\n....", "HDF5"),
        ("t.fits", b"id,mstar\n1,2\n", "a text table"),
        ("t.parquet", b"id,mstar\n1,2\n", "a text table"),
        ("t.vot", b"id,mstar\n1,2\n", "a text table"),
    ],
)
def test_a_wrong_ending_is_named_with_what_the_content_looks_like(tmp_path, name, content, looks):
    message = refusal(text_table(tmp_path, content, name))
    assert f"looks like {looks}" in message
    assert "catalogue.format" in message


def test_an_unknown_ending_says_how_to_name_the_format(tmp_path):
    assert "catalogue.format" in refusal(text_table(tmp_path, "id,x\n1,2\n", "t.xyz"))
    table = read_table(text_table(tmp_path, "id,x\n1,2\n", "t.xyz"), ReadOptions(format="csv"))
    assert len(table) == 1


def test_a_folder_and_a_missing_file_are_named(tmp_path):
    assert "is a folder" in refusal(tmp_path)
    assert "cannot be read" in refusal(tmp_path / "none.csv")


# --- writing ----------------------------------------------------------------------------------

FRAME = pd.DataFrame(
    {
        "id": ["007", "x,y", 'q"r'],
        "note": ["", "=1+1", "two\nlines"],
        "lx": [1.5e39, np.nan, 1 / 3],
        "fate": pd.Categorical(["visible", "faint", "visible"]),
    }
)


@pytest.mark.parametrize("ending", ["csv", "ecsv", "vot", "parquet"])
def test_what_is_written_reads_back_with_other_libraries(tmp_path, ending):
    path = tmp_path / f"t.{ending}"
    write_table(FRAME, path, provenance=ABOUT, units={"lx": "erg / s"}, text_columns=["id"])
    if ending == "csv":
        back = pd.read_csv(
            path, dtype={"id": str, "note": str}, keep_default_na=False, na_values={"lx": ""}
        )
    elif ending == "parquet":
        back = pd.read_parquet(path)
        assert pq.read_schema(path).field("lx").metadata[b"unit"] == b"erg / s"
        assert pq.read_table(path)["lx"].null_count == 1
    else:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # VOUnit calls erg deprecated
            table = Table.read(path)
        assert table["lx"].unit == u.erg / u.s
        back = table.to_pandas()
    assert back["id"].tolist() == FRAME["id"].tolist()
    assert back["note"].fillna("").tolist() == FRAME["note"].tolist()
    np.testing.assert_array_equal(back["lx"].to_numpy(dtype=float), FRAME["lx"])
    assert back["fate"].astype(str).tolist() == ["visible", "faint", "visible"]
    found = read_provenance(path)
    assert found is not None
    assert found.recipe_toml == ABOUT.recipe_toml
    if ending != "csv":
        assert found == ABOUT


def test_fits_keeps_numbers_units_and_provenance(tmp_path):
    path = tmp_path / "t.fits"
    write_table(FRAME.drop(columns="note"), path, provenance=ABOUT, units={"lx": "erg / s"})
    table = Table.read(path)
    assert [str(v).strip() for v in table["id"]] == FRAME["id"].tolist()
    values = np.ma.filled(np.ma.asarray(table["lx"], dtype=float), np.nan)
    np.testing.assert_array_equal(values, FRAME["lx"])
    assert read_provenance(path) == ABOUT


def test_fits_says_that_it_cannot_hold_other_letters(tmp_path):
    with pytest.raises(OutputError, match="beyond ASCII"):
        write_table(pd.DataFrame({"id": ["ü"]}), tmp_path / "t.fits", provenance=None, units={})
    assert list(tmp_path.iterdir()) == []


def test_text_becomes_numbers_only_where_every_field_is_one(tmp_path):
    frame = pd.DataFrame(
        {
            "id": ["1", "2"],
            "n": ["1", "2"],
            "x": ["1.5", ""],
            "zip": ["007", "8"],
            "w": ["1", "n/c"],
        }
    )
    path = tmp_path / "t.parquet"
    write_table(frame, path, provenance=None, units={}, text_columns=["id"])
    kinds = {field.name: str(field.type).replace("large_", "") for field in pq.read_schema(path)}
    assert kinds == {"id": "string", "n": "int64", "x": "double", "zip": "string", "w": "string"}


@pytest.mark.parametrize("ending", ["csv", "ecsv", "fits", "vot", "parquet"])
def test_a_full_disk_leaves_the_old_output_and_nothing_else(tmp_path, monkeypatch, ending):
    path = tmp_path / f"t.{ending}"
    path.write_text("old")

    def full(*args, **kwargs):
        (target,) = (a for a in args if str(a).endswith(".part"))
        target.write_bytes(b"half a table")
        raise OSError(errno.ENOSPC, "No space left on device")

    writer = {"vot": "_votable"}.get(ending, f"_{ending}")
    monkeypatch.setattr(writing_module, writer, full)
    with pytest.raises(OutputError, match="the disk is full"):
        write_table(FRAME[["lx"]], path, provenance=None, units={}, overwrite=True)
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == [path.name]


def test_an_interrupt_in_mid_writing_leaves_nothing(tmp_path, monkeypatch):
    def interrupted(*args):
        args[1].write_bytes(b"half")
        raise KeyboardInterrupt

    monkeypatch.setattr(writing_module, "_csv", interrupted)
    with pytest.raises(KeyboardInterrupt):
        write_table(FRAME, tmp_path / "t.csv", provenance=ABOUT, units={})
    assert list(tmp_path.iterdir()) == []


def test_of_two_runs_with_one_output_one_wins_whole(tmp_path):
    path = tmp_path / "t.csv"
    outcomes = []
    barrier = threading.Barrier(2)

    def write(value):
        barrier.wait()
        try:
            write_table(pd.DataFrame({"x": np.full(20000, value)}), path, provenance=None, units={})
            outcomes.append(value)
        except OutputError:
            outcomes.append(None)

    threads = [threading.Thread(target=write, args=(value,)) for value in (1, 2)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    winner = [value for value in outcomes if value is not None]
    assert len(winner) == 1
    assert set(pd.read_csv(path)["x"]) == set(winner)
    assert os.listdir(tmp_path) == ["t.csv"]


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_a_folder_without_permission_is_named(tmp_path):
    tmp_path.chmod(0o500)
    with pytest.raises(OutputError, match="cannot be written to"):
        write_table(FRAME, tmp_path / "t.csv", provenance=None, units={})


def test_a_folder_that_cannot_be_written_to_is_named(tmp_path, monkeypatch):
    monkeypatch.setattr("embersift.tables.writing.os.access", lambda *a: False)
    with pytest.raises(OutputError, match="cannot be written to"):
        write_table(FRAME, tmp_path / "t.csv", provenance=None, units={})


def test_csv_without_pyarrow_holds_the_same_numbers(tmp_path, monkeypatch):
    import builtins

    original = builtins.__import__

    def without(name, *args, **kwargs):
        if name.startswith("pyarrow"):
            raise ImportError(name)
        return original(name, *args, **kwargs)

    monkeypatch.setattr(builtins, "__import__", without)
    write_table(FRAME, tmp_path / "t.csv", provenance=None, units={})
    monkeypatch.undo()
    np.testing.assert_array_equal(pd.read_csv(tmp_path / "t.csv")["lx"], FRAME["lx"])
