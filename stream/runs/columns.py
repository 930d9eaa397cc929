"""What a sample holds by path: plain message objects in, one Column of values for each dotted path out."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

from stream.decoding.times import epoch_ms
from stream.decoding.uses import ITEM_KINDS, MAX_QUANTITY, kind_of
from stream.settings.checks import is_path_key

__all__ = ["NEARLY_ALL", "Column", "columns_of", "is_epoch", "is_instant"]

MOST_KEYS = 100
"""An object with more different keys over the sample is a map, not a record."""
NEARLY_ALL = 0.98
"""Where this share of the values of a path is alike, the others are taken for errors of the feed."""


OBJECT = "an object"


@dataclass
class Column:
    """The values of one path that are there and not null, and the rows of the sample that have them.

    `odd`: what was taken out, as unlike nearly all others, by row.
    """

    path: str
    messages: int
    values: list[Any] = field(default_factory=list)
    rows: list[int] = field(default_factory=list)
    object_rows: list[int] = field(default_factory=list)
    addressable: bool = True
    parent: Column | None = None
    odd: dict[int, str] = field(default_factory=dict)

    @property
    def last(self) -> str:
        """The last key of the path, in lower case."""
        return self.path.rpartition(".")[2].lower()

    @property
    def objects(self) -> int:
        """Messages with an object here."""
        return len(self.object_rows)

    @property
    def missing(self) -> int:
        """Messages without a value here."""
        return self.messages - len(self.values)

    @cached_property
    def usual(self) -> Column:
        """The column without values of another kind than nearly all; itself where there are none or many."""
        kinds = Counter(map(_likeness, self.values))
        if self.objects:
            kinds[OBJECT] = self.objects
        if len(kinds) < 2:
            return self
        most = kinds.most_common(1)[0][0]
        if most != OBJECT:
            return self.only(lambda value: _likeness(value) == most)
        if self.objects < NEARLY_ALL * kinds.total():
            return self
        odd = {row: _name(value) for row, value in zip(self.rows, self.values, strict=True)}
        return replace(self, values=[], rows=[], odd=self.odd | odd)

    def only(self, fits: Callable[[Any], bool], text: str = "") -> Column:
        """The column without values that do not fit, and objects; itself where they are none or many.

        `text`: what texts among those values are called.
        """
        fitting = [fits(value) for value in self.values]
        if all(fitting) and not self.objects:
            return self
        if sum(fitting) < NEARLY_ALL * (len(self.values) + self.objects):
            return self
        triples = list(zip(self.rows, self.values, fitting, strict=True))
        odd = {
            row: text if text and isinstance(value, str) else _name(value)
            for row, value, fit in triples
            if not fit
        }
        return replace(
            self,
            rows=[row for row, _, fit in triples if fit],
            values=[value for _, value, fit in triples if fit],
            object_rows=[],
            odd=self.odd | odd | dict.fromkeys(self.object_rows, OBJECT),
        )

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
        return self.types == {str} and all(map(is_instant, self.values))

    @property
    def epochs(self) -> bool:
        """All values are numbers that read as epoch seconds or milliseconds of the years 2000 to 2100."""
        return all(map(is_epoch, self.values))


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


def is_instant(value: Any) -> bool:
    """Whether a value is an RFC 3339 text."""
    if not isinstance(value, str):
        return False
    try:
        epoch_ms(value)
    except ValueError:
        return False
    return True


def is_epoch(value: Any) -> bool:
    """Whether a value reads as epoch seconds or milliseconds of the years 2000 to 2100."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return False
    return 946_684_800 <= value / (1000 if value > 1e11 else 1) <= 4_102_444_800


def _likeness(value: Any) -> str:
    """What values of a field have in common: the kind, but one for all numbers."""
    name = _name(value)
    return "a number" if type(value) in (int, float) and name == kind_of(value) else name


def _name(value: Any) -> str:
    """What a value is: its kind, or what keeps it out of every field."""
    if isinstance(value, list) and any(kind_of(item) not in ITEM_KINDS for item in value):
        return "a list whose items are not all texts or whole numbers"
    if isinstance(value, float) and not (math.isfinite(value) and abs(value) <= MAX_QUANTITY):
        return "a number beyond 3.4e38"
    if isinstance(value, int) and abs(value) >= 1 << 63:
        return "a whole number of more than 64 bits"
    return kind_of(value)


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
            column.object_rows.append(row)
            _walk(columns, keys, value, row, messages)
        elif value is not None:
            column.values.append(value)
            column.rows.append(row)
