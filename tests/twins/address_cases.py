"""Cases with rows worked out by hand come in; tests/vectors/addresses.json goes out, addresses by the twin.

    python -m tests.twins.address_cases          writes the vectors anew

Texts and values below were written by hand from docs/addresses.md; writing fails where the twin disagrees.
"""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from stream.settings.models import Settings
from tests.twins.features_twin import Rejected, row

__all__ = ["CASES", "VECTORS", "Case", "document"]

VECTORS = Path(__file__).parents[1] / "vectors" / "addresses.json"
SEP = "\x1f"
LN2, LN3 = 0.6931472, 1.0986123

JSON = dict[str, Any]


@dataclass(frozen=True)
class Case:
    """What it shows, settings and message, and the row as {text: value}, or the reason of the refusal."""

    what: str
    settings: JSON
    message: JSON
    row: dict[str, float] | str = field(default_factory=dict)


def one(kind: str, name: str, value: Any, /, **options: Any) -> tuple[JSON, JSON]:
    """Settings with one field, and a message with its value."""
    return {"fields": [{"path": name, "kind": kind, **options}]}, {name: value}


def each(name: str, *tokens: str, **values: float) -> dict[str, float]:
    """Row of one field: tokens of value 1."""
    return {name + SEP + token: 1.0 for token in tokens}


def category(what: str, value: Any, *tokens: str) -> Case:
    """A category field `route`."""
    return Case(what, *one("category", "route", value), each("route", *tokens))


def quantity(what: str, value: Any, row: float | str | None, **options: Any) -> Case:
    """A quantity field `grams`: its value, or its bin, or no token."""
    settings, message = one("quantity", "grams", value, **options)
    if row is None:
        return Case(what, settings, message)
    return Case(what, settings, message, each("grams", row) if isinstance(row, str) else {"grams" + SEP: row})


def note(what: str, value: Any, *tokens: str, **options: Any) -> Case:
    """A words field `note` by presence."""
    return Case(what, *one("words", "note", value, **options), each("note", *tokens))


def counted(what: str, value: Any, counts: dict[str, float], kind: str = "words", how: str = "count") -> Case:
    """A words or list field `note` by count."""
    settings, message = one(kind, "note", value, value=how)
    return Case(what, settings, message, {"note" + SEP + token: count for token, count in counts.items()})


def placed(what: str, bits: int, seed: int) -> Case:
    """The same token at another width and seed."""
    settings, message = one("category", "route", "NW")
    space = {"address_bits": bits, "seed": seed}
    return Case(what, {**settings, "space": space}, message, each("route", "NW"))


EDGES = [0.5, 5.0, 10.0]
FIELDS = {
    "note": {"path": "note", "kind": "words"},
    "route": {"path": "route", "kind": "category"},
    "hour": {"path": "hour", "kind": "quantity", "bins": [9, 17]},
    "tags": {"path": "tags", "kind": "list", "value": "count"},
}


def several(*names: str, crosses: list[list[str]] | None = None, **sections: JSON) -> JSON:
    """Settings with some of FIELDS and crosses of them."""
    crossed = {"crosses": [{"paths": paths} for paths in crosses]} if crosses else {}
    return {"fields": [FIELDS[name] for name in names], **crossed, **sections}


CATEGORIES = [
    category("category: a text as it is, case and accents kept", "North É", "North É"),
    category("category: another text when its accent is decomposed", "North E\u0301", "North E\u0301"),
    category("category: spaces and punctuation are part of it", " N-W / 7 ", " N-W / 7 "),
    category("category: a whole number in decimal", -12, "-12"),
    category("category: the largest 64-bit whole number", 2**63 - 1, "9223372036854775807"),
    category("category: true", True, "true"),
    category("category: false", False, "false"),
    category("category: an empty text makes no token", ""),
    category("category: null makes no token", None),
    Case("category: a missing field makes no token", several("route"), {"other": 1}),
    category("escape: 0x1F becomes 0x1B 0x5F", "a\x1fb", "a\x1b_b"),
    category("escape: 0x1B is doubled", "a\x1bb", "a\x1b\x1bb"),
    category("escape: text that looks escaped stays apart", "a\x1b_b", "a\x1b\x1b_b"),
    Case("category: a number with a fraction is refused", *one("category", "route", 1.5), "wrong_type"),
    Case("category: a list is refused", *one("category", "route", ["NW"]), "wrong_type"),
    Case(
        "name: stands in the text instead of the path; paths lead inwards",
        {"fields": [{"path": "sender.code", "kind": "category", "name": "sender"}]},
        {"sender": {"code": "K7"}},
        each("sender", "K7"),
    ),
    Case(
        "name: UTF-8 too",
        {"fields": [{"path": "stra\u00dfe", "kind": "category"}]},
        {"stra\u00dfe": "7"},
        each("stra\u00dfe", "7"),
    ),
]

