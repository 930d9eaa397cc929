"""The strongest tokens of the choice in, how much, how often and how steadily each speaks out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from stream.reports.drawing import Entry, Figure, LogPlaces, Picture, axis, layout, padded
from stream.reports.markup import Section, paragraphs, pictured, two_way
from stream.reports.texts import in_picture, named, percent, plain, weight

__all__ = ["tokens"]

HEIGHT = 380
STEADY = 0.9
_GIST = "The same tokens by how common they are (across, tenfold steps) and how much they say (up and down)."
_READING = (
    f"A full point kept its weight in at least {100 * STEADY:.0f} % of the time blocks; a hollow one came "
    "and went, so do not lean on it. Common tokens near the middle move many scores a little, rare ones "
    "far from it move few scores a lot."
)
_CAUTION = (
    "Weights are associations in this log, not causes: a token may stand for something that is not in the "
    "messages. Tokens that often stand together share or swap their weight under L1. <b>odds</b> is what a "
    "token multiplies the odds of a yes by, all else the same; <b>in messages</b> the share of messages "
    "that have it; <b>kept</b> the share of time blocks at whose end its weight was not zero. Tokens may be "
    "personal data: think before you pass this page on."
)


def tokens(document: Mapping[str, Any]) -> Section:
    """Two tables, towards yes and towards no, under a picture of both."""
    title, short = "What speaks for a yes, what for a no", "Tokens"
    yes, no = document["strongest"]["towards_yes"], document["strongest"]["towards_no"]
    if not yes and not no:
        body = paragraphs("The chosen model has only its intercept: no token has a weight.")
        return Section("tokens", title, short, body, {})
    picture = _picture([*yes, *no])
    listed = two_way("strongest", yes, no)
    body = f'<p class="caution">{_CAUTION}</p>{listed}' + pictured("tokens", picture, _GIST, _READING)
    return Section("tokens", title, short, body, {"tokens": picture})


def _picture(found: Sequence[Mapping[str, Any]]) -> Picture:
    known = [t for t in found if t["share"] is not None]
    places = LogPlaces((t["share"] for t in known), lambda share: f"{plain(100 * share)} %")
    figure = {
        "data": [_points(known, places)] if known else [],
        "layout": layout(
            HEIGHT,
            xaxis=places.axis("share of messages that have the token"),
            yaxis=axis(
                "weight, log-odds",
                range=padded([0.0, *(t["weight"] for t in known)], 0.1),
                zeroline=True,
                zerolinecolor="--axis",
                zerolinewidth=1.5,
            ),
        ),
    }
    key = [
        Entry("towards yes", {"colour": "--yes", "shape": "circle"}),
        Entry("towards no", {"colour": "--no", "shape": "square"}),
        Entry("came and went", {"colour": "--muted", "shape": "circle-open"}),
    ]
    return Picture(figure, HEIGHT, f"Weight against share of messages for {len(known)} tokens.", key)


def _points(known: Sequence[Mapping[str, Any]], places: LogPlaces) -> Figure:
    colours = ["--yes" if t["weight"] > 0 else "--no" for t in known]
    shapes = ["circle" if t["weight"] > 0 else "square" for t in known]
    steady = [t["kept"] is None or t["kept"] >= STEADY for t in known]
    return {
        "type": "scatter",
        "mode": "markers",
        "x": [places.of(t["share"]) for t in known],
        "y": [t["weight"] for t in known],
        "marker": {
            "color": colours,
            "symbol": [s if full else f"{s}-open" for s, full in zip(shapes, steady, strict=True)],
            "size": 9,
            "line": {"width": 1.8, "color": colours},
        },
        "customdata": [
            [in_picture(named(t), 60), weight(t["weight"]), percent(t["share"]), percent(t["kept"])]
            for t in known
        ],
        "hovertemplate": (
            "<b>%{customdata[0]}</b><br>weight %{customdata[1]}<br>in %{customdata[2]} of messages"
            "<br>kept in %{customdata[3]} of blocks<extra></extra>"
        ),
    }
