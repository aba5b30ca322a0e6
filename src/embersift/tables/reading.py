"""Reading a table of any format into a DataFrame or an astropy Table, units kept."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from embersift.errors import CatalogueError, did_you_mean
from embersift.tables.formats import checked_format
from embersift.tables.text_tables import read_text_table

__all__ = ["ReadOptions", "read_table", "units_of"]


@dataclass(frozen=True)
class ReadOptions:
    """How a file is read, where its name and content leave a choice."""

    format: str | None = None
    separator: str | None = None
    table: str | int | None = None  # FITS extension, HDF5 path, VOTable name or number


def read_table(path: str | Path, options: ReadOptions | None = None) -> Any:
    """Read a table.

    Parameters
    ----------
    path : path
        CSV, ECSV, FITS, VOTable, Parquet or HDF5, by ending.
    options : ReadOptions, optional
        Format, separator and table, when they are not plain.

    Returns
    -------
    pandas.DataFrame or astropy.table.Table
        A DataFrame from CSV (every column as text, to the letter), Parquet and HDF5, with units in
        ``attrs["units"]``; a Table from ECSV, FITS and VOTable.

    Raises
    ------
    CatalogueError
        The file cannot be read: why, and what to do.
    """
    path = Path(path)
    options = options or ReadOptions()
    kind = checked_format(path, options.format)
    if kind == "csv":
        return read_text_table(path, options.separator)
    readers: dict[str, Callable[[Path, ReadOptions], Any]] = {
        "ecsv": _ecsv,
        "fits": _fits,
        "votable": _votable,
        "parquet": _parquet,
        "hdf5": _hdf5,
    }
    try:
        table = readers[kind](path, options)
    except CatalogueError:
        raise
    except MemoryError:
        raise CatalogueError(f"{path}: does not fit in memory.") from None
    except Exception as error:  # whatever a damaged file does to a reader
        reason = " ".join(str(error).split())[:200] or type(error).__name__
        raise CatalogueError(
            f"{path}: cannot be read as {kind.upper()}: {reason}. Was it cut short?"
        ) from None
    _refuse_objects(path, table)
    return table


def units_of(table: Any) -> dict[str, str]:
    """Unit strings of a table's columns, by name; columns without a unit are left out."""
    if hasattr(table, "colnames"):
        found = {}
        for name in table.colnames:
            unit = getattr(table[name], "unit", None)
            if unit is not None and str(unit):
                found[name] = str(unit)
        return found
    return {str(name): str(unit) for name, unit in table.attrs.get("units", {}).items() if unit}


def _ecsv(path: Path, options: ReadOptions) -> Any:
    from astropy.table import Table

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return Table.read(path, format="ascii.ecsv")


def _fits(path: Path, options: ReadOptions) -> Any:
    from astropy.io import fits
    from astropy.table import Table

    with warnings.catch_warnings():
        # a truncated file only warns, and would yield zeros for the rows that are not there
        warnings.simplefilter("error", category=fits.verify.VerifyWarning)
        warnings.filterwarnings("error", message=".*truncated.*")
        warnings.filterwarnings("ignore", category=DeprecationWarning)
        with fits.open(path, memmap=False) as units:
            tables = {
                hdu.name or str(i): i
                for i, hdu in enumerate(units)
                if isinstance(hdu, (fits.BinTableHDU, fits.TableHDU))
            }
            if not tables:
                raise CatalogueError(f"{path}: holds no table, only images or headers.")
            wanted = options.table
            if wanted is None:
                index = next(iter(tables.values()))
            elif isinstance(wanted, int):
                index = wanted
            else:
                by_name = {name.upper(): i for name, i in tables.items()}
                if wanted.upper() not in by_name:
                    raise CatalogueError(
                        f"{path}: there is no table {wanted!r}. {did_you_mean(wanted, tables)}"
                    )
                index = by_name[wanted.upper()]
            if index not in tables.values():
                raise CatalogueError(
                    f"{path}: extension {index} is not a table. Tables: "
                    f"{', '.join(f'{i} ({n})' for n, i in tables.items())}."
                )
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        table = Table.read(path, hdu=index, format="fits", character_as_bytes=False)
    for name in table.colnames:
        if table[name].dtype.kind == "S":
            table.convert_bytestring_to_unicode()
            break
    return table