QUANTITIES = [
    quantity("quantity, plain: the value is the number", 2.5, 2.5),
    quantity("quantity, plain: whole and negative", -3, -3.0),
    quantity("quantity, plain: rounded to float32", 16777217, 16777216.0),
    quantity("quantity, plain: 0 makes no token", 0, None),
    quantity("quantity, plain: -0.0 makes no token", -0.0, None),
    quantity("quantity, plain: what rounds to 0 makes no token", 1e-50, None),
    quantity("quantity, plain: the largest size allowed", -3.4e38, -3.4e38),
    quantity("quantity, logarithmic: ln(1 + x)", 1, LN2, scale="logarithmic"),
    quantity("quantity, logarithmic: the sign is kept", -2.0, -LN3, scale="logarithmic"),
    quantity("quantity, logarithmic: 0 makes no token", 0.0, None, scale="logarithmic"),
    quantity("quantity, bins: below the first edge", 0.49999999999999994, "..0.5", bins=EDGES),
    quantity("quantity, bins: on an edge belongs to the bin above", 0.5, "0.5..5", bins=EDGES),
    quantity("quantity, bins: 0 has a bin", 0, "..0.5", bins=EDGES),
    quantity("quantity, bins: just below an edge", 4.999999999999999, "0.5..5", bins=EDGES),
    quantity("quantity, bins: a whole number on an edge", 5, "5..10", bins=EDGES),
    quantity("quantity, bins: on the last edge", 10.0, "10..", bins=EDGES),
    quantity("quantity, bins: far above", 1e30, "10..", bins=EDGES),
    quantity("quantity, bins: one edge, below", -1, "..0", bins=[0.0]),
    quantity("quantity, bins: one edge, on it, with a minus", -0.0, "0..", bins=[0.0]),
    quantity("quantity, bins: negative and large edges", 7, "-1.5..1e+16", bins=[-1.5, 1e16]),
    quantity("quantity, bins: shortest text of an edge", 0.25, "0.1..0.3333333333333333", bins=[0.1, 1 / 3]),
    quantity("quantity: null makes no token", None, None),
    Case("quantity: a text is refused", *one("quantity", "grams", "12"), "wrong_type"),
    Case("quantity: true is refused", *one("quantity", "grams", True), "wrong_type"),
    Case("quantity: beyond 3.4e38 is refused", *one("quantity", "grams", 3.41e38), "out_of_range"),
]

LISTS = [
    counted(
        "list: presence, in order of first appearance", ["b", "a", "b"], {"b": 1, "a": 1}, "list", "presence"
    ),
    counted("list: count", ["b", "a", "b", "b"], {"b": 3, "a": 1}, "list"),
    counted("list: ln(1 + count)", ["b", "a", "b"], {"b": LN3, "a": LN2}, "list", "log_count"),
    counted(
        "list: whole numbers are texts; empty texts make none",
        [7, "7", "", "A b"],
        {"7": 2, "A b": 1},
        "list",
    ),
    counted("list: items are escaped", ["\x1f", "\x1b"], {"\x1b_": 1, "\x1b\x1b": 1}, "list"),
    counted("list: an empty list makes no token", [], {}, "list"),
    Case("list: an item with a fraction is refused", *one("list", "note", ["a", 1.5]), "wrong_type"),
    Case("list: true as an item is refused", *one("list", "note", [True]), "wrong_type"),
    Case("list: null as an item is refused", *one("list", "note", ["a", None]), "wrong_type"),
    Case("list: a text is refused", *one("list", "note", "a"), "wrong_type"),
    Case(
        "hash: tokens of every length to 33 bytes, so that each tail of a 16-byte block is met",
        *one("list", "f", ["a" * length for length in range(1, 34)]),
        each("f", *["a" * length for length in range(1, 34)]),
    ),
]

