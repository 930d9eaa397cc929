"""Guessing the parts of a message: columns of a sample in, paths of id, time, label and weight out."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

from stream.decoding.uses import ID, MAX_WEIGHT, TIME, WEIGHT, Use
from stream.runs.columns import NEARLY_ALL, Column, is_epoch, is_instant
from stream.runs.guesses import TIME_HINT, is_prose, rejects, unfit
from stream.settings import MessagePaths

__all__ = ["Role", "guess_roles"]

ID_HINT = re.compile(r"(^|_)(id|uuid|guid|key)$")
LABEL_HINT = re.compile(r"label|outcome|target|result|converted|success|fail|^is_|ed$")
WEIGHT_NAMES = {"example_weight", "sample_weight", "importance"}

NEARLY = 0.05
"""A path with 0 and 1 and no larger share of other values is told as a possible outcome."""
BAD_LABELS = MessagePaths().max_reject_share
"""Up to this share it can be the outcome: messages with other values are rejected, and the run goes on."""
FEW_MESSAGES = 20
"""Below this many messages, different values in each are no sign of an id."""
NO_TIME = "a text that is no RFC 3339 time"
BAD_ID = "will be learned, and rejected by `bedload score`"
BAD_TIME = "will be learned, but `bedload tune` is told no time by it"
ODD_TIME = replace(TIME, kinds=TIME.kinds - {"text"})  # any number is a time; an odd text is not


@dataclass(frozen=True, slots=True)
class Role:
    """A path for message.id, time, label or weight (None: none found), and a remark for the reader.

    `doubt`: what of the remark needs a look before anything is learned. `rejected`: messages of the sample
    that would be rejected for this path.
    """

    path: str | None
    remark: str
    doubt: str = ""
    rejected: frozenset[int] = frozenset()


def guess_roles(columns: Sequence[Column]) -> dict[str, Role]:
    """Which paths look like id, time, label and weight."""
    there = [column for column in columns if column.values]
    label = _label(
        [column for column in there if not unfit(column)], [column for column in there if column.addressable]
    )
    usual = [column.usual for column in there]
    usable = [column for column in usual if column.values and not unfit(column)]
    time = _time(there)
    others = [column for column in usable if column.path not in (label.path, time.path)]
    return {"id": _id(others), "time": time, "label": label, "weight": _weight(usable)}


def _id(columns: Sequence[Column]) -> Role:
    found = []
    for column in columns:
        if len(column.types) > 1 or not column.types <= {str, int}:
            continue
        absent = column.missing - len(column.odd)
        repeats = len(column.values) - column.distinct
        hinted = bool(ID_HINT.search(column.last))
        telling = column.types == {str} and column.messages >= FEW_MESSAGES and not absent + repeats
        if absent + repeats > (1 - NEARLY_ALL) * column.messages:
            continue
        if hinted or (telling and not column.instants and not is_prose(column)):
            flaws = _flaws(column.messages, absent, repeats)
            order = (column.last != "id", bool(flaws), not hinted, column.path.count("."))
            found.append((order, column, flaws))
    found.sort(key=lambda candidate: candidate[0])
    role = _role(
        [column.path for _, column, _ in found],
        f"different in every message{found[0][2]}" if found else "",
        "No path is different in every message.",
    )
    return _with_doubt(role, found[0][1], ID, BAD_ID) if found else role


def _time(columns: Sequence[Column]) -> Role:
    found = []
    for column in columns:
        hinted = bool(TIME_HINT.search(column.last))
        if not hinted and column.usual.types != {str}:
            continue
        column = column.only(is_instant if column.usual.types == {str} else is_epoch, NO_TIME)
        if unfit(column) or not (column.instants or column.epochs):
            continue
        absent = column.missing - len(column.odd)
        if absent <= (1 - NEARLY_ALL) * column.messages:
            rising = sum(a <= b for a, b in zip(column.values, column.values[1:], strict=False))
            found.append(((not hinted, -rising, column.path), column, _flaws(column.messages, absent, 0)))
    found.sort(key=lambda candidate: candidate[0])
    role = _role(
        [column.path for _, column, _ in found],
        f"a time in every message{found[0][2]}" if found else "",
        "No path holds a time in every message.",
    )
    return _with_doubt(role, found[0][1], ODD_TIME, BAD_TIME) if found else role


def _flaws(messages: int, absent: int, repeats: int) -> str:
    told = [f"{absent:,} of {messages:,} that have none"] if absent else []
    told += [f"{repeats:,} that repeat{'s' * (repeats == 1)} another's"] if repeats else []
    return f" but {' and '.join(told)}" if told else ""


def _with_doubt(role: Role, column: Column, use: Use, fate: str) -> Role:
    doubt, _ = rejects(column, use, fate)
    return replace(role, remark=" ".join(filter(None, [role.remark, doubt])), doubt=doubt)


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
    rejected = {row for column in all_columns if column.path == role.path for row in _no_label_rows(column)}
    return Role(role.path, " ".join([role.remark, *doubts]), " ".join(doubts), frozenset(rejected))


def _no_label_rows(column: Column) -> list[int]:
    pairs = zip(column.rows, column.values, strict=True)
    return [row for row, value in pairs if not _is_label(value)] + column.object_rows


def _is_label(value: Any) -> bool:
    return isinstance(value, bool | int) and value in (0, 1)


def _evidence(column: Column, types: frozenset[type]) -> int:
    return 2 * bool(column.missing) + 2 * bool(LABEL_HINT.search(column.last)) + (types == {bool})


def _nearly_yes_no(column: Column) -> tuple[frozenset[type], int]:
    """Types of the values that an outcome may have, and how many others a path has that is nearly one."""
    fit = [value for value in column.values if _is_label(value)]
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
    found = [c for c in numbers if c.last in WEIGHT_NAMES]
    similar = [f'"{c.path}"' for c in numbers if c.last == "weight"]
    absent = "No path is named like an example weight."
    if similar:
        absent = f"{similar[0]} was taken for a property of the message, not for an example weight."
    role = _role([c.path for c in found], "numbers, none negative", absent)
    if not found:
        return role
    doubt, rows = rejects(found[0], WEIGHT)
    return replace(role, remark=" ".join(filter(None, [role.remark, doubt])), doubt=doubt, rejected=rows)


def _role(paths: list[str], why: str, absent: str) -> Role:
    if not paths:
        return Role(None, absent)
    remark = f"Guess: {why}."
    if len(paths) > 1:
        others = [f'"{path}"' for path in paths[1:6]] + ["..."] * (len(paths) > 6)
        remark += f" Other candidates: {', '.join(others)}; check which one it is."
    return Role(paths[0], remark)
