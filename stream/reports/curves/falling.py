"""Figures at ever more messages in; curves on log axes, the lines fitted to them, and their slopes, out."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from stream.reports.curves.looks import Row, at_strength, curves, entries, row_name, trace
from stream.reports.drawing import Figure, LogPlaces, Picture, layout
from stream.reports.markup import Section, pictured, table
from stream.reports.texts import UNKNOWN, count, escaped, plain

__all__ = ["excess", "gaps", "seconds"]

HEIGHT = 380
_FITTED = "The thin dotted lines are fitted, and the table has their exponents."


@dataclass(frozen=True, slots=True)
class _Kind:
    """A figure that is drawn: its `key` in a row, texts, and whether the batch fit has it too."""

    name: str
    title: str
    short: str
    key: str
    up: str
    batch: bool
    shares: bool
    gist: str
    reading: str


_GAPS = _Kind(
    "gaps",
    "How far above the batch fit",
    "Gap",
    "gap",
    "gap, share of the objective",
    False,
    True,
    "The objective (mean log loss and penalty, over the messages learned so far) of each learner above that "
    "of the batch fit of the same messages, as a share of it. Both axes are logarithmic.",
    "A straight line down means that the gap shrinks as a power of the messages. Several passes are over the "
    "same messages.",
)
_EXCESS = _Kind(
    "excess",
    "What the truth would have saved",
    "Excess loss",
    "excess_log_loss",
    "excess log loss, nats",
    True,
    False,
    "What each model loses on fresh messages more than the true probabilities lose, on average over the "
    "outcomes that these give, label noise included. No luck of the outcomes is in it.",
    "The batch fit has an excess too: so many messages say no more at this strength. Where the penalty keeps "
    "weights from their true size, the curves end on a level that more messages do not lower.",
)
_SECONDS = _Kind(
    "seconds",
    "What it takes",
    "Seconds",
    "seconds",
    "seconds",
    True,
    False,
    "Seconds from rows of tokens to weights: of the batch fit by its library, and of a learner's updates "
    "alone. Reading and hashing messages, which both need, is left out.",
    "A learner does not begin again when more messages come; a batch fit does.",
)


def gaps(document: Row) -> Section:
    """Objective above the batch fit's."""
    return _section(document, _GAPS)


def excess(document: Row) -> Section:
    """Loss above the truth's."""
    return _section(document, _EXCESS)


def seconds(document: Row) -> Section:
    """Time from rows to weights."""
    return _section(document, _SECONDS)


def _section(document: Row, kind: _Kind) -> Section:
    pictures: dict[str, Picture] = {}
    body = []
    fitted = any(slope["of"] == kind.key for slope in document["slopes"])
    reading = f"{kind.reading} {_FITTED}" if fitted else kind.reading
    for i, strength in enumerate(document["strengths"]):
        slopes = [s for s in document["slopes"] if s["strength"] == strength and s["of"] == kind.key]
        picture = _picture(at_strength(document, strength), kind, strength, slopes)
        pictures[f"{kind.name}-{i}"] = picture
        last = i + 1 == len(document["strengths"])
        body.append(
            f"<h3>Strength {plain(strength)}</h3>"
            + pictured(f"{kind.name}-{i}", picture, kind.gist if i == 0 else "", reading if last else "")
        )
    return Section(kind.name, kind.title, kind.short, "".join(body) + _slopes(document, kind), pictures)


def _picture(fits: Sequence[Row], kind: _Kind, strength: float, slopes: Sequence[Row]) -> Picture:
    messages = [fit["messages"] for fit in fits]
    drawn = curves(fits, kind.batch)
    values = [[_value(row, kind) for row in curve.rows] for curve in drawn]
    up = LogPlaces((v for line in values for v in line if v is not None), _said(kind))
    across = LogPlaces(messages, count)
    traces = [
        trace(curve, messages, line, [_said(kind)(v) if v is not None else UNKNOWN for v in line], up)
        for curve, line in zip(drawn, values, strict=True)
    ]
    colours = {curve.name: curve.colour for curve in drawn}
    fitted = [_line(s, messages, colours[row_name(s["name"], s["epochs"])]) for s in slopes]
    figure = {
        "data": [*fitted, *traces],
        "layout": layout(HEIGHT, xaxis=across.axis("messages"), yaxis=up.axis(kind.up)),
    }
    summary = f"{kind.title} at strength {plain(strength)}, of {', '.join(colours)}."
    return Picture(figure, HEIGHT, summary, entries(drawn))


def _value(row: Row, kind: _Kind) -> float | None:
    found = row["learning_seconds"] if kind.key == "seconds" and "name" in row else row[kind.key]
    return None if found is None else float(found)


def _said(kind: _Kind) -> Callable[[float], str]:
    return _percentage if kind.shares else plain


def _percentage(value: float) -> str:
    return f"{100 * value:.3g} %"


def _line(slope: Row, messages: Sequence[int], colour: str) -> Figure:
    """The fitted power of the messages, from the first to the last."""
    ends = [messages[0], messages[-1]]
    return {
        "type": "scatter",
        "mode": "lines",
        "x": ends,
        "y": [slope["factor"] * end ** slope["exponent"] for end in ends],
        "line": {"color": colour, "width": 1, "dash": "dot"},
        "hoverinfo": "skip",
    }


def _slopes(document: Row, kind: _Kind) -> str:
    rows = [
        (
            escaped(row_name(s["name"], s["epochs"])),
            plain(s["strength"]),
            f"{s['exponent']:+.2f} ± {s['error']:.2f}".replace("-", "−"),
            count(s["points"]),
        )
        for s in document["slopes"]
        if s["of"] == kind.key
    ]
    if not rows:
        return ""
    titles = ("weights of", "strength", "exponent ± s.e.", "looks")
    return table(f"Slopes: {kind.title}", titles, rows, kind="whole")
