"""Writing: under a temporary name first, so that a killed run leaves the old output or none."""

from __future__ import annotations

import contextlib
import errno
import json
import os
import secrets
import warnings
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from embersift.errors import OutputError
from embersift.tables.formats import output_format
from embersift.tables.provenance import Provenance, sidecar

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["check_output", "write_table", "write_text"]


def check_output(path: Path, *, overwrite: bool, protect: Sequence[Path] = ()) -> None:
    """Find out before any work whether an output can be written.

    Raises
    ------
    OutputError
        Unknown ending, no such folder, no permission, the output is an input, or it exists and
        `overwrite` is False.
    """
    if path.suffix not in (".json", ".toml", ".html", ".svg", ".png", ".pdf"):
        output_format(path)
    folder = path.parent
    if not folder.is_dir():
        raise OutputError(f"{path}: there is no folder {folder}. Make it first.")
    for given in protect:
        if path.exists() and given.exists() and os.path.samefile(path, given):
            raise OutputError(f"{path}: is the input itself, which is never changed.")
    if path.is_dir():
        raise OutputError(f"{path}: is a folder.")
    if path.exists() and not overwrite:
        raise OutputError(f"{path}: exists. Choose another name, or replace it with --overwrite.")
    if not os.access(folder, os.W_OK):
        raise OutputError(f"{path}: the folder {folder} cannot be written to.")


