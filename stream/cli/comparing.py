"""Two snapshots compared in, the comparison as JSON or as tables out."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from stream.cli.screen import Column, count, decimal, show_table

if TYPE_CHECKING:
    from stream.snapshots import Change, Comparison

__all__ = ["comparison_json", "show_comparison"]

KINDS = ("entered", "left", "flipped", "moved")


def comparison_json(old: str, new: str, found: Comparison) -> dict[str, Any]:
    """The comparison of the snapshots named `old` and `new` as JSON types."""
    from dataclasses import asdict

    document: dict[str, Any] = {"old": old, "new": new, **asdict(found)}
    for kind in KINDS:
        document[kind] = [
            {**_named(change), "address": change.address, "old": change.old, "new": change.new}
            for change in getattr(found, kind)
        ]
    return document


def _named(change: Change) -> dict[str, str]:
    from stream.token_names import field_and_token

    field, token = field_and_token(change.name)
    return {"field": field, "token": token}


def show_comparison(old: str, new: str, found: Comparison) -> None:
    """Prints totals side by side, then a table for each kind of change."""
    columns = [Column("", right=False), Column(old), Column(new)]
    pairs = [
        ("learned messages", [count(n) for n in found.learned]),
        ("non-zero weights", [count(n) for n in found.nnz]),
        ("sum of |weight|", [decimal(x, 2) for x in found.size]),
        ("intercept", [decimal(x, 4, True) for x in found.intercept]),
    ]
    show_table(columns, [[title, *cells] for title, cells in pairs])
    counts = {
        "entered": found.entered_count,
        "left": found.left_count,
        "flipped": found.flipped_count,
        "moved": None,
    }
    titles = {"entered": "entered", "left": "left", "flipped": "flipped sign", "moved": "moved most"}
    columns = [Column("field", right=False), Column("token", right=False), Column("old"), Column("new")]
    for kind in KINDS:
        changes: tuple[Change, ...] = getattr(found, kind)
        total = counts[kind]
        print(f"\n{titles[kind]}" + ("" if total is None else f": {count(total)}"))
        if changes:
            show_table(
                columns,
                [[*_named(c).values(), decimal(c.old, 4, True), decimal(c.new, 4, True)] for c in changes],
            )
