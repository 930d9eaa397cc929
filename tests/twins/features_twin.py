"""A decoded message and settings come in; its row goes out, worked out slowly and plainly.

Written from docs/addresses.md with the standard library's Unicode and with mmh3, knowing nothing of the
compiled path. Where Python's Unicode is not 14.0.0, only the class of a character is read from the tables;
folding and composition of characters that Unicode 14 knows never change in later versions.
"""

from __future__ import annotations

import itertools
import math
import unicodedata
from collections.abc import Callable
from typing import Any

import mmh3
import numpy as np

from stream.features import unicode_tables
from stream.settings.models import Category, FieldSettings, ListOf, Quantity, Settings, Words

Row = list[tuple[bytes, int, np.float32]]
"""Text key, address, value of each entry."""

LARGEST = 3.4e38
SAME_UNICODE = unicodedata.unidata_version == "14.0.0"


class Rejected(Exception):
    """The message cannot be used; `reason` is the code."""

    def __init__(self, reason: str) -> None:
        super().__init__(reason)
        self.reason = reason


# ---- characters --------------------------------------------------------------------------------------------


def kind(letter: str) -> str:
    """separator, word, wide or mark."""
    if SAME_UNICODE:
        return kind_by_name(letter)
    tables = unicode_tables.load()
    place = int(tables.page[ord(letter) >> 8]) * 256 + (ord(letter) & 255)
    return ["separator", "word", "wide", "mark"][int(tables.kind[place])]


def kind_by_name(letter: str) -> str:
    """The same from the character's name and category."""
    point, major, name = ord(letter), unicodedata.category(letter)[0], unicodedata.name(letter, "")
    if 0x20000 <= point <= 0x3FFFD:
        return "wide"
    if major == "M":
        return "mark"
    if major not in "LN":
        return "separator"
    if name.startswith(("CJK UNIFIED IDEOGRAPH-", "CJK COMPATIBILITY IDEOGRAPH-", "BOPOMOFO ")):
        return "wide"
    for first, last in [(0x3005, 0x3007), (0x3021, 0x3029), (0x3038, 0x303B)]:
        if first <= point <= last:
            return "wide"
    if ("KATAKANA" in name or "HIRAGANA" in name) and point <= 0xFF9D:
        return "wide"
    return "word"


def nfc(text: str) -> str:
    """Normalization Form C."""
    return unicodedata.normalize("NFC", text)


def fold(text: str) -> str:
    """Full case folding, then NFC."""
    return nfc(text.casefold())


# ---- tokens ------------------------------------------------------------------------------------------------


def runs(text: str) -> list[tuple[str, list[str]]]:
    """The runs of a text: class, and its characters, each folded with the marks that follow it."""
    found: list[tuple[str, list[str]]] = []
    running = "separator"
    for letter in text:
        now = kind(letter)
        if now == "mark" and running != "separator":
            characters = found[-1][1]
            composed = nfc(characters[-1][-1] + letter)
            if len(composed) == 1:
                characters[-1] = characters[-1][:-1] + fold(composed)
            else:
                characters[-1] += fold(letter)
        elif now in ("word", "wide"):
            if now != running:
                found.append((now, []))
            found[-1][1].append(fold(letter))
            running = now
        else:
            running = "separator"
    return found


def cut(text: str) -> list[str]:
    """The words of a text and the neighbouring pairs of its wide runs, in order, with repeats."""
    tokens = []
    for which, characters in runs(text):
        if which == "word" or len(characters) == 1:
            tokens.append("".join(characters))
        else:
            tokens += [a + b for a, b in itertools.pairwise(characters)]
    return tokens


def words(text: str, pairs: bool = False, drop: tuple[str, ...] = ()) -> list[str]:
    """Tokens of a words field."""
    dropped = {token for word in drop for token in cut(word)}
    kept = [token for token in cut(text) if token not in dropped]
    if not pairs:
        return kept
    tokens = kept[:1]
    for a, b in itertools.pairwise(kept):
        tokens += [b, a + " " + b]
    return tokens


def item(value: Any, yes_no: bool) -> str:
    """Token of a category, or of one item of a list; empty for none."""
    if isinstance(value, bool):
        if not yes_no:
            raise Rejected("wrong_type")
        return "true" if value else "false"
    if isinstance(value, int):
        return str(value)
    if isinstance(value, str):
        return value.replace("\x1b", "\x1b\x1b").replace("\x1f", "\x1b_")
    raise Rejected("wrong_type")


