"""Tables on disk: reading what astronomers have, writing so that nothing is ever half there."""

from embersift.tables.formats import format_of
from embersift.tables.provenance import Provenance, read_provenance
from embersift.tables.reading import ReadOptions, read_table, units_of
from embersift.tables.writing import check_output, write_table, write_text

__all__ = [
    "Provenance",
    "ReadOptions",
    "check_output",
    "format_of",
    "read_provenance",
    "read_table",
    "units_of",
    "write_table",
    "write_text",
]
