"""Predictions in bins in, the reliability diagram and what it says in words out."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from stream.reports.drawing import Entry, Figure, Picture, axis, layout
from stream.reports.markup import Section, paragraphs, pictured
from stream.reports.texts import count, loss, percent, plain, ratio

__all__ = ["calibration"]

HEIGHT = 500
_GIST = (
    "The predictions of the chosen model on the last part of the log, in bins. Above, what share of a bin's "
    "messages was a yes (up) against what was predicted for them (across). Below, how many messages a bin "
    "has."
)
_READING = (
    "On the dashed line the probabilities mean what they say; above it they are too low, below it too high. "
    "Bars show two standard errors. A bin with few messages proves little."
)


def calibration(document: Mapping[str, Any]) -> Section:
    """The picture, after the two figures that sum it up."""
    title, short = "Are the probabilities right?", "Calibration"
    reliability = document["reliability"]
    bins = [b for b in reliability["bins"] if b["weight"] and b["observed"] is not None]
    said = _said(reliability)
    if not bins:
        body = paragraphs(*said, "No labelled message was predicted in the last part of the log.")
        return Section("calibration", title, short, body, {})
    picture = _picture(bins)
    body = paragraphs(*said) + pictured("calibration", picture, _GIST, _READING)
    return Section("calibration", title, short, body, {"calibration": picture})


def _said(reliability: Mapping[str, Any]) -> list[str]:
    said = []
    over = reliability["calibration_ratio"]
    if over is not None:
        more = "more" if over >= 1 else "less"
        by = (
            f"{percent(abs(over - 1))} {more} yes answers than"
            if round(over, 3) != 1
            else "as many yes answers as"
        )
        said.append(f"Calibration ratio <b>{ratio(over)}</b>: the model predicts {by} there were.")
    gap = reliability["expected_calibration_error"]
    if gap is not None:
        said.append(
            f"Expected calibration error <b>{loss(gap)}</b>: over all bins, predicted and observed shares "
            f"are {plain(100 * gap)} percentage points apart on average."
        )
    return said


def _picture(bins: Sequence[Mapping[str, Any]]) -> Picture:
    top = max(max(b["predicted"], b["observed"], b["to"]) for b in bins)
    end = min(1.0, math.ceil(top * 10 - 1e-9) / 10)
    shares = {"tickformat": ".0%"}
    figure = {
        "data": [_ideal(end), *_measured(bins)],
        "layout": layout(
            HEIGHT,
            xaxis=axis("predicted", anchor="y2", range=[0, end], **shares),
            yaxis=axis("observed", domain=[0.36, 1], range=[0, end * 1.02], **shares),
            yaxis2=axis("of messages", domain=[0, 0.27], rangemode="tozero", nticks=4, **shares),
        ),
    }
    key = [
        Entry("the chosen model", {"colour": "--accent", "shape": "circle", "dash": "none"}),
        Entry("as it should be", {"colour": "--muted", "dash": "7 4"}),
        Entry("share of the messages", {"colour": "--bars", "shape": "bar"}),
    ]
    return Picture(
        figure, HEIGHT, f"Observed against predicted share of yes answers in {len(bins)} bins.", key
    )


def _ideal(end: float) -> Figure:
    return {
        "type": "scatter",
        "mode": "lines",
        "x": [0, end],
        "y": [0, end],
        "line": {"color": "--muted", "width": 1.5, "dash": "dash"},
        "hoverinfo": "skip",
    }


def _measured(bins: Sequence[Mapping[str, Any]]) -> list[Figure]:
    """Points above and bars below, which tell the same when they are pointed at."""
    total = sum(b["weight"] for b in bins)
    told = {
        "customdata": [
            [
                f"{percent(b['from'])} to {percent(b['to'])}",
                percent(b["predicted"]),
                percent(b["observed"]),
                f"{count(b['weight'])} ({percent(b['weight'] / total)})",
            ]
            for b in bins
        ],
        "hovertemplate": (
            "bin %{customdata[0]}<br>predicted %{customdata[1]}<br>observed %{customdata[2]}"
            "<br>messages %{customdata[3]}<extra></extra>"
        ),
    }
    points = {
        "type": "scatter",
        "mode": "lines+markers",
        "x": [b["predicted"] for b in bins],
        "y": [b["observed"] for b in bins],
        "error_y": {
            "type": "data",
            "array": [2 * math.sqrt(b["observed"] * (1 - b["observed"]) / b["weight"]) for b in bins],
            "color": "--accent",
            "thickness": 1.4,
            "width": 4,
        },
        "line": {"color": "--accent", "width": 1.6},
        "marker": {"color": "--accent", "size": 8},
    }
    bars = {
        "type": "bar",
        "x": [(b["from"] + b["to"]) / 2 for b in bins],
        "width": [0.92 * (b["to"] - b["from"]) for b in bins],
        "y": [b["weight"] / total for b in bins],
        "yaxis": "y2",
        "marker": {"color": "--bars"},
    }
    return [points | told, bars | told]
