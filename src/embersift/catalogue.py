"""From the user's columns to arrays in fixed units, with every doubtful row marked.

``layout(...)`` decides once, from the header and the recipe, which column holds what and how it
converts; ``Layout.take`` then turns any block of rows into `Sources`. What a whole column says
about itself (logs taken for masses, and the like) is the business of `plausibility`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np

from embersift.arrays import Array, Mask
from embersift.columns import INPUT
from embersift.errors import CatalogueError, did_you_mean
from embersift.laws.conversions import (
    oh12_from_mass_fraction,
    oh12_from_zsun,
)
from embersift.problems import Bits, bit
from embersift.recipe import CatalogueChoices, Recipe
from embersift.sky.absorption import THICK
from embersift.sky.distance import HIGHEST_REDSHIFT, FlatUniverse
from embersift.units import Conversion, conversion

__all__ = [
    "MISSING_WORDS",
    "Column",
    "Layout",
    "Raw",
    "Sources",
    "column_names",
    "layout",
    "numbers",
]

MISSING_WORDS = ("", "nan", "na", "n/a", "null", "none", "--", "-", "masked", "<na>")
LIGHTEST = 10.0  # Msun; nothing lighter is a massive black hole (common practice, no source)
# how far a stated distance may be from the one of the stated redshift before the row is marked
_DISTANCE_FACTOR = 1.5


class Sources(NamedTuple):
    """One block of the catalogue as the chain takes it: float64 arrays of one length.

    NaN stands for a missing or impossible value; `problems` says which and why.
    """

    mstar: Array  # Msun, in the catalogue's IMF
    sfr: Array  # Msun / yr, in the catalogue's IMF
    oh12: Array
    mbh: Array  # Msun; 0 where there is no black hole
    mdot: Array  # Msun / yr, inflow or growth as the recipe says
    z: Array
    distance: Array  # Mpc, luminosity distance
    offset: Array  # kpc
    rhalf: Array  # kpc
    nh: Array  # cm-2
    weight: Array
    problems: Bits

    def rows(self, part: slice) -> Sources:
        return Sources(*(values[part] for values in self))  # type: ignore[arg-type]


@dataclass(frozen=True)
class Column:
    """Where a quantity comes from."""

    quantity: str
    column: str
    unit: str
    convert: Conversion


def column_names(table: Any) -> list[str]:
    """Column names of a DataFrame or an astropy Table."""
    names = table.colnames if hasattr(table, "colnames") else table.columns
    return [str(name) for name in names]


def _as_array(column: Any) -> Any:
    """A pandas column of plain numbers as numpy sees it, without a copy; others as they are."""
    dtype = getattr(column, "dtype", None)
    if hasattr(column, "iloc") and isinstance(dtype, np.dtype) and dtype.kind in "fiu":
        return column.to_numpy()
    return column


class Numbers(NamedTuple):
    values: Array
    missing: Mask
    not_a_number: Mask


def numbers(column: Any, sentinels: Sequence[float] = ()) -> Numbers:
    """Read any column as float64.

    Parameters
    ----------
    column : pandas Series, numpy array, astropy Column, MaskedColumn or Quantity
        Numbers, or text that spells numbers.
    sentinels : sequence of float
        Values that stand for a missing one.

    Returns
    -------
    Numbers
        `values` is NaN where `missing` or `not_a_number`.
    """
    if type(column) is np.ndarray and column.dtype == np.float64 and column.ndim == 1:
        values = column.copy()
        missing = np.isnan(values)
        for sentinel in sentinels:
            missing |= values == sentinel
        if sentinels:
            values[missing] = np.nan
        return Numbers(values, missing, np.zeros(values.size, dtype=bool))
    import pandas as pd

    mask = np.ma.getmaskarray(column) if isinstance(column, np.ma.MaskedArray) else None
    if hasattr(column, "mask") and mask is None and not isinstance(column, pd.Series):
        mask = np.asarray(column.mask, dtype=bool)  # masked Quantity
    raw = column.unmasked if hasattr(column, "unmasked") else column
    if isinstance(raw, np.ma.MaskedArray):
        raw = raw.data
    raw = getattr(raw, "value", raw)  # Quantity: the number in its own unit
    if isinstance(raw, pd.Series):
        if isinstance(raw.dtype, pd.CategoricalDtype):
            raw = raw.astype(raw.cat.categories.dtype)
        numeric = pd.api.types.is_numeric_dtype(raw.dtype)
        series = raw
    else:
        array = np.asarray(raw)
        if array.ndim != 1:
            raise CatalogueError(
                f"a column of shape {array.shape} has several values a row; one number is expected."
            )
        numeric = array.dtype.kind in "fiub"
        if array.dtype.kind == "S":
            array = np.char.decode(array, "utf-8", "replace")
        series = pd.Series(array)
    bad = np.zeros(len(series), dtype=bool)
    if numeric:
        values = series.to_numpy(dtype=float, na_value=np.nan, copy=True)
        missing = np.isnan(values)
    else:
        values = pd.to_numeric(series, errors="coerce").to_numpy(
            dtype=float, na_value=np.nan, copy=True
        )
        missing = np.isnan(values)
        if missing.any():
            words = series[missing]
            empty = words.isna() | words.astype(str).str.strip().str.lower().isin(MISSING_WORDS)
            bad[np.flatnonzero(missing)[~empty.to_numpy(dtype=bool)]] = True
            missing &= ~bad
    if mask is not None and mask.any():
        missing, bad = missing | mask, bad & ~mask
        values[mask] = np.nan
    for sentinel in sentinels:
        hit = values == sentinel
        missing |= hit
        values[hit] = np.nan
    return Numbers(values, missing, bad)


@dataclass(frozen=True)
class Raw:
    """Columns of a table as they stand, and how many rows they have."""

    columns: Mapping[str, Any]
    rows: int

    def __len__(self) -> int:
        return self.rows

    def __getitem__(self, name: str) -> Any:
        return self.columns[name]

    def part(self, rows: slice) -> Raw:
        """Some of the rows, in their order."""
        cut = {
            name: column.iloc[rows] if hasattr(column, "iloc") else column[rows]
            for name, column in self.columns.items()
        }
        return Raw(cut, len(range(*rows.indices(self.rows))))


@dataclass(frozen=True)
class Layout:
    """Which column of a catalogue holds which quantity; made by `layout`.

    `cautions` are sentences for the user about choices that were made on the way.
    """

    origin: str
    columns: Mapping[str, Column]
    cautions: tuple[str, ...]
    choices: CatalogueChoices
    default_nh: float
    universe: FlatUniverse
    targets: bool = False  # galaxies to be observed: neither a rate nor a mass is needed

    def read(self, table: Any, quantity: str) -> Numbers | None:
        """One quantity in canonical units, before any judgement; None when the table lacks it."""
        found = self.columns.get(quantity)
        if found is None:
            return None
        try:
            got = numbers(table[found.column], self.choices.missing)
        except CatalogueError as error:
            raise CatalogueError(f"{self.origin}: column {found.column!r}: {error}") from None
        return got._replace(values=found.convert(got.values))

    def plain(self, table: Any, quantity: str) -> Array | None:
        """A column that already is what the chain works in; None when it must be read first."""
        found = self.columns.get(quantity)
        if found is None or self.choices.missing or found.convert != Conversion():
            return None
        column = table[found.column]
        if type(column) is np.ndarray and column.dtype == np.float64 and column.ndim == 1:
            return column
        return None

    def raw_columns(self, table: Any) -> Raw:
        """The columns of numbers, as they stand, ready to be cut into blocks cheaply."""
        needed = [c.column for c in self.columns.values() if INPUT[c.quantity].numeric]
        return Raw({name: _as_array(table[name]) for name in needed}, len(table))

    def take(self, table: Any) -> Sources:
        """Turn a block of rows into arrays, marking every row with a problem.

        Parameters
        ----------
        table : DataFrame, Table or Raw
            The block; each row is read by itself.
        """
        rows = len(table)
        problems: Bits = np.zeros(rows, dtype=np.uint64)

        def mark(where: Mask, quantity: str, reason: str) -> None:
            # problems are rare: a handful of indices is cheaper than a mask over the block
            if where.any():
                problems[np.flatnonzero(where)] |= bit(quantity, reason)

        def read(
            quantity: str, *, missing: str | None = "missing", sign: str = "", suffix: str = ""
        ) -> Array | None:
            plain = self.plain(table, quantity)
            if plain is not None and rows:
                low, high = plain.min(), plain.max()  # NaN when any value is missing
                if high < np.inf and (low > 0.0 or (low == 0.0 and sign != "not positive")):
                    return plain  # the user's own memory: nothing below writes into it
            got = self.read(table, quantity)
            if got is None:
                return None
            values = got.values
            if missing:
                mark(got.missing, quantity, missing)
            mark(got.not_a_number, quantity, "not a number" + suffix)
            infinite = np.isinf(values)
            mark(infinite, quantity, "not finite" + suffix)
            np.putmask(values, infinite, np.nan)
            if sign:
                wrong = values <= 0.0 if sign == "not positive" else values < 0.0
                mark(wrong, quantity, sign + suffix)
                np.putmask(values, wrong, np.nan)
            return values

        def needed(values: Array | None) -> Array:
            assert values is not None  # layout() has made sure of it
            return values

        mstar = needed(read("mstar", sign="not positive"))
        sfr = needed(read("sfr", sign="negative"))
        mbh = read("mbh", missing=None, sign="negative")
        if mbh is None:
            mbh = np.full(rows, np.nan)
        # a blank mass says that there is no hole; an impossible one leaves it open
        impossible = bit("mbh", "not a number") | bit("mbh", "not finite") | bit("mbh", "negative")
        blank_mass = np.isnan(mbh)
        if blank_mass.any() and not self.targets:
            np.putmask(mbh, blank_mass & ((problems & impossible) == 0), 0.0)
        light = (mbh > 0.0) & (mbh < LIGHTEST)
        if light.any():
            # such as 0 or -99 in a column of logarithms: a placeholder, not a black hole
            mark(light, "mbh", "below 10 Msun")
            mbh = np.where(light, np.nan, mbh)
        no_hole = mbh == 0.0

        before = problems.copy()
        mdot = np.full(rows, np.nan) if self.targets else needed(read("mdot", sign="negative"))
        # a rate is not needed where there is no hole to take it in
        new = problems ^ before
        if new.any():
            problems ^= new * no_hole
        mark(no_hole & (mdot > 0.0), "mdot", "positive without a black hole")

        z, distance = self._place(table, read, mark, rows)

        oh12 = read("oh12")
        if oh12 is None:
            metallicity = read("metallicity", sign="not positive")
            if metallicity is None:
                oh12 = np.full(rows, np.nan)
                mark(np.isnan(oh12), "oh12", "missing")
            elif self.choices.metallicity == "mass_fraction":
                assert self.choices.solar_mass_fraction is not None
                oh12 = oh12_from_mass_fraction(
                    metallicity, self.choices.solar_mass_fraction, self.choices.solar_oh12
                )
            else:
                oh12 = oh12_from_zsun(metallicity, self.choices.solar_oh12)

        nh = read("nh", missing=None, sign="negative")
        if nh is None:
            nh = np.full(rows, self.default_nh)
        else:
            blank = np.isnan(nh) & (
                problems
                & (bit("nh", "not a number") | bit("nh", "not finite") | bit("nh", "negative"))
                == 0
            )
            mark(blank, "nh", "missing, taken as 0")
            nh[blank] = 0.0
        mark(nh > THICK, "nh", "above 1e24 cm-2, photoelectric absorption only")

        offset = read("offset", sign="negative")
        rhalf = read("rhalf", sign="not positive")
        weight = read(
            "weight",
            missing="missing, counts as 0",
            sign="negative",
            suffix=", counts as 0",
        )
        empty = np.full(rows, np.nan)
        return Sources(
            mstar=mstar,
            sfr=sfr,
            oh12=oh12,
            mbh=mbh,
            mdot=mdot,
            z=z,
            distance=distance,
            offset=empty if offset is None else offset,
            rhalf=empty if rhalf is None else rhalf,
            nh=nh,
            weight=np.ones(rows) if weight is None else np.nan_to_num(weight, nan=0.0),
            problems=problems,
        )

    def _place(self, table: Any, read: Any, mark: Any, rows: int) -> tuple[Array, Array]:
        """Redshift and luminosity distance of every row."""
        distance = read("distance", missing=None, sign="not positive")
        fixed = self.choices.redshift
        if fixed is not None:
            z: Array | None = np.full(rows, fixed)
        elif distance is None:
            z = read("redshift", sign="negative")
        else:
            z = self._redshift_beside(distance, table, mark)
        if distance is None:
            assert z is not None
            zero = z == 0.0
            mark(zero, "redshift", "zero without a distance")
            far = z > HIGHEST_REDSHIFT
            mark(far, "redshift", "above 1000")
            distance = self.universe.luminosity_distance(z)  # NaN where far
            if zero.any():
                distance[zero] = np.nan
            return np.where(far, np.nan, z) if far.any() else z, distance
        from_distance = self.universe.redshift(distance)
        mark(np.isfinite(distance) & np.isnan(from_distance), "distance", "beyond redshift 1000")
        if z is None:
            mark(np.isnan(distance), "distance", "missing")
            return from_distance, distance
        of_z = self.universe.luminosity_distance(np.where(z > 0.0, z, np.nan))
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = distance / of_z
        # below 20 Mpc peculiar motions make redshift a poor distance, so they may well differ
        differ = (distance > 20.0) & ((ratio > _DISTANCE_FACTOR) | (ratio < 1.0 / _DISTANCE_FACTOR))
        mark(differ, "distance", "differs from that of the redshift")
        blank = np.isnan(distance)
        mark(blank & (z == 0.0), "redshift", "zero without a distance")
        return np.where(np.isnan(z), from_distance, z), np.where(blank, of_z, distance)

    def _redshift_beside(self, distance: Array, table: Any, mark: Any) -> Array | None:
        """The redshift column of a table that has distances too: a row may do without it."""
        got = self.read(table, "redshift")
        if got is None:
            return None
        z = got.values
        with np.errstate(invalid="ignore"):
            bad = got.not_a_number | np.isinf(z) | (z < 0.0) | (z > 1000.0)
        alone = np.isnan(distance)
        with np.errstate(invalid="ignore"):
            mark(alone & got.missing, "redshift", "missing")
            mark(alone & got.not_a_number, "redshift", "not a number")
            mark(alone & np.isinf(z), "redshift", "not finite")
            mark(alone & (z < 0.0) & np.isfinite(z), "redshift", "negative")
            mark(alone & (z > HIGHEST_REDSHIFT) & np.isfinite(z), "redshift", "above 1000")
        mark(bad & ~alone, "redshift", "not usable, taken from the distance")
        return np.where(bad, np.nan, z)


def layout(
    names: Sequence[str],
    units: Mapping[str, str],
    recipe: Recipe,
    origin: str = "the table",
    *,
    targets: bool = False,
) -> Layout:
    """Match a table's columns with the quantities that the chain needs.

    Parameters
    ----------
    names : sequence of str
        The table's column names.
    units : mapping
        Unit strings that the file itself carries, by column name.
    recipe : Recipe
        Maps quantities to columns and units; a quantity that it does not map is looked for under
        its own name.
    origin : str
        File name, for messages.
    targets : bool
        The rows are galaxies to be observed: they need no accretion rate and no black-hole mass.

    Raises
    ------
    CatalogueError
        A needed column is missing (with the nearest names), a mapped one does not exist, a unit
        does not convert, a metallicity scale is not stated.
    """
    choices = recipe.catalogue
    chosen: dict[str, Column] = {}
    cautions: list[str] = []
    taken = {c.column for c in choices.columns.values()}
    for quantity, declared in INPUT.items():
        mapped = choices.columns.get(quantity)
        if mapped is None and (quantity not in names or quantity in taken):
            continue
        column = mapped.column if mapped else quantity
        if column not in names:
            raise CatalogueError(
                f"{origin}: the recipe takes {quantity} from the column {column!r}, which is not "
                f"there. {did_you_mean(column, names)}"
            )
        in_file = units.get(column, "")
        unit = mapped.unit if mapped and mapped.unit else in_file
        if mapped and _differ(mapped.unit, in_file, declared.unit, choices.h):
            cautions.append(
                f"{quantity}: the file gives the unit {in_file!r}, the recipe {mapped.unit!r}; "
                "the recipe's was used."
            )
        if not declared.numeric or (quantity == "oh12" and unit.strip() == "dex"):
            unit = "" if declared.numeric else unit
            convert = Conversion()
        else:
            where = f"{origin}: column {column!r} ({quantity})"
            convert = conversion(unit, declared.unit, choices.h, where)
        chosen[quantity] = Column(quantity, column, unit, convert)

    _check_needed(chosen, names, choices, origin, ("mbh", "mdot") if targets else ())
    if "oh12" in chosen and "metallicity" in chosen:
        del chosen["metallicity"]
        cautions.append("both oh12 and metallicity are there; oh12 was used.")
    if "metallicity" in chosen:
        scale = choices.metallicity
        if scale == "mass_fraction" and choices.solar_mass_fraction is None:
            raise CatalogueError(
                f"{origin}: metallicity is a mass fraction, and the solar value behind it is not "
                "stated. Set catalogue.solar_mass_fraction (0.0134, 0.0142 and 0.02 are in use)."
            )
    if choices.redshift is not None and "redshift" in chosen:
        cautions.append(
            f"every row was put at redshift {choices.redshift:g} as asked; "
            f"the column {chosen.pop('redshift').column!r} was not used."
        )
    return Layout(
        origin=origin,
        columns=chosen,
        cautions=tuple(cautions),
        choices=choices,
        default_nh=recipe.agn.nh,
        universe=FlatUniverse(recipe.cosmology.h0, recipe.cosmology.om0),
        targets=targets,
    )


def _differ(one: str, other: str, wanted: str, h: float | None) -> bool:
    """Whether two unit strings mean different units; Msun and solMass do not."""
    if not one or not other or one.split() == other.split():
        return False
    try:
        return conversion(one, wanted, h, "") != conversion(other, wanted, h, "")
    except CatalogueError:
        return True


def _check_needed(
    chosen: Mapping[str, Column],
    names: Sequence[str],
    choices: CatalogueChoices,
    origin: str,
    spared: Sequence[str],
) -> None:
    taken = {column.column: quantity for quantity, column in chosen.items()}
    missing = []
    for name, column in INPUT.items():
        if column.need != "yes" or name in chosen or name in spared:
            continue
        near = did_you_mean(name, names).rstrip(".")
        hint = near if near.startswith("Did") else ""
        if name in taken:
            hint = f"the column of that name is taken as {taken[name]}"
        missing.append(f"{name} [{column.unit}]" + (f" ({hint})" if hint else ""))
    if not {"redshift", "distance"} & set(chosen) and choices.redshift is None:
        missing.append("redshift or distance [Mpc] (or one redshift for all: --redshift Z)")
    if missing:
        shown = ", ".join(map(str, names[:30])) + (", ..." if len(names) > 30 else "")
        raise CatalogueError(
            f"{origin}: needed and not found: {'; '.join(missing)}. "
            f"The file has the columns: {shown}. Rename them, or map them in the recipe under "
            '[catalogue.columns], such as mstar = { column = "Mass", unit = "1e10 Msun" }.'
        )
