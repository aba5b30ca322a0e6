"""Which format a file is in: its ending says, and its first bytes must not contradict."""

from __future__ import annotations

import gzip
from pathlib import Path

from embersift.errors import CatalogueError, OutputError

__all__ = ["OUTPUT_ENDINGS", "checked_format", "format_of"]

_ENDINGS = {
    ".csv": "csv",
    ".txt": "csv",
    ".dat": "csv",
    ".tsv": "csv",
    ".ecsv": "ecsv",
    ".fits": "fits",
    ".fit": "fits",
    ".vot": "votable",
    ".votable": "votable",
    ".xml": "votable",
    ".parquet": "parquet",
    ".pq": "parquet",
    ".h5": "hdf5",
    ".hdf5": "hdf5",
}
OUTPUT_ENDINGS = (".csv", ".ecsv", ".fits", ".vot", ".parquet")
_NAMES = {
    "csv": "a text table",
    "ecsv": "ECSV",
    "fits": "FITS",
    "votable": "VOTable",
    "parquet": "Parquet",
    "hdf5": "HDF5",
}


def format_of(path: Path, declared: str | None = None) -> str | None:
    """The format by declaration or ending; None when the ending is unknown.

    Examples
    --------
    >>> format_of(Path("dwarfs.fits.gz")), format_of(Path("dwarfs.dat"))
    ('fits', 'csv')
    """
    if declared is not None:
        return declared
    name = path.name.lower().removesuffix(".gz")
    return _ENDINGS.get(Path(name).suffix)


def output_format(path: Path) -> str:
    """The format an output is written in.

    Raises
    ------
    OutputError
        The ending is none of those that are written.
    """
    ending = path.suffix.lower()
    found = _ENDINGS.get(ending)
    if found is None or found == "hdf5" or ending in (".txt", ".dat", ".tsv"):
        raise OutputError(
            f"{path}: the ending {ending or '(none)'} is not written. "
            f"Use one of {', '.join(OUTPUT_ENDINGS)}."
        )
    return found


def _content(path: Path) -> str | None:
    """What the first bytes look like; None for text that could be a table."""
    with path.open("rb") as file:
        head = file.read(4096)
    if head.startswith(b"\x1f\x8b"):
        try:
            with gzip.open(path, "rb") as packed:
                head = packed.read(4096)
        except (OSError, EOFError):
            return "binary"
    if head.startswith(b"SIMPLE  ="):
        return "fits"
    if head.startswith(b"PAR1"):
        return "parquet"
    if head.startswith(b"\x89HDF\r\n\x1a\n"):
        return "hdf5"
    if head.startswith(b"# %ECSV"):
        return "ecsv"
    text = head.lstrip(b"\xef\xbb\xbf \t\r\n")
    if text.startswith((b"<?xml", b"<VOTABLE")) and b"VOTABLE" in head.upper():
        return "votable"
    control = sum(byte < 9 or 13 < byte < 32 for byte in head)
    if b"\x00" in head or control > len(head) // 100:
        return "binary"
    return None


def checked_format(path: Path, declared: str | None) -> str:
    """The format to read a file in.

    Raises
    ------
    CatalogueError
        The file is not there or cannot be read, its ending is unknown, or its content is another
        format than its name says.
    """
    if path.is_dir():
        raise CatalogueError(f"{path}: is a folder; give one file.")
    try:
        content = _content(path)
        size = path.stat().st_size
    except OSError as error:
        raise CatalogueError(f"{path}: cannot be read ({error.strerror}).") from None
    if size == 0:
        raise CatalogueError(f"{path}: the file is empty.")
    named = format_of(path, declared)
    if named is None:
        looks = f"; it looks like {_NAMES[content]}" if content in _NAMES else ""
        raise CatalogueError(
            f"{path}: the ending does not say the format{looks}. Set catalogue.format to one of "
            f"{', '.join(_NAMES)}."
        )
    # an ECSV file is a text table too, should its reader want only that
    if (
        content == named
        or (content is None and named in ("csv",))
        or (named, content) == ("csv", "ecsv")
    ):
        return "ecsv" if content == "ecsv" else named
    if content == "binary":
        raise CatalogueError(
            f"{path}: named as {_NAMES[named]}, but the content is binary and of no format that "
            "embersift reads. Was it cut short or packed?"
        )
    looks = _NAMES[content] if content else "a text table"
    cure = f'catalogue.format = "{content or "csv"}"'
    raise CatalogueError(
        f"{path}: named as {_NAMES[named]}, but the content looks like {looks}. "
        f"Rename the file, or set {cure}."
    )