WORDS = [
    note(
        "words: runs of letters and digits, folded",
        "Left at the GATE, gate_7!",
        "left",
        "at",
        "the",
        "gate",
        "7",
    ),
    counted("words: count", "Gate gate 7 GATE", {"gate": 3, "7": 1}),
    counted("words: ln(1 + count)", "gate gate 7", {"gate": LN3, "7": LN2}, how="log_count"),
    note("words: an empty text makes no token", ""),
    note(
        "words: nothing but separators",
        " -- \t\n!? \x00\x1b\x1f",
    ),
    Case("words: a number is refused", *one("words", "note", 7), "wrong_type"),
    note(
        "words: apostrophes, dots and hyphens separate", "don't re-do v2.1", "don", "t", "re", "do", "v2", "1"
    ),
    note("words: digits and letters are one run", "42nd 7B b7", "42nd", "7b", "b7"),
    note("words: other numbers are letters of a word", "½ Ⅷ ١٢ ①", "½", "ⅷ", "١٢", "①"),
    counted("fold: one letter may become two", "Straße STRASSE", {"strasse": 2}),
    counted("fold: final sigma", "ΣΊΣΥΦΟΣ σίσυφος", {"σίσυφοσ": 2}),
    counted("fold: a ligature", "ﬁne FINE", {"fine": 2}),
    counted("fold: dotted capital I, composed and not", "\u0130 I\u0307", {"i\u0307": 2}),
    counted("fold: compatibility letters stay apart", "\uff21 A", {"\uff41": 1, "a": 1}),
    counted("accents: composed and decomposed", "caf\u00e9 cafe\u0301 CAFE\u0301", {"caf\u00e9": 3}),
    counted("accents: three ways to write one letter", "\u00c5 A\u030a \u212b", {"\u00e5": 3}),
    counted(
        "accents: two marks that compose", "\u1ead a\u0323\u0302 a\u0302\u0323 \u00e2\u0323", {"\u1ead": 4}
    ),
    counted("accents: a mark that does not compose stays", "q\u0308 Q\u0308", {"q\u0308": 2}),
    counted(
        "accents: marks are not put into another order",
        "e\u0323\u0301 e\u0301\u0323",
        {"\u1eb9\u0301": 1, "\u00e9\u0323": 1},
    ),
    counted(
        "accents: a mark behind one that does not compose",
        "a\u0331\u0308 \u00e4\u0331",
        {"a\u0331\u0308": 1, "\u00e4\u0331": 1},
    ),
    counted("accents: on a letter that folds to two", "\u00df\u0301 ss\u0301", {"s\u015b": 2}),
    counted("accents: iota subscript becomes a letter", "\u1fb3 \u03b1\u0345", {"\u03b1\u03b9": 2}),
    counted("accents: a mark that is two", "\u03b9\u0344 \u0390 a\u0344", {"\u0390": 2, "a\u0308\u0301": 1}),
    note("marks: outside a run they separate", "\u0301ab \u0301cd .\u0301", "ab", "cd"),
    note("marks: vowel signs belong to the word", "किताब", "किताब"),
    counted("marks: two signs that compose", "\u0995\u09c7\u09be \u0995\u09cb", {"\u0995\u09cb": 2}),
    note(
        "joiners and emoji separate",
        "a\u200db \U0001f469\u200d\U0001f527 c\u200bd\ufe0f",
        "a",
        "b",
        "c",
        "d\ufe0f",
    ),
    note("wide: neighbouring pairs", "東京都庁", "東京", "京都", "都庁"),
    note("wide: one alone", "東。", "東"),
    note("wide: beside words", "東京tower9号", "東京", "tower9", "号"),
    counted("wide: marks belong to their character", "か\u3099き がき", {"がき": 2}),
    note("wide: a mark that does not compose", "あ\u0308い", "あ\u0308い"),
    note("wide: kana, signs of repetition, number zero", "カー々〇", "カー", "ー々", "々〇"),
    note("wide: Bopomofo", "ㄅㄆㄇ", "ㄅㄆ", "ㄆㄇ"),
    note(
        "wide: planes 2 and 3",
        "\U00020000\U0002fffd\U0003fffd",
        "\U00020000\U0002fffd",
        "\U0002fffd\U0003fffd",
    ),
    counted("wide: compatibility ideographs fold", "\uf900\uf900 \u8c48\u8c48", {"\u8c48\u8c48": 2}),
    note("wide: the halfwidth voiced sound mark is a word letter", "\uff8a\uff9e", "\uff8a", "\uff9e"),
    counted(
        "Hangul: jamo stay apart from syllables", "한 \u1112\u1161\u11ab", {"한": 1, "\u1112\u1161\u11ab": 1}
    ),
    note("Hangul is cut into words", "한국어 사전", "한국어", "사전"),
    note("words: a very long word is one token", "Ab" * 400, "ab" * 400),
]

