"""Joint tables as files: written beside and renamed, kind by suffix, read back with every damage named."""

from pathplan.export.read import read_table
from pathplan.export.write import check_destination, check_units, may_replace, write_table

__all__ = ["check_destination", "check_units", "may_replace", "read_table", "write_table"]
