"""Rows of the document of `converge` in, what they are called and how they are drawn out."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from stream.reports.drawing import Entry, Figure, LogPlaces, swatch_dash
from stream.reports.texts import UNKNOWN, count

__all__ = ["BATCH", "Row", "at_strength", "entries", "look_of", "names_of", "row_name", "share", "trace"]

Row = Mapping[str, Any]

BATCH = "batch fit"
_COLOURS = {"ftrl": "--series-1", "truncated gradient": "--series-2", BATCH: "--series-3"}
_SHAPES = {"ftrl": "circle", "truncated gradient": "square", BATCH: "diamond"}


def row_name(method: str, epochs: int | None) -> str:
    """What a row is called: `ftrl, 5 passes`."""
    if epochs is None:
        return BATCH
    said = method.replace("-", " ")
    return f"{said}, {'one pass' if epochs == 1 else f'{epochs} passes'}"


def share(value: float | None, signed: bool = False) -> str:
    """A share as a percentage with two digits, so that a column of them lines up."""
    if value is None:
        return UNKNOWN
    return f"{100 * value:{'+' if signed else ''}.2f} %".replace("-", "−")


def at_strength(document: Row, strength: float) -> list[Row]:
    """The comparisons at one strength, by ascending messages."""
    return [fit for fit in document["fits"] if fit["strength"] == strength]


def names_of(fits: Sequence[Row], batch: bool) -> dict[str, list[Row]]:
    """Rows by name, one for each comparison; those of the batch fit first, where wanted."""
    found: dict[str, list[Row]] = {BATCH: [fit["batch"] for fit in fits]} if batch else {}
    for i, one in enumerate(fits[0]["learned"]):
        found[row_name(one["method"], one["epochs"])] = [fit["learned"][i] for fit in fits]
    return found


def look_of(name: str) -> tuple[str, str, str]:
    """Colour, shape and dash of a row."""
    method = name.partition(",")[0]
    return _COLOURS[method], _SHAPES[method], "dash" if name.endswith("passes") else "solid"


def entries(names: Iterable[str]) -> list[Entry]:
    """The key of a picture."""
    return [
        Entry(name, {"colour": colour, "shape": shape, "dash": swatch_dash(dash)})
        for name in names
        for colour, shape, dash in [look_of(name)]
    ]


def trace(
    name: str,
    messages: Sequence[int],
    values: Sequence[float | None],
    texts: Sequence[str],
    places: LogPlaces | None = None,
) -> Figure:
    """A line with points; `places` where the axis up is logarithmic."""
    colour, shape, dash = look_of(name)
    return {
        "type": "scatter",
        "mode": "lines+markers",
        "x": list(messages),
        "y": [None if v is None else v if places is None else places.of(v) for v in values],
        "line": {"color": colour, "width": 2, "dash": dash},
        "marker": {"color": colour, "symbol": shape, "size": 8},
        "name": name,
        "customdata": [[count(m), text] for m, text in zip(messages, texts, strict=True)],
        "hovertemplate": (
            f"<b>{name}</b><br>%{{customdata[0]}} messages<br>%{{customdata[1]}}<extra></extra>"
        ),
    }