PAIRS = [
    note(
        "pairs: after the second of the two",
        "left at gate",
        "left",
        "at",
        "left at",
        "gate",
        "at gate",
        pairs=True,
    ),
    note("pairs: one word has none", "left", "left", pairs=True),
    note(
        "pairs: across punctuation and wide pairs",
        "東京都. X",
        "東京",
        "京都",
        "東京 京都",
        "x",
        "京都 x",
        pairs=True,
    ),
    Case(
        "pairs: counted like words",
        *one("words", "note", "a b a b", pairs=True, value="count"),
        {"note\x1fa": 2, "note\x1fb": 2, "note\x1fa b": 2, "note\x1fb a": 1},
    ),
    note("drop: taken out, folded", "Left AT the Gate", "left", "gate", drop=["The", "at"]),
    note(
        "drop: before pairs are made",
        "left at the gate",
        "left",
        "gate",
        "left gate",
        drop=["at", "the"],
        pairs=True,
    ),
    note("drop: accents in either form", "caf\u00e9 CAFE\u0301 x", "x", drop=["Cafe\u0301"]),
    note("drop: each token of what is given", "I don t know", "i", "know", drop=["don't"]),
]

CROSSES = [
    Case(
        "cross: tokens joined by 0x1F, names by &; after the fields",
        several("route", "hour", crosses=[["route", "hour"]]),
        {"route": "NW", "hour": 9},
        {**each("route", "NW"), **each("hour", "9..17"), **each("route&hour", "NW\x1f9..17")},
    ),
    Case(
        "cross: the first field slowest, each token once, value 1",
        several("tags", "note", crosses=[["tags", "note"]]),
        {"tags": ["b", "a", "b"], "note": "x y x"},
        {
            "tags\x1fb": 2.0,
            "tags\x1fa": 1.0,
            "note\x1fx": 1.0,
            "note\x1fy": 1.0,
            **each("tags&note", "b\x1fx", "b\x1fy", "a\x1fx", "a\x1fy"),
        },
    ),
    Case(
        "cross: fields in the cross's order",
        several("route", "hour", crosses=[["hour", "route"]]),
        {"route": "NW", "hour": 8.9},
        {**each("route", "NW"), **each("hour", "..9"), **each("hour&route", "..9\x1fNW")},
    ),
    Case(
        "cross: three fields, and crosses in order",
        several("route", "hour", "tags", crosses=[["route", "hour", "tags"], ["route", "tags"]]),
        {"route": 7, "hour": 17, "tags": ["a"]},
        {
            **each("route", "7"),
            **each("hour", "17.."),
            **each("tags", "a"),
            **each("route&hour&tags", "7\x1f17..\x1fa"),
            **each("route&tags", "7\x1fa"),
        },
    ),
    Case(
        "cross: none where one of its fields has no token",
        several("route", "tags", crosses=[["route", "tags"]]),
        {"route": "NW", "tags": []},
        each("route", "NW"),
    ),
    Case(
        "cross: escaped tokens keep combinations apart",
        several("route", "tags", crosses=[["route", "tags"]]),
        {"route": "a\x1fb", "tags": ["c"]},
        {**each("route", "a\x1b_b"), **each("tags", "c"), **each("route&tags", "a\x1b_b\x1fc")},
    ),
    Case(
        "cross: word pairs take part",
        {
            "fields": [
                {"path": "note", "kind": "words", "pairs": True},
                {"path": "route", "kind": "category"},
            ],
            "crosses": [{"paths": ["note", "route"]}],
        },
        {"note": "at gate", "route": "S"},
        {
            **each("note", "at", "gate", "at gate"),
            **each("route", "S"),
            **each("note&route", "at\x1fS", "gate\x1fS", "at gate\x1fS"),
        },
    ),
]

BITS_20 = {"space": {"address_bits": 20}}