@contextlib.contextmanager
def _placed(path: Path, overwrite: bool) -> Iterator[Path]:
    """A temporary name beside `path` that becomes `path` when the block ends well."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}.{secrets.token_hex(4)}.part")
    try:
        yield temporary
        if overwrite:
            os.replace(temporary, path)
        else:
            # a link fails when the name is taken, also by a writer that came in between
            try:
                os.link(temporary, path)
            except FileExistsError:
                raise OutputError(
                    f"{path}: was written by another run meanwhile; nothing was replaced."
                ) from None
            except OSError as error:
                if error.errno not in (errno.EPERM, errno.ENOTSUP, errno.EOPNOTSUPP):
                    raise
                os.replace(temporary, path)  # a file system without links
    except OSError as error:
        full = error.errno in (errno.ENOSPC, errno.EDQUOT)
        reason = "the disk is full" if full else (error.strerror or str(error))
        raise OutputError(
            f"{path}: could not be written: {reason}. Nothing was left there."
        ) from None
    finally:
        with contextlib.suppress(OSError):
            temporary.unlink()


def write_text(text: str, path: Path, *, overwrite: bool = False) -> None:
    """Write a small text file whole or not at all."""
    path = Path(path)
    if not overwrite and path.exists():
        raise OutputError(f"{path}: exists. Choose another name, or replace it with --overwrite.")
    if not path.parent.is_dir():
        raise OutputError(f"{path}: there is no folder {path.parent}. Make it first.")
    with _placed(path, overwrite) as temporary:
        temporary.write_text(text, encoding="utf-8")


def write_table(
    table: Any,
    path: str | Path,
    *,
    provenance: Provenance | None,
    units: Mapping[str, str],
    ucds: Mapping[str, str] | None = None,
    text_columns: Sequence[str] = (),
    overwrite: bool = False,
    protect: Sequence[Path] = (),
) -> None:
    """Write a table, format by ending.

    Parameters
    ----------
    table : pandas.DataFrame or astropy.table.Table
        What to write.
    path : path
        ``.csv``, ``.ecsv``, ``.fits``, ``.vot`` or ``.parquet``.
    provenance : Provenance or None
        Goes into the header where the format has one; beside a CSV as ``PATH.recipe.toml``.
    units, ucds : mapping
        Unit strings and UCDs by column; where the format carries them.
    text_columns : sequence of str
        Columns that stay text even when all their fields look like numbers.
    overwrite, protect
        As in `check_output`.

    Raises
    ------
    OutputError
        The table could not be written; what stood there before still does.
    """
    path = Path(path)
    check_output(path, overwrite=overwrite, protect=protect)
    kind = output_format(path)
    if kind == "csv":
        frame = _plain_frame(table)
        beside_it = provenance is not None and provenance.recipe_toml
        if beside_it and sidecar(path).exists() and not overwrite:
            raise OutputError(
                f"{sidecar(path)}: exists, and would be replaced. Choose another output, or use "
                "--overwrite."
            )
        with _placed(path, overwrite) as temporary:
            _csv(frame, temporary)
            if provenance is not None and provenance.recipe_toml:
                with _placed(sidecar(path), True) as beside:
                    beside.write_text(provenance.recipe_toml, encoding="utf-8")
        return
    if kind == "parquet":
        frame = _typed(_plain_frame(table), text_columns)
        with _placed(path, overwrite) as temporary:
            _parquet(frame, temporary, provenance, units)
        return
    writers: dict[str, Callable[..., None]] = {"ecsv": _ecsv, "fits": _fits, "votable": _votable}
    columns = _astropy_table(table, text_columns, units)
    with _placed(path, overwrite) as temporary:
        try:
            writers[kind](columns, temporary, provenance, ucds or {})
        except (ValueError, TypeError, KeyError) as error:
            raise OutputError(f"{path}: cannot be written as {kind.upper()}: {error}") from None


def _plain_frame(table: Any) -> pd.DataFrame:
    """A DataFrame whose Categoricals are plain text."""
    import pandas as pd

    if hasattr(table, "colnames"):
        flat = [name for name in table.colnames if table[name].ndim == 1]
        if len(flat) < len(table.colnames):
            lost = sorted(set(table.colnames) - set(flat))
            raise OutputError(
                f"the column {lost[0]!r} holds several values a row, which this format cannot; "
                "write .ecsv, .fits or .vot."
            )
        frame: pd.DataFrame = table.to_pandas()
    else:
        frame = table.copy(deep=False)
    for name in frame.columns:
        if isinstance(frame[name].dtype, pd.CategoricalDtype):
            frame[name] = np.asarray(frame[name].astype(object))
    return frame


def _typed(frame: pd.DataFrame, text_columns: Sequence[str]) -> pd.DataFrame:
    """Text columns whose every field is a number become numbers; ids and the like stay text."""
    import pandas as pd

    typed = frame.copy(deep=False)
    for name in frame.columns:
        column = frame[name]
        if name in text_columns:
            if not pd.api.types.is_numeric_dtype(column.dtype):
                typed[name] = column.astype(str)
            continue
        if pd.api.types.is_numeric_dtype(column.dtype) or column.dtype.kind in "bMm":
            continue
        text = column.astype(str)
        filled = text.str.strip() != ""
        # 007 or +1 is a name, not a number that happens to be padded
        padded = text.str.match(r"^\s*[+-]?0\d").any() or text.str.match(r"^\s*\+").any()
        if padded or not filled.any():
            continue
        numbers = pd.to_numeric(text.where(filled), errors="coerce")
        spelled = filled & ~text.str.strip().str.lower().isin(("nan", "null", "none"))
        if numbers[spelled].notna().all():
            whole = filled.all() and text.str.fullmatch(r"\s*-?\d{1,18}\s*").all()
            typed[name] = numbers.astype("int64") if whole else numbers.astype("float64")
    return typed


def _csv(frame: pd.DataFrame, path: Path) -> None:
    try:
        import pyarrow as pa
        from pyarrow import csv as arrow_csv
    except ImportError:
        frame.to_csv(path, index=False)
        return
    arrow = pa.Table.from_pandas(frame, preserve_index=False)
    kinds = pa.types
    plain = (kinds.is_floating, kinds.is_integer, kinds.is_string, kinds.is_large_string)
    if not all(any(is_kind(field.type) for is_kind in plain) for field in arrow.schema):
        frame.to_csv(path, index=False)
        return
    if _has_odd_fields(arrow):
        # arrow would quote every field of every text column, numbers spelled as text included
        frame.to_csv(path, index=False)
        return
    header = ",".join(_quoted(str(name)) for name in frame.columns)
    with path.open("wb") as file:
        file.write((header + "\n").encode())
        options = arrow_csv.WriteOptions(include_header=False, quoting_style="none")
        arrow_csv.write_csv(arrow, file, options)


def _has_odd_fields(arrow: Any) -> bool:
    import pyarrow as pa
    import pyarrow.compute as pc

    return any(
        pc.any(pc.match_substring_regex(column, '[",\r\n]')).as_py()
        for column in arrow.columns
        if pa.types.is_string(column.type) or pa.types.is_large_string(column.type)
    )


def _quoted(name: str) -> str:
    if any(mark in name for mark in ',"\r\n'):
        return '"' + name.replace('"', '""') + '"'
    return name


def _parquet(
    frame: pd.DataFrame, path: Path, provenance: Provenance | None, units: Mapping[str, str]
) -> None:
    try:
        import pyarrow as pa
        import pyarrow.parquet as pq
    except ImportError:
        raise OutputError(
            f"{path.name}: Parquet needs pyarrow. Install it with: pip install 'embersift[parquet]'"
        ) from None
    arrow = pa.Table.from_pandas(frame, preserve_index=False)  # NaN becomes null
    fields = [
        field.with_metadata({b"unit": units[field.name].encode()})
        if units.get(field.name)
        else field
        for field in arrow.schema
    ]
    metadata = dict(arrow.schema.metadata or {})
    if provenance is not None:
        metadata[b"embersift"] = json.dumps(provenance.as_dict()).encode()
    pq.write_table(arrow.cast(pa.schema(fields, metadata=metadata)), path, use_dictionary=False)


def _astropy_table(table: Any, text_columns: Sequence[str], units: Mapping[str, str]) -> Any:
    import pandas as pd
    from astropy.table import Column, Table

    if hasattr(table, "colnames"):
        return table.copy(copy_data=False)
    frame = _typed(_plain_frame(table), text_columns)
    made = Table()
    for name in frame.columns:
        column = frame[name]
        if pd.api.types.is_numeric_dtype(column.dtype) and column.dtype.kind in "fiub":
            values = column.to_numpy()
        elif pd.api.types.is_numeric_dtype(column.dtype):
            values = column.to_numpy(dtype=float, na_value=np.nan)
        else:
            words = column.where(column.notna(), "").astype(str).tolist()
            values = np.array(words, dtype=str) if words else np.array([], dtype="U1")
        made[str(name)] = Column(values)
        unit = units.get(str(name))
        if unit and values.dtype.kind in "fi":
            with contextlib.suppress(ValueError):
                made[str(name)].unit = unit
    return made


def _ecsv(columns: Any, path: Path, provenance: Provenance | None, ucds: Mapping[str, str]) -> None:
    if provenance is not None:
        columns.meta["embersift"] = provenance.as_dict()
    columns.write(path, format="ascii.ecsv", delimiter=",")


def _fits(columns: Any, path: Path, provenance: Provenance | None, ucds: Mapping[str, str]) -> None:
    for name in columns.colnames:
        if not name.isascii():
            raise OutputError(
                f"the column name {name!r} holds letters beyond ASCII, which FITS cannot; "
                "write .ecsv, .csv, .vot or .parquet."
            )
        column = columns[name]
        if column.dtype.kind == "U":
            wide = np.char.encode(np.asarray(column), "utf-8")
            try:
                np.char.decode(wide, "ascii")
            except UnicodeDecodeError:
                raise OutputError(
                    f"the column {name!r} holds letters beyond ASCII, which FITS cannot; "
                    "write .ecsv, .csv, .vot or .parquet."
                ) from None
    if provenance is not None:
        columns.meta.update(provenance.fits_cards())
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        columns.write(path, format="fits")


def _votable(
    columns: Any, path: Path, provenance: Provenance | None, ucds: Mapping[str, str]
) -> None:
    from astropy.io import votable
    from astropy.io.votable.tree import Info

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        columns.meta = {}
        document = votable.from_table(columns)
        document.version = "1.4"  # from here on units are VOUnit, which is what astropy writes
        first = document.get_first_table()
        for field in first.fields:
            if ucds.get(field.name):
                field.ucd = ucds[field.name]
        if provenance is not None:
            content = json.dumps(provenance.as_dict())
            first.infos.append(Info(name="embersift", value=content))
        document.to_xml(str(path))
