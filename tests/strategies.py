"""Random settings and messages that fit them come out, with texts chosen to hurt a tokenizer.

Messages are JSON types only and hold no lone surrogates. A path always holds the same kind of thing, so most
messages are accepted; a few hold the wrong type.
"""

from __future__ import annotations

from typing import Any

from hypothesis import strategies as st

from stream.settings.models import Settings

__all__ = ["messages", "nasty_texts", "numbers", "settings_and_messages"]

TEXT_PATHS = ["note", "body.text", "body.título"]
CATEGORY_PATHS = ["route", "who.id", "街"]
NUMBER_PATHS = ["grams", "at.hour", "offset"]
LIST_PATHS = ["tags", "a.b.codes"]

PIECES = [
    *["depot", "Gate", "GATE", "left", "7", "42nd", "v2.1", "don't", "x" * 300, "Straße", "ΣΊΣΥΦΟΣ", "ﬁne"],
    *["ŉ", "İz", "caf\u00e9", "cafe\u0301", "A\u030angstro\u0308m", "\u212bngstr\u00f6m", "e\u0301\u0323"],
    *["\u1fb3\u0301", "s\u0307\u0323", "\u0301", "\u0345", "\u0344", "\u0301\u0301", "\u0300lead"],
    *["q\u0308\u0301", "\u05e9\u05c1\u05bc", "किताब", "ক\u09c7\u09be", "ไทย", "한국어", "\u1112\u1161\u11ab"],
    *["東京都", "東", "東京tower", "9号", "か\u3099き", "が", "カ\u3099", "ﾊﾞｽ", "〇〇", "々", "ㄅㄆ"],
    *["\U00020000\U0002fffd", "\U0003fffd", "\ufa0e\uf900", "\U0001d400", "\U00010400", "\ue000"],
    *["\U0001f4e6", "\U0001f469\u200d\U0001f527", "❤\ufe0f", "\u200d", "\u200b", "\uffff", "\U0010ffff"],
    *["Ⅷ", "½", "①", "١٢", "Ⓐ", "ª", "ʼ", " ", "  ", "\t", "\n", "-", "_", "'", ".", "&", "\u00a0", "\ufeff"],
    *["\x00", "\x1b", "\x1f", "\x1b_", "\x1b\x1f", "\\", '"'],
]
LETTERS = st.characters(exclude_categories=["Cs"])


def nasty_texts() -> st.SearchStrategy[str]:
    """Texts of pieces with odd folding, marks, wide letters and controls, or of any; some very long."""
    piece = st.sampled_from(PIECES) | st.text(LETTERS, max_size=4)
    mixed = st.lists(piece, max_size=14).map("".join) | st.lists(piece, max_size=10).map(" ".join)
    repeated = st.tuples(st.sampled_from(PIECES), st.integers(1, 400)).map(lambda pair: pair[0] * pair[1])
    return mixed | st.text(LETTERS, max_size=30) | repeated | st.just("")


def categories() -> st.SearchStrategy[Any]:
    """Values of a category field."""
    return st.sampled_from(["NW", "S", ""]) | nasty_texts() | st.integers(-(2**63), 2**63 - 1) | st.booleans()


def numbers() -> st.SearchStrategy[Any]:
    """Values of a quantity field: on and beside the edges, tiny, huge, whole and not."""
    near = st.sampled_from([0, -0.0, 0.5, 1, 5, 5.0, 4.999999999999999, -1, 10, 1e-50, -1e-46, 3.4e38, 1e16])
    floats = st.floats(-3.4e38, 3.4e38, allow_nan=False)
    return near | floats | st.integers(-(2**63), 2**63 - 1) | st.integers(-20, 20)


def lists() -> st.SearchStrategy[list[Any]]:
    """Values of a list field, with repeats."""
    element = st.sampled_from(["a", "b", "", "\x1f", 7]) | nasty_texts() | st.integers(-(2**63), 2**63 - 1)
    return st.lists(element, max_size=8)


GOOD = {path: strategy() for paths, strategy in [
    (TEXT_PATHS, nasty_texts), (CATEGORY_PATHS, categories), (NUMBER_PATHS, numbers), (LIST_PATHS, lists),
] for path in paths}  # fmt: skip

