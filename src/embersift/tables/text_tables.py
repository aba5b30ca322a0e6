"""Text tables: CSV and its relatives, read so that every field stays as it was written."""

from __future__ import annotations

import csv
import gzip
import io
import re
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING

from embersift.errors import CatalogueError

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["read_text_table"]

_SEPARATORS = (",", "\t", ";", "|")
# a text table packs to perhaps a tenth; far beyond that it is no table
_MOST_EXPANSION = 200


def read_text_table(path: Path, separator: str | None = None) -> pd.DataFrame:
    """Read a text table with every column as text.

    Parameters
    ----------
    path : Path
        UTF-8 text, gzip-packed or not. Lines that begin with ``#`` are comments; when the first
        line below them is all numbers, the last comment is the header (as in many simulations'
        tables).
    separator : str, optional
        Found from the header when not given: comma, tab, semicolon, bar or white space.

    Raises
    ------
    CatalogueError
        No header, no rows, a name that stands twice, or a line with another number of fields;
        the line number is in the message.
    """
    text = _text(path)
    comments, header_line, body_start = _header(path, text)
    sep = separator or _separator(header_line)
    names = _fields(header_line, sep)
    if comments and names and all(_is_number(name) for name in names):
        candidate = _fields(comments[-1].lstrip("#").strip(), sep)
        if len(candidate) == len(names) and not any(_is_number(name) for name in candidate):
            names, body_start = candidate, body_start - 1
    names = [name.strip() for name in names]
    _check_names(path, names)
    _check_ragged(path, text, len(names), sep, body_start)
    return _frame(path, text, names, sep, body_start)


def _text(path: Path) -> str:
    raw = path.read_bytes()
    if raw.startswith(b"\x1f\x8b"):
        most = max(_MOST_EXPANSION * len(raw), 1 << 20)
        try:
            with gzip.open(path, "rb") as packed:
                raw = packed.read(most + 1)
        except (OSError, EOFError) as error:
            raise CatalogueError(f"{path}: the packed file is damaged ({error}).") from None
        if len(raw) > most:
            raise CatalogueError(
                f"{path}: unpacks to more than {_MOST_EXPANSION} times its size, which no table "
                "does. Unpack it yourself if it is right."
            )
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise CatalogueError(
            f"{path}: not UTF-8 text (byte {error.start}). Convert it, or name its format."
        ) from None
    text = text.replace("\r\n", "\n").replace("\r", "\n")
    if "\x00" in text:
        raise CatalogueError(f"{path}: holds NUL bytes, so it is not a text table.")
    return text


def _header(path: Path, text: str) -> tuple[list[str], str, int]:
    """Comments above the header, the header itself, and the number of lines up to the body."""
    comments = []
    for number, line in enumerate(io.StringIO(text), start=1):
        stripped = line.strip()
        if not stripped:
            continue
        if stripped.startswith("#"):
            comments.append(stripped)
            continue
        return comments, stripped, number
    raise CatalogueError(f"{path}: no line but comments; a header and rows are expected.")


def _separator(header: str) -> str:
    counts = {sep: len(next(csv.reader([header], delimiter=sep))) for sep in _SEPARATORS}
    best = max(counts, key=lambda sep: counts[sep])
    if counts[best] > 1:
        return best
    return " " if len(header.split()) > 1 else ","


def _fields(line: str, sep: str) -> list[str]:
    if sep == " ":
        return line.split()
    return next(csv.reader([line], delimiter=sep, skipinitialspace=True), [])


def _is_number(field: str) -> bool:
    try:
        float(field)
    except ValueError:
        return False
    return True


def _check_names(path: Path, names: list[str]) -> None:
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise CatalogueError(
            f"{path}: the header names the column{'s' if len(twice) > 1 else ''} "
            f"{', '.join(map(repr, twice[:5]))} more than once. Rename one of them."
        )
    if all(_is_number(name) for name in names):
        raise CatalogueError(
            f"{path}: the first line is all numbers, so there is no header. Name the columns in "
            "the first line."
        )


def _frame(path: Path, text: str, names: list[str], sep: str, skip: int) -> pd.DataFrame:
    import pandas as pd

    try:
        frame = pd.read_csv(
            io.StringIO("".join(line for _, line in _body(text, skip))),
            sep=r"\s+" if sep == " " else sep,
            header=None,
            names=names,
            index_col=False,
            comment=None,
            dtype=str,
            keep_default_na=False,
            na_filter=False,
            skip_blank_lines=True,
            skipinitialspace=True,
            on_bad_lines="error",
        )
    except pd.errors.EmptyDataError:
        raise CatalogueError(
            f"{path}: a header with {len(names)} columns and no rows; nothing to read."
        ) from None
    except pd.errors.ParserError as error:
        raise CatalogueError(f"{path}: {_parser_words(str(error), len(names))}") from None
    if len(frame) == 0:
        raise CatalogueError(
            f"{path}: a header with {len(names)} columns and no rows; nothing to read."
        )
    return frame


def _check_ragged(path: Path, text: str, expected: int, sep: str, skip: int) -> None:
    """Stop at the first line with too few or too many fields, which pandas fills or cuts."""
    for number, count in _field_counts(text, sep, skip):
        if count != expected:
            raise CatalogueError(
                f"{path}: line {number} has {count} field{'' if count == 1 else 's'}, the header "
                f"has {expected}. Is the separator right? (catalogue.separator)"
            )


def _body(text: str, skip: int) -> Iterator[tuple[int, str]]:
    """Numbered lines below the header, without comments; a quoted field may begin with #."""
    for number, line in enumerate(text.splitlines(keepends=True), start=1):
        if number > skip and not line.lstrip().startswith("#"):
            yield number, line


def _field_counts(text: str, sep: str, skip: int) -> Iterator[tuple[int, int]]:
    body = list(_body(text, skip))
    if sep == " ":
        for number, line in body:
            if line.strip():
                yield number, len(line.split())
        return
    csv.field_size_limit(max(csv.field_size_limit(), len(text) + 1))
    reader = csv.reader((line for _, line in body), delimiter=sep, skipinitialspace=True)
    for fields in reader:
        if fields and not (len(fields) == 1 and not fields[0].strip()):
            yield body[reader.line_num - 1][0], len(fields)


def _parser_words(message: str, expected: int) -> str:
    found = re.search(r"Expected (\d+) fields in line (\d+), saw (\d+)", message)
    if found:
        return (
            f"line {found[2]} has {found[3]} fields, the header has {expected}. "
            "Is the separator right? (catalogue.separator)"
        )
    return f"cannot be read as a text table ({message.strip()})."
