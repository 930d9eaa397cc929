"""Log loss by slice in, where the model helps most and least out."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from stream.reports.drawing import Entry, Figure, Picture, axis, layout, padded
from stream.reports.markup import Section, paragraphs, pictured, table
from stream.reports.texts import bdi, count, escaped, in_picture, loss, percent, ratio, visible

__all__ = ["slices"]

MOST = 30
ROW = 26
_GIST = (
    "One row for each slice, the largest first: the log loss of the chosen model, and that of always saying "
    "the slice's own share of yes answers."
)
_READING = (
    "The longer the line from the hollow point to the left, the more the model knows there. A full point on "
    "the right of its hollow one marks a slice where the model is worse than that constant guess."
)


def slices(document: Mapping[str, Any]) -> Section:
    """The picture of the largest slices and a table of all."""
    title, short = "Where it helps, slice by slice", "Slices"
    by, rows = document["slices"]["by"], document["slices"]["rows"]
    if by and not rows:
        field = escaped(visible(str(by)))
        body = paragraphs(f"No labelled message was scored in a slice by <code>{field}</code>.")
        return Section("slices", title, short, body, {})
    if not by:
        body = paragraphs(
            "The settings name no field to slice by. Set <code>metrics.slice_by</code> to see the loss by "
            "its values."
        )
        return Section("slices", title, short, body, {})
    rows = sorted(rows, key=lambda row: (-row["messages"], str(row["slice"])))
    drawn = [row for row in rows if row["log_loss"] is not None][:MOST]
    some = f" The {len(drawn)} largest of {len(rows)} slices are drawn." if len(drawn) < len(rows) else ""
    intro = f"<p>Slices are the values of <code>{escaped(visible(str(by)))}</code>.{some}</p>"
    listed = _listed(rows)
    if not drawn:
        return Section("slices", title, short, intro + listed, {})
    picture = _picture(drawn)
    return Section(
        "slices",
        title,
        short,
        intro + pictured("slices", picture, _GIST, _READING) + listed,
        {"slices": picture},
    )


def _picture(rows: Sequence[Mapping[str, Any]]) -> Picture:
    guesses = [_entropy(row["base_rate"]) for row in rows]
    height = 80 + ROW * len(rows)
    names = [in_picture(visible(str(row["slice"])), 18) for row in rows]
    told = [
        [
            in_picture(visible(str(row["slice"])), 60),
            count(row["messages"]),
            loss(row["log_loss"]),
            loss(guess),
            ratio(row["normalised_entropy"]),
        ]
        for row, guess in zip(rows, guesses, strict=True)
    ]
    places = list(range(len(rows)))
    figure = {
        "data": [
            _gaps(rows, guesses),
            _points(
                guesses,
                places,
                told,
                {"symbol": "circle-open", "size": 9, "line": {"width": 1.8}, "color": "--muted"},
            ),
            _points(
                [r["log_loss"] for r in rows],
                places,
                told,
                {"symbol": "circle", "size": 10, "color": "--accent"},
            ),
        ],
        "layout": layout(
            height,
            xaxis=axis(
                "log loss, nats per message",
                range=padded([v for v in [*guesses, *(r["log_loss"] for r in rows)] if v is not None]),
            ),
            yaxis=axis("", tickvals=places, ticktext=names, range=[len(rows) - 0.4, -0.6], ticks=""),
        ),
    }
    key = [
        Entry("the chosen model", {"colour": "--accent", "shape": "circle"}),
        Entry("always the slice's base rate", {"colour": "--muted", "shape": "circle-open"}),
    ]
    return Picture(
        figure, height, f"Log loss of the model and of a constant guess in {len(rows)} slices.", key
    )


def _points(
    values: Sequence[float | None], places: Sequence[int], told: Sequence[Any], marker: Figure
) -> Figure:
    return {
        "type": "scatter",
        "mode": "markers",
        "x": list(values),
        "y": list(places),
        "marker": marker,
        "customdata": list(told),
        "hovertemplate": (
            "<b>%{customdata[0]}</b><br>%{customdata[1]} messages<br>log loss %{customdata[2]}"
            "<br>of its base rate %{customdata[3]}<br>normalised entropy %{customdata[4]}<extra></extra>"
        ),
    }


def _gaps(rows: Sequence[Mapping[str, Any]], guesses: Sequence[float | None]) -> Figure:
    x: list[float | None] = []
    y: list[float | None] = []
    for place, (row, guess) in enumerate(zip(rows, guesses, strict=True)):
        x += [guess, row["log_loss"], None]
        y += [place, place, None]
    line = {"color": "--accent", "width": 2}
    return {
        "type": "scatter",
        "mode": "lines",
        "x": x,
        "y": y,
        "line": line,
        "hoverinfo": "skip",
        "opacity": 0.5,
    }


def _entropy(rate: float | None) -> float | None:
    """Log loss of always predicting `rate` where that is the share of yes."""
    if rate is None:
        return None
    return -sum(p * math.log(p) for p in (rate, 1 - rate) if p > 0)


def _listed(rows: Sequence[Mapping[str, Any]]) -> str:
    titles = ["slice", "messages", "base rate", "log loss", "norm. entropy"]
    cells = [
        (
            bdi(str(r["slice"]), 40),
            count(r["messages"]),
            percent(r["base_rate"]),
            loss(r["log_loss"]),
            ratio(r["normalised_entropy"]),
        )
        for r in rows
    ]
    listed = table("Slices", titles, cells)
    return f"<details><summary>All {len(rows)} slices as a table</summary>{listed}</details>"
