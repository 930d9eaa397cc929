"""Where coordinates live: the table, and the names of tokens with a non-zero weight."""

from stream.tables.names import NameLedger, names_state
from stream.tables.table import Table

__all__ = ["NameLedger", "Table", "names_state"]
