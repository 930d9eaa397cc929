"""Candidates in, log loss against non-zero weights out: what each weight more buys."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from stream.reports.drawing import (
    DASHES,
    SERIES,
    SHAPES,
    Entry,
    Figure,
    LogPlaces,
    Picture,
    axis,
    layout,
    padded,
    swatch_dash,
)
from stream.reports.markup import Section, pictured, table
from stream.reports.texts import count, difference, escaped, loss, percent, plain, ratio, size

__all__ = ["roles", "sizes"]

Candidate = Mapping[str, Any]

HEIGHT = 460
_RINGS = {
    "choice": ("star", "--accent", 17),
    "lowest loss": ("diamond-open", "--ink", 17),
    "runner-up": ("square-open", "--ink", 16),
    "half the weights": ("circle-open", "--ink", 18),
}
_GIST = (
    "What is lost on the last part of the log (up; lower is better) by models that keep few weights or many "
    "(across). Look for the place where a line stops falling: weights to the right of it buy next to nothing."
)
_READING = (
    "Each point is one model, each line one learning rate, from the strongest penalty on the left to the "
    "weakest on the right. Across, each step is tenfold, and zero stands apart on the left. Bars show one "
    "standard error of the difference to the lowest loss, block by block of the same messages; where a bar "
    "reaches down to the lowest loss, the log cannot tell the two apart."
)
_SWITCH = (
    '<div class="switch" data-switch="sizes" role="group" aria-label="Part of the picture shown">'
    '<button type="button" data-view="whole" aria-pressed="true">All models</button>'
    '<button type="button" data-view="near" aria-pressed="false">Near the lowest loss</button></div>'
)


def sizes(document: Mapping[str, Any]) -> Section:
    """The picture, and behind it every candidate in a table."""
    drawn = [c for c in document["candidates"] if c["log_loss"] is not None]
    listed = _listed(document)
    if not drawn:
        return Section(
            "sizes", "Loss against size", "Size", "<p>No candidate has a log loss.</p>" + listed, {}
        )
    picture = _picture(document, drawn)
    body = pictured("sizes", picture, _GIST, _READING, _SWITCH) + listed
    return Section("sizes", "How much each weight buys", "Loss and size", body, {"sizes": picture})


def roles(document: Mapping[str, Any]) -> dict[str, int]:
    """What a candidate is known for -> its index; a candidate that is two things has one joint name."""
    choice = document["choice"]
    halved = choice.get("halved")
    named = {
        "choice": choice["index"],
        "lowest loss": choice["best"],
        "runner-up": choice.get("runner_up"),
        "half the weights": halved["index"] if halved else None,
    }
    by_index: dict[int, list[str]] = {}
    for name, index in named.items():
        if index is not None:
            by_index.setdefault(index, []).append(name)
    return {", ".join(names): index for index, names in by_index.items()}


def _picture(document: Mapping[str, Any], drawn: Sequence[Candidate]) -> Picture:
    places = LogPlaces((c["nnz"] for c in drawn), count)
    rates = sorted({c["learning_rate"] for c in drawn})
    unit = document["grid"]["unit"]
    traces, key = [], []
    for i, rate in enumerate(rates):
        own = sorted((c for c in drawn if c["learning_rate"] == rate), key=lambda c: -c[unit])
        look = SERIES[i % len(SERIES)], SHAPES[i % len(SHAPES)], DASHES[i % len(DASHES)]
        traces.append(_rate_trace(own, places, unit, look))
        mark = {"colour": look[0], "shape": look[1], "dash": swatch_dash(look[2])}
        key.append(Entry(f"learning rate {plain(rate)}", mark))
    by_index = {c["index"]: c for c in drawn}
    known = {name: by_index[index] for name, index in roles(document).items() if index in by_index}
    for name, candidate in known.items():
        shape, colour, _ = _RINGS[name.split(", ")[0]]
        traces.append(_ring(name, candidate, places))
        key.append(Entry(name, {"colour": colour, "shape": shape}))
    whole, near = _views(drawn, places, min(c["log_loss"] for c in drawn))
    figure = {
        "data": traces,
        "layout": layout(
            HEIGHT,
            xaxis=places.axis("weights that are not zero", range=whole[0]),
            yaxis=axis("log loss, nats per message", range=whole[1]),
            annotations=[_label(c, places, whole[0]) for name, c in known.items() if "choice" in name],
        ),
        "views": {
            view: {"xaxis.range": ranges[0], "yaxis.range": ranges[1]}
            for view, ranges in (("whole", whole), ("near", near))
        },
    }
    return Picture(figure, HEIGHT, _summary(document, known), key)


def _rate_trace(own: Sequence[Candidate], places: LogPlaces, unit: str, look: tuple[str, str, str]) -> Figure:
    colour, shape, dash = look
    return {
        "type": "scatter",
        "mode": "lines+markers",
        "x": [places.of(c["nnz"]) for c in own],
        "y": [c["log_loss"] for c in own],
        "error_y": {
            "type": "data",
            "array": [c["log_loss_se"] or 0.0 for c in own],
            "color": colour,
            "thickness": 1.2,
            "width": 3,
        },
        "line": {"color": colour, "width": 1.6, "dash": dash},
        "marker": {"color": colour, "symbol": shape, "size": 6},
        "customdata": [
            [
                plain(c["learning_rate"]),
                plain(c[unit]),
                count(c["nnz"]),
                loss(c["log_loss"]),
                difference(c["difference"], c["log_loss_se"]),
            ]
            for c in own
        ],
        "hovertemplate": (
            f"learning rate %{{customdata[0]}}<br>{unit} %{{customdata[1]}}<br>%{{customdata[2]}} weights"
            "<br>log loss %{customdata[3]}<br>%{customdata[4]} to the lowest<extra></extra>"
        ),
    }


def _ring(name: str, candidate: Candidate, places: LogPlaces) -> Figure:
    shape, colour, points = _RINGS[name.split(", ")[0]]
    return {
        "type": "scatter",
        "mode": "markers",
        "x": [places.of(candidate["nnz"])],
        "y": [candidate["log_loss"]],
        "marker": {
            "symbol": shape,
            "size": points,
            "color": colour,
            "line": {
                "width": 1.2 if shape == "star" else 2,
                "color": "--page" if shape == "star" else colour,
            },
        },
        "hoverinfo": "skip",
    }


def _label(candidate: Candidate, places: LogPlaces, shown: Sequence[float]) -> Figure:
    """The name of the choice, above it, where a falling line leaves room."""

    x = math.log10(places.of(candidate["nnz"]))
    right = x > shown[0] + 0.7 * (shown[1] - shown[0])
    return {
        "x": x,
        "y": candidate["log_loss"],
        "text": f"<b>choice</b><br>{count(candidate['nnz'])} weights",
        "align": "right" if right else "left",
        "ax": -14 if right else 14,
        "ay": -92,
        "xanchor": "right" if right else "left",
        "showarrow": True,
        "arrowhead": 0,
        "arrowwidth": 1,
        "arrowcolor": "--muted",
        "standoff": 10,
        "font": {"color": "--accent"},
        "bgcolor": "--page",
        "borderpad": 2,
    }


def _views(
    drawn: Sequence[Candidate], places: LogPlaces, best: float
) -> list[tuple[list[float], list[float]]]:
    """Ranges across (log10) and up: of all candidates, and of those that come close to the lowest loss."""
    worst = max(c["log_loss"] for c in drawn)
    limit = best + 0.12 * (worst - best)
    near = [c for c in drawn if c["log_loss"] <= limit]
    views = []
    for shown in (drawn, near):
        across = padded(math.log10(places.of(c["nnz"])) for c in shown)
        errors = [c["log_loss_se"] or 0.0 for c in shown]
        ends = [c["log_loss"] + sign * e for c, e in zip(shown, errors, strict=True) for sign in (-1, 1)]
        views.append((across, padded(ends, 0.1)))
    return views


def _summary(document: Mapping[str, Any], known: Mapping[str, Candidate]) -> str:
    points = "; ".join(
        f"{n}: {count(c['nnz'])} weights, log loss {loss(c['log_loss'])}" for n, c in known.items()
    )
    return f"Log loss against the number of non-zero weights, {len(document['candidates'])} models. {points}."


def _listed(document: Mapping[str, Any]) -> str:
    """Every candidate; the forward test only where there was one."""
    forward = any(c.get("forward_log_loss") is not None for c in document["candidates"])
    marks = {index: name for name, index in roles(document).items()}
    titles = ["model", "learning rate", document["grid"]["unit"], "non-zero", "log loss", "to the lowest"]
    titles += [
        "whole log",
        *(["forward"] if forward else []),
        "AUC",
        "calibration",
        "norm. entropy",
        "snapshot",
    ]
    rows = []
    for c in document["candidates"]:
        row = [f"{c['index']} <b>{escaped(marks.get(c['index'], ''))}</b>", plain(c["learning_rate"])]
        row += [plain(c[document["grid"]["unit"]]), count(c["nnz"]), loss(c["log_loss"])]
        row += [difference(c["difference"], c["log_loss_se"]), loss(c["log_loss_whole"])]
        row += [loss(c["forward_log_loss"])] if forward else []
        row += [
            loss(c["auc"]),
            ratio(c["calibration_ratio"]),
            ratio(c["normalised_entropy"]),
            size(c["bytes"]),
        ]
        rows.append(row)
    listed = table("All models", titles, rows)
    share = percent(_last_share(document))
    note = f"<p>Log loss, AUC and the rest are of the last part of the log ({share} of its messages).</p>"
    return f"<details><summary>All {len(rows)} models as a table</summary>{note}{listed}</details>"


def _last_share(document: Mapping[str, Any]) -> float | None:
    ends, first = document["blocks"]["messages"], document["blocks"]["last_part_from"]
    if not ends or not ends[-1]:
        return None
    return 1 - (ends[first - 1] if first else 0) / float(ends[-1])
