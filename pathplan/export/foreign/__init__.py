"""Tables that pathplan did not write: found columns, told units, made into joint tables."""

from pathplan.export.foreign.asked import Asked
from pathplan.export.foreign.own import is_own
from pathplan.export.foreign.source import SUFFIXES
from pathplan.export.foreign.table import Foreign, read_foreign

__all__ = ["SUFFIXES", "Asked", "Foreign", "is_own", "read_foreign"]
