"""Where coordinates live: the table, and the names of tokens with a non-zero weight."""

from stream.tables.names import NameLedger
from stream.tables.table import Table

__all__ = ["NameLedger", "Table"]
