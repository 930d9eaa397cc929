"""Settings come in; which JSON values each dotted path may hold goes out."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from stream.errors import BadSettings
from stream.settings.models import Settings

__all__ = ["MAX_QUANTITY", "MAX_WEIGHT", "Use", "kind_of", "uses_of"]

MAX_QUANTITY = 3.4028234663852886e38
"""Largest float32 (IEEE 754 binary32): (2 - 2**-23) * 2**127."""
MAX_WEIGHT = 1e6
MAX_TIME = 1e15

TEXT, WHOLE, FRACTION = "text", "a whole number", "a number with a decimal point or exponent"
YES_NO, LIST = "true or false", "a list"
ITEM_KINDS = frozenset((TEXT, WHOLE))


@dataclass(frozen=True, slots=True)
class Use:
    """What a path may hold: kinds of JSON values, and the range of its numbers.

    `purpose` says what for; `reason` is the code of a reject where the value does not fit.
    """

    purpose: str
    kinds: frozenset[str]
    low: float = -math.inf
    high: float = math.inf
    reason: str = "wrong_type"

    def both(self, other: Use, path: str) -> Use:
        """What fits this use and the other; raises BadSettings where nothing does."""
        kinds = self.kinds & other.kinds
        if not kinds:
            raise BadSettings(
                f"path {path!r} is read as {self.purpose} and as {other.purpose}, and no JSON value is both; "
                f"leave one of them out"
            )
        low, high = max(self.low, other.low), min(self.high, other.high)
        if FRACTION not in kinds and not math.isinf(low):
            low, high = max(low, -(2**63)), min(high, 2**63 - 1)  # msgspec's limits of whole numbers
        reason = other.reason if self.reason == "wrong_type" else self.reason
        return Use(f"{self.purpose} and {other.purpose}", kinds, low, high, reason)

    def allowed(self) -> str:
        """The values that fit, in words."""
        if self.reason == "bad_label":
            return "true, false, 1 or 0; absent or null for no label"
        if self.reason == "bad_weight":
            return f"a number from 0 to {MAX_WEIGHT:,.0f}"
        if LIST in self.kinds:
            return "a list of texts and whole numbers"
        names = {TEXT: "RFC 3339 text" if self.reason == "bad_time" else "text", YES_NO: YES_NO}
        words = [names[kind] for kind in sorted(self.kinds) if kind in names]
        if self.kinds & {WHOLE, FRACTION}:
            words.append("a number" if FRACTION in self.kinds else "a whole number")
        return ", ".join(words)


BY_KIND = {
    "words": Use("words", frozenset((TEXT,))),
    "category": Use("a category", frozenset((TEXT, WHOLE, YES_NO))),
    "quantity": Use("a quantity", frozenset((WHOLE, FRACTION)), -MAX_QUANTITY, MAX_QUANTITY),
    "list": Use("a list", frozenset((LIST,))),
}
LABEL = Use("the label", frozenset((WHOLE, YES_NO)), 0, 1, "bad_label")
WEIGHT = Use("the weight", frozenset((WHOLE, FRACTION)), 0, MAX_WEIGHT, "bad_weight")
ID = Use("the id", frozenset((TEXT, WHOLE)))
TIME = Use("the time", frozenset((TEXT, WHOLE, FRACTION)), -MAX_TIME, MAX_TIME, "bad_time")


def uses_of(settings: Settings, ids: bool, times: bool, labels: bool) -> dict[str, Use]:
    """The paths to decode, in the order of the settings: fields, then label, weight, id, time.

    Raises BadSettings where two settings want one path to hold what no value can be.
    """
    message = settings.message
    wanted = [(field.path, BY_KIND[field.kind]) for field in settings.fields]
    for path, use, asked in (
        (message.label, LABEL, labels),
        (message.weight, WEIGHT, labels),
        (message.id, ID, ids),
        (message.time, TIME, times),
    ):
        if asked and path is not None:
            wanted.append((path, use))
    uses: dict[str, Use] = {}
    for path, use in wanted:
        uses[path] = use if path not in uses or uses[path] == use else uses[path].both(use, path)
    return uses


def kind_of(value: Any) -> str:
    """The kind of a decoded JSON value, in the words of `Use.kinds`."""
    if value is None:
        return "null"
    names = {str: TEXT, bool: YES_NO, int: WHOLE, float: FRACTION, list: LIST, dict: "an object"}
    return names[type(value)]