def number(value: Any) -> float:
    """A quantity as float64."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise Rejected("wrong_type")
    if not abs(value) <= LARGEST:
        raise Rejected("out_of_range")
    return float(value)


def edge_text(edge: float) -> str:
    """5.0 is 5, 0.5 is 0.5."""
    return repr(edge).removesuffix(".0")


def bin_text(x: float, edges: tuple[float, ...]) -> str:
    """The bin that x falls in."""
    below = [edge for edge in edges if edge <= x]
    above = [edge for edge in edges if edge > x]
    return (edge_text(below[-1]) if below else "") + ".." + (edge_text(above[0]) if above else "")


def plain_value(field: Quantity, x: float) -> np.float32:
    """Value of a quantity without bins."""
    if field.scale == "logarithmic":
        return np.float32(math.copysign(math.log1p(abs(x)), x))
    return np.float32(x)


def occurrences(field: FieldSettings, value: Any) -> list[str]:
    """Tokens of a field as often as they occur, escaped."""
    if value is None:
        return []
    if isinstance(field, Category):
        return [token for token in [item(value, yes_no=True)] if token]
    if isinstance(field, ListOf):
        if not isinstance(value, list):
            raise Rejected("wrong_type")
        return [token for token in [item(each, yes_no=False) for each in value] if token]
    if isinstance(field, Quantity):
        x = number(value)
        if field.bins:
            return [bin_text(x, field.bins)]
        return [""] if plain_value(field, x) != 0 else []
    if not isinstance(value, str):
        raise Rejected("wrong_type")
    return words(value, field.pairs, field.drop)


def token_value(field: FieldSettings, value: Any, count: int) -> np.float32:
    """Value of a token that occurs `count` times in its field."""
    if isinstance(field, Quantity) and not field.bins:
        return plain_value(field, number(value))
    if isinstance(field, Words | ListOf) and field.value == "count":
        return np.float32(count)
    if isinstance(field, Words | ListOf) and field.value == "log_count":
        return np.float32(math.log1p(count))
    return np.float32(1)


# ---- rows --------------------------------------------------------------------------------------------------


def key(name: str, token: str) -> bytes:
    """What is hashed."""
    return f"{name}\x1f{token}".encode()


def address(text: bytes, seed: int, address_bits: int) -> int:
    """Place in the weight space."""
    first, _ = mmh3.hash64(text, seed, x64arch=True, signed=False)
    return first >> (64 - address_bits)


def pick(message: dict[str, Any], path: str) -> Any:
    """The value at a dotted path, None where there is none."""
    value: Any = message
    for step in path.split("."):
        value = value.get(step) if isinstance(value, dict) else None
    return value


def row(message: dict[str, Any], settings: Settings) -> Row:
    """Entries of one message in order. Raises Rejected."""

    def place(name: str, token: str) -> int:
        return address(key(name, token), settings.space.seed, settings.space.address_bits)

    values = {field.name: pick(message, field.path) for field in settings.fields}
    made = {field.name: occurrences(field, values[field.name]) for field in settings.fields}
    distinct = {name: distinct_by(place, name, tokens) for name, tokens in made.items()}
    crossed = [[distinct[name] for name in cross.paths] for cross in settings.crosses]
    total = sum(len(tokens) for tokens in made.values())
    total += sum(math.prod(len(tokens) for tokens in sides) for sides in crossed)
    if total > settings.message.max_tokens:
        raise Rejected("too_many_tokens")

    entries: Row = []
    for field in settings.fields:
        name = field.name
        for token, count in distinct[name].items():
            value = token_value(field, values[name], count)
            entries.append((key(name, token), place(name, token), value))
    for cross, sides in zip(settings.crosses, crossed, strict=True):
        name = "&".join(cross.paths)
        combined = ["\x1f".join(tokens) for tokens in itertools.product(*sides)]
        for token in distinct_by(place, name, combined):
            entries.append((key(name, token), place(name, token), np.float32(1)))
    merged = merge(entries)
    return unit_length(merged) if settings.space.unit_length else merged


def distinct_by(place: Callable[[str, str], int], name: str, tokens: list[str]) -> dict[str, int]:
    """Counts of tokens in order of first appearance; those with one address are one, under the first text."""
    texts: dict[int, str] = {}
    counts: dict[str, int] = {}
    for token in tokens:
        text = texts.setdefault(place(name, token), token)
        counts[text] = counts.get(text, 0) + 1
    return counts


def merge(entries: Row) -> Row:
    """Entries with one address as one, their values added."""
    places: dict[int, tuple[bytes, np.float32]] = {}
    for text, where, value in entries:
        if where in places:
            first, before = places[where]
            places[where] = (first, np.float32(before + value))
        else:
            places[where] = (text, value)
    return [(text, where, value) for where, (text, value) in places.items()]


def unit_length(entries: Row) -> Row:
    """Values divided by the row's Euclidean length."""
    squares = 0.0
    for _, _, value in entries:
        squares += float(value) * float(value)
    length = math.sqrt(squares)
    if length == 0:
        return entries
    return [(text, where, np.float32(float(value) / length)) for text, where, value in entries]
