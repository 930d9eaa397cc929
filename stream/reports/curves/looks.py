"""Rows of the document of `converge` in, what they are called and how they are drawn out."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from stream.reports.drawing import Entry, Figure, LogPlaces, swatch_dash
from stream.reports.texts import UNKNOWN, count

__all__ = [
    "BATCH",
    "Curve",
    "Row",
    "at_strength",
    "curves",
    "entries",
    "learner_look",
    "row_name",
    "share",
    "spoken",
    "trace",
]

Row = Mapping[str, Any]

BATCH = "batch fit"
_OF_BATCH = "--series-3", "diamond"
_OF_LEARNERS = (
    ("--series-1", "circle"),
    ("--series-2", "square"),
    ("--series-4", "triangle-up"),
    ("--series-5", "cross"),
    ("--series-6", "triangle-down"),
)


@dataclass(frozen=True, slots=True)
class Curve:
    """A learner after so many passes, or the batch fit: its rows, one for each look, and how it is drawn."""

    name: str
    rows: Sequence[Row]
    colour: str
    shape: str
    dash: str


def row_name(name: str | None, epochs: int | None) -> str:
    """What a row is called: `ftrl, 5 passes`; None: the batch fit."""
    if name is None:
        return BATCH
    return f"{spoken(name)}, {'one pass' if epochs == 1 else f'{epochs} passes'}"


def spoken(name: str) -> str:
    """A learner's name with spaces to break it at."""
    return name.replace("-", " ")


def share(value: float | None, signed: bool = False) -> str:
    """A share as a percentage with two digits, so that a column of them lines up."""
    if value is None:
        return UNKNOWN
    return f"{100 * value:{'+' if signed else ''},.2f} %".replace("-", "−")


def at_strength(document: Row, strength: float) -> list[Row]:
    """The comparisons at one strength, by ascending messages."""
    return [fit for fit in document["fits"] if fit["strength"] == strength]


def curves(fits: Sequence[Row], batch: bool) -> list[Curve]:
    """A curve for each row that comes at every look; that of the batch fit first, where wanted."""
    found = [Curve(BATCH, [fit["batch"] for fit in fits], *_OF_BATCH, "solid")] if batch else []
    learners = list(dict.fromkeys(one["name"] for one in fits[0]["learned"]))
    for i, one in enumerate(fits[0]["learned"]):
        colour, shape = learner_look(learners.index(one["name"]))
        dash = "solid" if one["epochs"] == 1 else "dash"
        name = row_name(one["name"], one["epochs"])
        found.append(Curve(name, [fit["learned"][i] for fit in fits], colour, shape, dash))
    return found


def learner_look(place: int) -> tuple[str, str]:
    """Colour and shape of the learner at this place."""
    return _OF_LEARNERS[place % len(_OF_LEARNERS)]


def entries(drawn: Iterable[Curve]) -> list[Entry]:
    """The key of a picture."""
    return [Entry(c.name, {"colour": c.colour, "shape": c.shape, "dash": swatch_dash(c.dash)}) for c in drawn]


def trace(
    curve: Curve,
    messages: Sequence[int],
    values: Sequence[float | None],
    texts: Sequence[str],
    places: LogPlaces | None = None,
) -> Figure:
    """A line with points; `places` where the axis up is logarithmic."""
    return {
        "type": "scatter",
        "mode": "lines+markers",
        "x": list(messages),
        "y": [None if v is None else v if places is None else places.of(v) for v in values],
        "line": {"color": curve.colour, "width": 2, "dash": curve.dash},
        "marker": {"color": curve.colour, "symbol": curve.shape, "size": 8},
        "name": curve.name,
        "customdata": [[count(m), text] for m, text in zip(messages, texts, strict=True)],
        "hovertemplate": (
            f"<b>{curve.name}</b><br>%{{customdata[0]}} messages<br>%{{customdata[1]}}<extra></extra>"
        ),
    }
