"""Station tables as text: what they say is read without guessing in silence."""

from converter.table.read import StationTable, TableProfile, read_table

__all__ = ["StationTable", "TableProfile", "read_table"]
