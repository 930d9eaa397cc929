"""What a sample holds by path: plain message objects in, one Column of values for each dotted path out."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

from stream.decoding.times import epoch_ms
from stream.settings.checks import is_path_key

__all__ = ["Column", "columns_of"]

MOST_KEYS = 100
"""An object with more different keys over the sample is a map, not a record."""


@dataclass
class Column:
    """The values of one path that are there and not null, and the rows of the sample that have them."""

    path: str
    messages: int
    values: list[Any] = field(default_factory=list)
    rows: list[int] = field(default_factory=list)
    objects: int = 0
    addressable: bool = True
    parent: Column | None = None

    @property
    def last(self) -> str:
        """The last key of the path, in lower case."""
        return self.path.rpartition(".")[2].lower()

    @property
    def missing(self) -> int:
        """Messages without a value here."""
        return self.messages - len(self.values)

    @cached_property
    def types(self) -> frozenset[type]:
        """The Python types among the values."""
        return frozenset(map(type, self.values))

    @cached_property
    def counts(self) -> Counter[Any]:
        """How often each value stands there; items of lists count one by one."""
        if self.types <= {list}:
            return Counter(item for items in self.values for item in items)
        return Counter(self.values)

    @property
    def distinct(self) -> int:
        """Number of different values (of items, for lists)."""
        return len(self.counts)

    @property
    def constant(self) -> bool:
        """Every message says the same here."""
        return not self.missing and self.types.isdisjoint({list}) and self.distinct == 1

    @property
    def nearly_unique(self) -> bool:
        """So many different values that most are never seen again."""
        return self.distinct > max(50, self.counts.total() // 2)

    @property
    def mostly_texts_with_spaces(self) -> bool:
        """Half of the texts or more have more than one word."""
        return 2 * sum(len(value.split()) > 1 for value in self.values) >= len(self.values)

    @property
    def instants(self) -> bool:
        """All values are RFC 3339 texts."""
        return self.types == {str} and all(map(_is_instant, self.values))

    @property
    def epochs(self) -> bool:
        """All values are numbers that read as epoch seconds or milliseconds of the years 2000 to 2100."""
        return self.types <= {int, float} and all(
            946_684_800 <= value / scale <= 4_102_444_800
            for scale in (1000 if self.values[0] > 1e11 else 1,)
            for value in self.values
        )


def columns_of(messages: Sequence[dict[str, Any]]) -> tuple[list[Column], dict[str, int]]:
    """Columns in order of first appearance, and the paths of map-like objects with their number of keys."""
    columns: dict[tuple[str, ...], Column] = {}
    for row, message in enumerate(messages):
        _walk(columns, (), message, row, len(messages))
    children = Counter(keys[:-1] for keys in columns)
    maps = {keys: count for keys, count in children.items() if keys and count > MOST_KEYS}
    kept = [
        column
        for keys, column in columns.items()
        if not any(keys[:depth] in maps for depth in range(1, len(keys) + 1))
    ]
    return kept, {".".join(keys): count for keys, count in maps.items()}


def _is_instant(text: str) -> bool:
    try:
        epoch_ms(text)
    except ValueError:
        return False
    return True


def _walk(
    columns: dict[tuple[str, ...], Column],
    above: tuple[str, ...],
    record: dict[str, Any],
    row: int,
    messages: int,
) -> None:
    for key, value in record.items():
        keys = (*above, key)
        if keys not in columns:
            parent = columns.get(above)
            named = is_path_key(key) and (parent is None or parent.addressable)
            columns[keys] = Column(".".join(keys), messages, addressable=named, parent=parent)
        column = columns[keys]
        if isinstance(value, dict):
            column.objects += 1
            _walk(columns, keys, value, row, messages)
        elif value is not None:
            column.values.append(value)
            column.rows.append(row)