def _votable(path: Path, options: ReadOptions) -> Any:
    from astropy.io import votable

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        document = votable.parse(path)
        tables = list(document.iter_tables())
        if not tables:
            raise CatalogueError(f"{path}: holds no table.")
        chosen = tables[0]
        if options.table is not None:
            named = {t.ID or t.name or str(i): t for i, t in enumerate(tables)}
            key = str(options.table)
            if key.isdigit() and int(key) < len(tables):
                chosen = tables[int(key)]
            elif key in named:
                chosen = named[key]
            else:
                raise CatalogueError(
                    f"{path}: there is no table {key!r}. {did_you_mean(key, named)}"
                )
        table = chosen.to_table(use_names_over_ids=True)
        for info in (*document.infos, *chosen.infos):
            if info.name == "embersift":
                table.meta["embersift"] = info.value
    return table


def _parquet(path: Path, options: ReadOptions) -> Any:
    try:
        import pyarrow.parquet as pq
    except ImportError:
        raise CatalogueError(
            f"{path}: Parquet needs pyarrow. Install it with: pip install 'embersift[parquet]'"
        ) from None
    arrow = pq.read_table(path)
    units = {
        field.name: field.metadata[b"unit"].decode()
        for field in arrow.schema
        if field.metadata and b"unit" in field.metadata
    }
    names = arrow.schema.names
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise CatalogueError(f"{path}: the column {twice[0]!r} stands there more than once.")
    frame = arrow.to_pandas()
    if frame.index.names != [None]:
        frame = frame.reset_index()
    frame.attrs["units"] = units
    return frame


def _hdf5(path: Path, options: ReadOptions) -> Any:
    try:
        import h5py
    except ImportError:
        raise CatalogueError(
            f"{path}: HDF5 needs h5py. Install it with: pip install 'embersift[hdf5]'"
        ) from None
    import pandas as pd

    with h5py.File(path, "r") as file:
        place = _hdf5_place(path, file, options.table)
        columns: dict[str, Any] = {}
        units: dict[str, str] = {}
        if isinstance(place, h5py.Dataset):
            data = place[()]
            for name in data.dtype.names:
                columns[name] = _native(data[name])
        else:
            for name, item in place.items():
                if isinstance(item, h5py.Dataset) and item.ndim == 1:
                    columns[name] = _native(item[()])
                    unit = item.attrs.get("unit", item.attrs.get("units"))
                    if unit is not None:
                        units[name] = unit.decode() if isinstance(unit, bytes) else str(unit)
        lengths = {len(values) for values in columns.values()}
        if len(lengths) > 1:
            raise CatalogueError(
                f"{path}: the columns of {place.name} have different lengths "
                f"({', '.join(map(str, sorted(lengths)))}), so they are not one table."
            )
    frame = pd.DataFrame(columns)
    frame.attrs["units"] = units
    return frame


def _hdf5_place(path: Path, file: Any, wanted: str | int | None) -> Any:
    import h5py

    def is_table(item: Any) -> bool:
        if isinstance(item, h5py.Dataset):
            return item.dtype.names is not None
        return any(
            isinstance(i, h5py.Dataset) and i.ndim == 1 and i.dtype.names is None
            for i in item.values()
        )

    if wanted is not None:
        key = str(wanted)
        if key not in file:
            names: list[str] = []
            file.visit(names.append)
            raise CatalogueError(f"{path}: there is no {key!r}. {did_you_mean(key, names)}")
        return file[key]
    if is_table(file):
        return file
    found: list[Any] = []
    file.visititems(lambda _, item: found.append(item) if is_table(item) else None)
    if any("pandas_type" in item.attrs for item in found) or "pandas_type" in file.attrs:
        raise CatalogueError(
            f"{path}: written by pandas, whose HDF5 layout is its own. "
            "Write Parquet or CSV instead."
        )
    if not found:
        raise CatalogueError(f"{path}: holds no table: no compound dataset, no group of columns.")
    if len(found) > 1:
        raise CatalogueError(
            f"{path}: holds several tables ({', '.join(i.name for i in found[:6])}). "
            "Name one with catalogue.table."
        )
    return found[0]


def _native(values: Any) -> Any:
    """Bytes become text; numbers get this machine's byte order, which pandas insists on."""
    array = np.asarray(values)
    if array.dtype.kind == "S":
        return np.char.decode(array, "utf-8", "replace")
    if array.dtype.kind == "O":
        return np.array(
            [v.decode("utf-8", "replace") if isinstance(v, bytes) else v for v in array]
        )
    return array.astype(array.dtype.newbyteorder("="), copy=False)


def _refuse_objects(path: Path, table: Any) -> None:
    names = table.colnames if hasattr(table, "colnames") else list(table.columns)
    twice = sorted({str(name) for name in names if list(names).count(name) > 1})
    if twice:
        raise CatalogueError(f"{path}: the column {twice[0]!r} stands there more than once.")
