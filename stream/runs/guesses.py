"""Guessing the fields of a message: a column of a sample in, the kind of field with the reason out."""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Any

from stream.decoding.uses import BY_KIND, MAX_QUANTITY, Use
from stream.runs.columns import Column

__all__ = ["TIME_HINT", "FieldGuess", "guess_field", "is_prose", "only_in_rejects", "rejects", "unfit"]

TIME_HINT = re.compile(r"(^|_)(at|on|time|timestamp|ts|date|datetime|when|created)$|_(s|ms)$")
CODE_HINT = re.compile(r"(^|_)(id|code|no|nr|number|zip|postcode|type|kind|class)$")

FEW_NUMBERS = 50
"""Whole numbers with no more different values than this are taken for codes, not amounts."""
OBJECTS = Use("a path into objects", frozenset(("an object",)))


@dataclass(frozen=True, slots=True)
class FieldGuess:
    """A field as it would stand in the settings; `kind` None: cannot be one; not `active`: commented out.

    `doubt`: what needs a look before anything is learned. `rejected`: rows of the sample that would be
    rejected for this path.
    """

    path: str
    kind: str | None
    active: bool
    reason: str
    options: dict[str, Any] = field(default_factory=dict)
    doubt: str = ""
    rejected: frozenset[int] = frozenset()


def rejects(column: Column, use: Use, fate: str = "will be rejected") -> tuple[str, frozenset[int]]:
    """What to say of the odd values that `use` does not take, and their rows; `fate`: what they meet."""
    odd = {row: name for row, name in column.odd.items() if name not in use.kinds}
    if not odd:
        return "", frozenset()
    count = len(column.values) + column.objects + len(column.odd)
    names = [
        f"{name} ({number:,})" if len(odd) > number else name
        for name, number in Counter(odd.values()).most_common(3)
    ]
    are, they = ("is", "it") if len(odd) == 1 else ("are each", "they")
    what = f"{len(odd):,} of {count:,} values {are} {' or '.join(names)}"
    text = f'"{column.path}": {what}; {they} {fate}.'
    return text, frozenset(odd)


def guess_field(column: Column, label: Column | None) -> FieldGuess | None:
    """The field that `column` would make; None where it only holds objects.

    Values of another kind than nearly all do not decide, unless the field takes them as well.
    """
    plain = _guess_field(column, label)
    if column.usual is column:
        return plain
    usual = _guess_field(column.usual, label)
    if usual is None:
        doubt, rows = rejects(column.usual, OBJECTS)
        return FieldGuess(column.path, None, False, f"an object. {doubt}", {}, doubt, rows)
    if plain is not None and (plain.kind == usual.kind or (plain.active and not usual.active)):
        return plain
    if usual.kind is None:
        return usual
    doubt, rows = rejects(column.usual, BY_KIND[usual.kind])
    return replace(usual, reason=f"{usual.reason}. {doubt}".rstrip(". "), doubt=doubt, rejected=rows)


def only_in_rejects(
    guesses: Sequence[FieldGuess], columns: Sequence[Column], rejected: frozenset[int]
) -> list[FieldGuess]:
    """The guesses, but left out where no message has the path that would not be rejected for another one.

    Such a path comes with an error of the feed, and a run would warn that it never meets it.
    """
    rows = {one.path: {*one.rows, *one.object_rows} for one in columns if one.addressable}
    reason = "is there only in messages that will be rejected"
    return [
        replace(guess, active=False, reason=reason, doubt="", rejected=frozenset())
        if guess.active and rows[guess.path] <= rejected
        else guess
        for guess in guesses
    ]


def _guess_field(column: Column, label: Column | None) -> FieldGuess | None:
    if column.objects and not column.values:
        return None
    why_not = unfit(column)
    if why_not or not column.values:
        return FieldGuess(column.path, None, False, why_not or "null in every message of the sample")
    kind, reason, options = _kind(column)
    if kind is None:
        return FieldGuess(column.path, None, False, reason)
    against = _not_worth_it(column, kind, label)
    return FieldGuess(column.path, kind, not against, against or reason, options)


def unfit(column: Column) -> str:
    """Why a path cannot be read as a field at all."""
    if not column.addressable:
        return (
            "no dotted path leads there: a key is empty, or has a dot, quote, backslash or control character"
        )
    above = column.parent
    while above is not None:
        if above.usual.values:
            return f'"{above.path}" is an object in some messages and none in others'
        above = above.parent
    if column.objects and column.values:
        return "an object in some messages and none in others"
    if list in column.types and len(column.types) > 1:
        return "a list in some messages and none in others"
    if list in column.types:
        items = {type(item) for values in column.values for item in values}
        return "" if items <= {str, int} else "a list whose items are not all texts or whole numbers"
    if float in column.types and not column.types <= {int, float}:
        return "numbers with a fraction in some messages and no numbers in others"
    if any(not math.isfinite(v) or abs(v) > MAX_QUANTITY for v in column.values if isinstance(v, float)):
        return "numbers beyond 3.4e38"
    if any(abs(v) >= 1 << 63 for v in column.values if isinstance(v, int)):
        return "whole numbers of more than 64 bits; write them as texts"
    return ""


def _kind(column: Column) -> tuple[str | None, str, dict[str, Any]]:
    count = f"{column.distinct:,} different value{'s' * (column.distinct != 1)}"
    if column.types == {list}:
        if not column.counts:
            return None, "an empty list in every message of the sample", {}
        return "list", f"lists of {column.distinct:,} different items", {}
    if column.types == {str}:
        few = column.distinct <= 50 and column.distinct * 10 <= len(column.values)
        if not few and not column.instants and is_prose(column):
            return "words", f"free text, {_mean_length(column):.0f} characters on average", {}
        return "category", count, {}
    if not column.types <= {int, float}:
        return "category", count, {}
    codes = column.distinct <= FEW_NUMBERS or bool(CODE_HINT.search(column.last))
    if column.types == {int} and codes:
        return "category", f"whole numbers, {count}", {}
    low, high = min(column.values), max(column.values)
    return "quantity", f"numbers from {low:g} to {high:g}", {"bins": _deciles(column.values)}


def is_prose(column: Column) -> bool:
    """Whether texts look like sentences rather than codes."""
    long = sum(len(value.split()) >= 3 for value in column.values)
    unspaced = sum(sum(ord(c) >= 0x2E80 for c in value) >= 6 for value in column.values)
    several = column.nearly_unique and column.mostly_texts_with_spaces
    return 10 * (long + unspaced) >= 3 * len(column.values) or several


def _mean_length(column: Column) -> float:
    return sum(map(len, column.values)) / len(column.values)


def _deciles(values: Sequence[float]) -> list[float]:
    """Edges near the deciles, to two digits: as many messages in each bin, whatever the unit."""
    ordered = sorted(values)
    cuts = {float(f"{ordered[len(ordered) * tenth // 10]:.2g}") + 0.0 for tenth in range(1, 10)}
    return sorted(cuts)


def _not_worth_it(column: Column, kind: str, label: Column | None) -> str:
    """Why a field that could be read is better left out, or nothing."""
    if label is not None and label.missing >= 5 and column.rows == label.rows:
        return f'is there only where "{label.path}" is: it seems to come with the outcome'
    if column.constant:
        return "the same in every message: the intercept says as much"
    if column.instants or (column.epochs and TIME_HINT.search(column.last)):
        return "a time: its values do not come back"
    if kind in ("category", "list") and column.nearly_unique:
        return (
            f"{column.distinct:,} different values in {len(column.values):,} messages: most tokens would be "
            "seen once, learn nothing and fill memory"
        )
    return ""
