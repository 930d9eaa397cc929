"""Where coordinates live: the table, and the names of tokens with a non-zero weight."""

from stream.tables.names import NameLedger, NamePile, names_at, names_state
from stream.tables.table import Table

__all__ = ["NameLedger", "NamePile", "Table", "names_at", "names_state"]
