"""A line that could not be decoded comes in; the reason code and the words for a person go out.

Details name the path, the kind of value found and what is allowed, never the value: it may be personal.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Mapping
from typing import Any

import numpy as np

from stream.decoding.uses import ITEM_KINDS, Use, kind_of

__all__ = ["MAX_DEPTH", "REASONS", "is_too_deep", "why_not"]

REASONS = (
    "bad_json",
    "bad_label",
    "bad_time",
    "bad_utf8",
    "bad_weight",
    "line_too_long",
    "not_an_object",
    "not_finite",
    "wrong_type",
)
"""Codes of rejects that decoding makes. The batcher adds too_many_tokens."""

MAX_DEPTH = 100
"""Objects and lists inside one another. Python's own limit would depend on who calls and on its version."""

STRING = re.compile(rb'"(?:[^"\\]|\\.)*+"?', re.DOTALL)  # one that is not closed ends with the line
HALF_PAIR = re.compile(rb"\\u[dD][89a-fA-F]")
MAX_DIGITS = 4_300  # of a whole number, for msgspec as for Python's int()
TOO_MANY_DIGITS = 10**MAX_DIGITS


def is_too_deep(line: bytes) -> bool:
    """Whether objects and lists are nested more than MAX_DEPTH deep."""
    data = np.frombuffer(STRING.sub(b"", line), np.uint8) & 0xDF  # [ and {, ] and } differ in this bit
    depths = np.cumsum((data == ord("[")).astype(np.int64) - (data == ord("]")))
    return bool(depths.max(initial=0) > MAX_DEPTH)


def why_not(line: bytes, uses: Mapping[str, Use], error: Exception) -> tuple[str, str]:
    """Reason and detail for a line, valid UTF-8 and not too deep, that failed to decode with `error`."""
    constants: list[str] = []
    try:
        value = json.loads(line.decode(), parse_int=_whole_number, parse_constant=constants.append)
    except ValueError:
        return "bad_json", f"not JSON: {error}"
    if constants:
        return "not_finite", f"{constants[0]} is no JSON number; leave the field out instead"
    if not isinstance(value, dict):
        return "not_an_object", f"the line is {kind_of(value)}; a message is one JSON object"
    for path, use in uses.items():
        found = _complaint(value, path, use)
        if found is not None:
            return found
    if HALF_PAIR.search(line):
        return "bad_utf8", "a \\u escape is half of a surrogate pair, which is no character"
    return "wrong_type", f"a field that stands twice does not fit: {error}"


def _complaint(message: Any, path: str, use: Use) -> tuple[str, str] | None:
    """What is wrong at one path, if anything."""
    value, keys = message, path.split(".")
    for depth, key in enumerate(keys):
        if value is None:
            return None
        if not isinstance(value, dict):
            there = ".".join(keys[:depth])
            return "wrong_type", f"{there} is {kind_of(value)}; allowed: an object, as {path} is read"
        value = value.get(key)
    if value is None:
        return None
    if kind_of(value) not in use.kinds:
        return use.reason, f"{path} is {kind_of(value)}; allowed: {use.allowed()}"
    if isinstance(value, list):
        return _item_complaint(value, path, use)
    if isinstance(value, int | float):
        return _number_complaint(value, path, use)
    return None


def _number_complaint(value: float, path: str, use: Use) -> tuple[str, str] | None:
    if not use.low <= value <= use.high:
        if use.reason == "wrong_type" or value in (math.inf, -math.inf):
            return "not_finite", f"{path} is a number too large; allowed: at most {use.high:.8g} in size"
        return use.reason, f"{path} is a number out of range; allowed: {use.allowed()}"
    if abs(value) >= TOO_MANY_DIGITS:
        return use.reason, f"{path} is a whole number of more than {MAX_DIGITS:,} digits"
    return None


def _item_complaint(items: list[Any], path: str, use: Use) -> tuple[str, str] | None:
    for at, item in enumerate(items):
        if kind_of(item) not in ITEM_KINDS:
            return use.reason, f"{path} has {kind_of(item)} as item {at + 1}; allowed: {use.allowed()}"
        if isinstance(item, int) and abs(item) >= TOO_MANY_DIGITS:
            return use.reason, f"{path} has more than {MAX_DIGITS:,} digits in item {at + 1}"
    return None


def _whole_number(digits: str) -> int:
    return int(digits) if len(digits.lstrip("-")) <= MAX_DIGITS else TOO_MANY_DIGITS