ROWS = [
    placed("space: 20 bits", 20, 0),
    placed("space: 40 bits", 40, 0),
    placed("space: 63 bits", 63, 0),
    placed("space: seed 1", 40, 1),
    placed("space: the largest seed", 40, 2**32 - 1),
    Case(
        "unit length: 3 and 4 become 0.6 and 0.8",
        {
            "fields": [{"path": "grams", "kind": "quantity"}, {"path": "cm", "kind": "quantity"}],
            "space": {"unit_length": True},
        },
        {"grams": 3, "cm": -4},
        {"grams\x1f": 0.6, "cm\x1f": -0.8},
    ),
    Case(
        "unit length: over fields and crosses together",
        several("route", "hour", crosses=[["route", "hour"]], space={"unit_length": True}),
        {"route": "S", "hour": 12},
        {"route\x1fS": 0.57735026, "hour\x1f9..17": 0.57735026, "route&hour\x1fS\x1f9..17": 0.57735026},
    ),
    Case("unit length: an empty row stays", several("note", space={"unit_length": True}), {"note": "..."}),
    Case(
        "one address: two texts of a field are one token, under the first",
        several("tags", **BITS_20),
        {"tags": ["t1803", "x", "t1030"]},
        {"tags\x1ft1803": 2.0, "tags\x1fx": 1.0},
    ),
    Case(
        "one address: entries of two fields are merged and added",
        several("tags", "route", **BITS_20),
        {"tags": ["t657", "t657"], "route": "r1560"},
        {"tags\x1ft657": 3.0},
    ),
    Case(
        "one address: such texts take part in a cross as one",
        several("tags", "route", crosses=[["route", "tags"]], **BITS_20),
        {"tags": ["t1803", "t1030"], "route": "NW"},
        {"tags\x1ft1803": 2.0, "route\x1fNW": 1.0, "route&tags\x1fNW\x1ft1803": 1.0},
    ),
    Case(
        "one address: two combinations of a cross are one, of value 1",
        several("route", "tags", crosses=[["route", "tags"]], **BITS_20),
        {"route": "NW", "tags": ["t1278", "t1917"]},
        {"route\x1fNW": 1.0, "tags\x1ft1278": 1.0, "tags\x1ft1917": 1.0, "route&tags\x1fNW\x1ft1278": 1.0},
    ),
    Case(
        "one address: a combination is added to a field's token",
        several("route", "tags", crosses=[["route", "tags"]], **BITS_20),
        {"route": "NW", "tags": ["t243", "t701"]},
        {
            "route\x1fNW": 1.0,
            "tags\x1ft243": 2.0,
            "tags\x1ft701": 1.0,
            "route&tags\x1fNW\x1ft243": 1.0,
        },
    ),
    Case(
        "cap: as many tokens as allowed",
        several("note", message={"max_tokens": 3}),
        {"note": "a a b"},
        each("note", "a", "b"),
    ),
    Case(
        "cap: repeats count",
        several("note", message={"max_tokens": 3}),
        {"note": "a a a a"},
        "too_many_tokens",
    ),
    Case(
        "cap: combinations count",
        several("tags", "note", crosses=[["tags", "note"]], message={"max_tokens": 7}),
        {"tags": ["a", "b"], "note": "x y"},
        "too_many_tokens",
    ),
    Case(
        "cap: dropped words do not count",
        {
            "fields": [{"path": "note", "kind": "words", "drop": ["the"]}],
            "message": {"max_tokens": 1},
        },
        {"note": "the the gate"},
        each("note", "gate"),
    ),
]

CASES = [*CATEGORIES, *QUANTITIES, *LISTS, *WORDS, *PAIRS, *CROSSES, *ROWS]


def document() -> JSON:
    """The vectors as JSON types. Raises AssertionError where the twin gives another row than the hand."""
    return {
        "unicode": "14.0.0",
        "address": "top address_bits bits of the first word of MurmurHash3 x64 128 of the UTF-8 text, seed",
        "defaults": {"address_bits": 40, "seed": 0, "unit_length": False},
        "cases": [worked_out(case) for case in CASES],
    }


def worked_out(case: Case) -> JSON:
    """One case with addresses."""
    given = {"what": case.what, "settings": case.settings, "message": case.message}
    settings = Settings.model_validate(case.settings)
    try:
        entries = row(case.message, settings)
    except Rejected as rejected:
        assert case.row == rejected.reason, case.what
        return {**given, "rejected": rejected.reason}
    assert isinstance(case.row, dict), case.what
    by_hand = [(text.encode(), np.float32(value)) for text, value in case.row.items()]
    assert [(text, value) for text, _, value in entries] == by_hand, (case.what, entries)
    digits = -(-settings.space.address_bits // 4)
    rows = [
        {"text": text.decode(), "address": f"0x{where:0{digits}x}", "value": float(str(value))}
        for text, where, value in entries
    ]
    return {**given, "row": rows}


if __name__ == "__main__":
    VECTORS.write_text(json.dumps(document(), indent=1) + "\n", encoding="ascii")