WRONG = {
    **dict.fromkeys(TEXT_PATHS, st.sampled_from([1, True, ["a"], {}])),
    **dict.fromkeys(CATEGORY_PATHS, st.sampled_from([1.5, ["a"], {}])),
    **dict.fromkeys(NUMBER_PATHS, st.sampled_from(["1", False, [1], {}, 3.5e38, 1e300])),
    **dict.fromkeys(LIST_PATHS, st.sampled_from(["a", 1, [1.5], [True], [None], [["a"]], {}])),
}


@st.composite
def messages(draw: st.DrawFn, paths: list[str], wrong: bool = True) -> dict[str, Any]:
    """One message: mostly a value at each path; at times null, nothing or (`wrong`) a wrong type."""
    message: dict[str, Any] = {}
    for path in paths:
        how = draw(st.integers(0, 19))
        if how == 17:
            continue
        value = draw(GOOD[path] if how < 17 else WRONG[path] if wrong and how == 18 else st.none())
        *outer, last = path.split(".")
        target = message
        for step in outer:
            target = target.setdefault(step, {})
        target[last] = value
    return message


@st.composite
def fields(draw: st.DrawFn) -> dict[str, Any]:
    """One field as settings data, its name still to be made distinct."""
    kind = draw(st.sampled_from(["words", "words", "category", "quantity", "list"]))
    counted = st.sampled_from(["presence", "count", "log_count"])
    if kind == "words":
        drop = st.lists(st.sampled_from(PIECES), max_size=3)
        return {"kind": kind, "path": draw(st.sampled_from(TEXT_PATHS)), "value": draw(counted),
                "pairs": draw(st.booleans()), "drop": draw(drop)}  # fmt: skip
    if kind == "category":
        return {"kind": kind, "path": draw(st.sampled_from(CATEGORY_PATHS))}
    if kind == "list":
        return {"kind": kind, "path": draw(st.sampled_from(LIST_PATHS)), "value": draw(counted)}
    field = {"kind": kind, "path": draw(st.sampled_from(NUMBER_PATHS))}
    how = draw(st.sampled_from(["plain", "logarithmic", "bins"]))
    if how != "bins":
        return {**field, "scale": how}
    odd = st.floats(-1e6, 1e6).map(lambda x: x + 0.0)  # -0.0 becomes 0.0
    edges = st.sampled_from([-1.0, 0.0, 0.5, 1.0, 5.0, 10.0, 1e16]) | odd
    return {**field, "bins": sorted(draw(st.lists(edges, min_size=1, max_size=6, unique=True)))}


@st.composite
def settings_and_messages(
    draw: st.DrawFn, max_messages: int = 4, wrong: bool = True
) -> tuple[Settings, list[dict[str, Any]]]:
    """Settings with every kind of field and crosses, and messages for them."""
    drawn = draw(st.lists(fields(), min_size=1, max_size=5))
    names = set[str]()
    for at, field in enumerate(drawn):
        name = field["path"] if field["path"] not in names else f"{field['path']} {at}é"
        names.add(name)
        field["name"] = name
    crossable = [f["name"] for f in drawn if f["kind"] != "quantity" or f.get("bins")]
    crosses: list[dict[str, Any]] = []
    if len(crossable) >= 2:
        sides = st.lists(st.sampled_from(crossable), min_size=2, max_size=3, unique=True)
        crosses = [{"paths": paths} for paths in draw(st.lists(sides, max_size=2, unique_by=frozenset))]
    paths = list(dict.fromkeys(field["path"] for field in drawn))
    space = {
        "address_bits": draw(st.sampled_from([20, 24, 40, 63])),
        "seed": draw(st.sampled_from([0, 1, 2**32 - 1])),
        "unit_length": draw(st.booleans()),
    }
    cap = draw(st.sampled_from([1, 3, 20, 2_000, 2_000, 2_000]))
    settings = Settings.model_validate(
        {"message": {"max_tokens": cap}, "fields": drawn, "crosses": crosses, "space": space}
    )
    return settings, draw(st.lists(messages(paths, wrong), min_size=1, max_size=max_messages))
