"""Guessing the parts of a message: columns of a sample in, roles and field kinds with reasons out."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from stream.decoding.uses import MAX_QUANTITY, MAX_WEIGHT
from stream.runs.columns import Column
from stream.settings import MessagePaths

__all__ = ["FieldGuess", "Role", "guess_field", "guess_roles"]

ID_HINT = re.compile(r"(^|_)(id|uuid|guid|key)$")
TIME_HINT = re.compile(r"(^|_)(at|on|time|timestamp|ts|date|datetime|when|created)$|_(s|ms)$")
LABEL_HINT = re.compile(r"label|outcome|target|result|converted|success|fail|^is_|ed$")
WEIGHT_NAMES = {"example_weight", "sample_weight", "importance"}
CODE_HINT = re.compile(r"(^|_)(id|code|no|nr|number|zip|postcode|type|kind|class)$")

FEW_NUMBERS = 50
"""Whole numbers with no more different values than this are taken for codes, not amounts."""
NEARLY = 0.05
"""A path with 0 and 1 and no larger share of other values is told as a possible outcome."""
BAD_LABELS = MessagePaths().max_reject_share
"""Up to this share it can be the outcome: messages with other values are rejected, and the run goes on."""
FEW_MESSAGES = 20
"""Below this many messages, different values in each are no sign of an id."""


@dataclass(frozen=True, slots=True)
class Role:
    """A path for message.id, time, label or weight (None: none found), and a remark for the reader.

    `doubt`: what of the remark needs a look before anything is learned.
    """

    path: str | None
    remark: str
    doubt: str = ""


@dataclass(frozen=True, slots=True)
class FieldGuess:
    """A field as it would stand in the settings; `kind` None: cannot be one; not `active`: commented out."""

    path: str
    kind: str | None
    active: bool
    reason: str
    options: dict[str, Any] = field(default_factory=dict)


def guess_roles(columns: Sequence[Column]) -> dict[str, Role]:
    """Which paths look like id, time, label and weight."""
    usable = [column for column in columns if column.values and not _unfit(column)]
    roles = {"label": _label(usable, [column for column in columns if column.values and column.addressable])}
    roles["time"] = _time(usable)
    roles["id"] = _id(
        [column for column in usable if column.path not in (roles["label"].path, roles["time"].path)]
    )
    roles["weight"] = _weight(usable)
    return {name: roles[name] for name in ("id", "time", "label", "weight")}


def _id(columns: Sequence[Column]) -> Role:
    found = []
    for column in columns:
        if column.missing or column.distinct < column.messages or len(column.types) > 1:
            continue
        hinted = bool(ID_HINT.search(column.last))
        telling = column.types == {str} and column.messages >= FEW_MESSAGES
        if (hinted and column.types <= {str, int}) or (
            telling and not column.instants and not _is_prose(column)
        ):
            found.append((column.last != "id", not hinted, column.path.count("."), column.path))
    found.sort(key=lambda candidate: candidate[:3])
    return _role(
        [path for *_, path in found], "different in every message", "No path is different in every message."
    )


def _time(columns: Sequence[Column]) -> Role:
    found = []
    for column in columns:
        hinted = bool(TIME_HINT.search(column.last))
        if not column.missing and (column.instants or (column.epochs and hinted)):
            rising = sum(a <= b for a, b in zip(column.values, column.values[1:], strict=False))
            found.append((not hinted, -rising, column.path))
    found.sort(key=lambda candidate: candidate[:2])
    return _role(
        [path for *_, path in found], "a time in every message", "No path holds a time in every message."
    )


def _label(columns: Sequence[Column], all_columns: Sequence[Column]) -> Role:
    found = []
    for place, column in enumerate(columns):
        if column.types <= {bool, int} and set(column.counts) <= {0, 1}:
            hinted = bool(LABEL_HINT.search(column.last))
            both = column.distinct == 2
            if both or hinted:
                found.append((not both, -_evidence(column, column.types), 0, not hinted, -place, column.path))
    nearly = {}
    for place, column in enumerate(all_columns):
        types, odd = _nearly_yes_no(column)
        if odd:
            nearly[column.path] = f"but for {odd:,} of {len(column.values):,} values"
            if odd <= BAD_LABELS * column.messages and LABEL_HINT.search(column.last):
                found.append((False, -_evidence(column, types), 1, False, -place, column.path))
    found.sort()
    role = _label_role(columns, [path for *_, path in found])
    doubts = [
        f'"{path}" is true / false or 1 / 0 {but}'
        + (", which would be rejected." if path == role.path else "; it was not taken.")
        for path, but in list(nearly.items())[:5]
    ]
    return Role(role.path, " ".join([role.remark, *doubts]), " ".join(doubts))


def _evidence(column: Column, types: frozenset[type]) -> int:
    return 2 * bool(column.missing) + 2 * bool(LABEL_HINT.search(column.last)) + (types == {bool})


def _nearly_yes_no(column: Column) -> tuple[frozenset[type], int]:
    """Types of the values that an outcome may have, and how many others a path has that is nearly one."""
    fit = [value for value in column.values if isinstance(value, bool | int) and value in (0, 1)]
    odd = len(column.values) - len(fit) + column.objects
    nearly = 0 < odd <= NEARLY * len(column.values) and len(set(fit)) == 2
    return frozenset(map(type, fit)), odd if nearly else 0


def _label_role(columns: Sequence[Column], found: list[str]) -> Role:
    absent = "No path holds true / false or 1 / 0: messages would be scored, never learned."
    worded = [
        f'"{column.path}"'
        for column in columns
        if column.types == {str} and column.distinct == 2 and not column.constant
    ]
    if not found and worded:
        absent += f" Two texts stand in {', '.join(worded[:5])}; a label must be true, false, 1 or 0."
    return _role(found, "true / false or 1 / 0", absent)


def _weight(columns: Sequence[Column]) -> Role:
    numbers = [
        c for c in columns if c.types <= {int, float} and min(c.values) >= 0 and max(c.values) <= MAX_WEIGHT
    ]
    found = [c.path for c in numbers if c.last in WEIGHT_NAMES]
    similar = [f'"{c.path}"' for c in numbers if c.last == "weight"]
    absent = "No path is named like an example weight."
    if similar:
        absent = f"{similar[0]} was taken for a property of the message, not for an example weight."
    return _role(found, "numbers, none negative", absent)


def _role(paths: list[str], why: str, absent: str) -> Role:
    if not paths:
        return Role(None, absent)
    remark = f"Guess: {why}."
    if len(paths) > 1:
        others = [f'"{path}"' for path in paths[1:6]] + ["..."] * (len(paths) > 6)
        remark += f" Other candidates: {', '.join(others)}; check which one it is."
    return Role(paths[0], remark)


def guess_field(column: Column, label: Column | None) -> FieldGuess | None:
    """The field that `column` would make; None where it only holds objects."""
    if column.objects and not column.values:
        return None
    unfit = _unfit(column)
    if unfit or not column.values:
        return FieldGuess(column.path, None, False, unfit or "null in every message of the sample")
    kind, reason, options = _kind(column)
    if kind is None:
        return FieldGuess(column.path, None, False, reason)
    against = _not_worth_it(column, kind, label)
    return FieldGuess(column.path, kind, not against, against or reason, options)


def _unfit(column: Column) -> str:
    """Why a path cannot be read as a field at all."""
    if not column.addressable:
        return (
            "no dotted path leads there: a key is empty, or has a dot, quote, backslash or control character"
        )
    above = column.parent
    while above is not None:
        if above.values:
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
        if not few and not column.instants and _is_prose(column):
            return "words", f"free text, {_mean_length(column):.0f} characters on average", {}
        return "category", count, {}
    if not column.types <= {int, float}:
        return "category", count, {}
    codes = column.distinct <= FEW_NUMBERS or bool(CODE_HINT.search(column.last))
    if column.types == {int} and codes:
        return "category", f"whole numbers, {count}", {}
    low, high = min(column.values), max(column.values)
    return "quantity", f"numbers from {low:g} to {high:g}", {"bins": _deciles(column.values)}


def _is_prose(column: Column) -> bool:
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
