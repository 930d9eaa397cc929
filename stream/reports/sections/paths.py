"""Weights at each strength in, the picture of tokens that come in one by one out, and each model of it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from stream.reports.drawing import Entry, Figure, LogPlaces, Picture, axis, layout, padded, vertical
from stream.reports.markup import Section, paragraphs, pictured, two_way
from stream.reports.texts import count, difference, escaped, in_picture, loss, named, percent, plain, weight

__all__ = ["models", "paths"]

HEIGHT = 520
INNER = HEIGHT - 68
NAMED = 14
APART = 17
_LABEL = 18
_HOVER = 60
_GIST = (
    "Each line is one token's weight. On the left the penalty is so strong that every weight is exactly "
    "zero; as it weakens, tokens come in one by one, those with the most evidence first."
)
_READING = (
    "Further from the middle means that a token says more. The dotted line is the model listed below: move "
    "it with the slider, or click in the picture. Two tokens that often stand in the same messages share "
    "their weight, and under L1 they may swap places: one at zero does not mean that it says nothing, only "
    "that others say it already."
)


def paths(document: Mapping[str, Any]) -> Section:
    """The picture, the slider and the list of tokens at the strength that it points to."""
    title, short = "Which tokens a strength keeps", "Weight paths"
    at = _chosen(document)
    chosen = document["models"][at] if document["models"] else None
    if chosen is None or not document["paths"]["tokens"]:
        body = paragraphs("Every model has only its intercept: no token has a weight at any strength.")
        return Section("paths", title, short, body, {})
    picture = _picture(document, document["models"][at]["strength"])
    last = len(document["models"]) - 1
    slider = (
        '<div class="slider"><label for="strength">Model at strength</label>'
        f'<input type="range" id="strength" min="0" max="{last}" value="{at}" step="1"'
        ' aria-describedby="model-said"><div class="ends"><span>strong, few weights</span>'
        '<span>weak, many weights</span></div><p id="model-said" aria-live="polite">'
        f"{escaped(_said(document, chosen))}</p></div>"
    )
    rate = plain(document["paths"]["learning_rate"])
    tokens = len(document["paths"]["tokens"])
    shown = (
        f"Learning rate {rate}; the {tokens} tokens that move scores most: largest weight times the square "
        "root of the share of messages that have the token."
    )
    listed = two_way("model", chosen["towards_yes"], chosen["towards_no"])
    body = (
        pictured("paths", picture, _GIST, f"{_READING} {shown}", below=slider)
        + f'<div id="model">{listed}</div>'
    )
    return Section("paths", title, short, body, {"paths": picture})


def models(document: Mapping[str, Any]) -> dict[str, Any]:
    """What the slider steps through: place on the axis, words about the model, cells of its two tables."""
    places = LogPlaces(document["paths"]["strengths"])
    return {
        "chosen": _chosen(document),
        "steps": [
            {
                "x": places.of(model["strength"]),
                "value": f"{plain(model['strength'])}, {count(model['nnz'])} weights",
                "said": _said(document, model),
            }
            for model in document["models"]
        ],
        "tables": [
            two_way("model", model["towards_yes"], model["towards_no"]) for model in document["models"]
        ],
    }


def _chosen(document: Mapping[str, Any]) -> int:
    indices = [model["index"] for model in document["models"]]
    index = document["choice"]["index"]
    return indices.index(index) if index in indices else 0


def _said(document: Mapping[str, Any], model: Mapping[str, Any]) -> str:
    unit = document["grid"]["unit"]
    at = {c["index"]: c for c in document["candidates"]}.get(model["index"])
    text = f"{unit} = {plain(model['strength'])}: {count(model['nnz'])} weights"
    text += f", log loss {loss(model['log_loss'])}"
    if model["index"] == document["choice"]["index"]:
        text += " (the choice)"
    if at is None:
        return text
    if model["index"] == document["choice"]["best"]:
        return text + ", the lowest of all"
    return text + f"; {difference(at['difference'], at['log_loss_se'])} over the lowest"


def _picture(document: Mapping[str, Any], chosen: float) -> Picture:
    drawn = document["paths"]
    places = LogPlaces(drawn["strengths"])
    x = [places.of(strength) for strength in drawn["strengths"]]
    strengths = [plain(strength) for strength in drawn["strengths"]]
    traces = [_line(token, x, strengths, rank) for rank, token in enumerate(drawn["tokens"])]
    up = padded([0.0, *(w for token in drawn["tokens"] for w in token["weights"])])
    figure = {
        "data": traces,
        "layout": layout(
            HEIGHT,
            margin={"l": 62, "r": 150, "t": 14, "b": 54},
            xaxis=places.axis(f"{document['grid']['unit']}, weaker →", falling=True),
            yaxis=axis(
                "weight, log-odds", range=up, zeroline=True, zerolinecolor="--axis", zerolinewidth=1.5
            ),
            shapes=[vertical(places.of(chosen))],
            annotations=_labels(drawn["tokens"], up),
        ),
    }
    key = [
        Entry("towards yes", {"colour": "--yes", "dash": "none"}),
        Entry("towards no", {"colour": "--no", "dash": "7 4"}),
    ]
    return Picture(figure, HEIGHT, _summary(drawn), key)


def _line(token: Mapping[str, Any], x: Sequence[float], strengths: Sequence[str], rank: int) -> Figure:
    weights = token["weights"]
    yes = _side(weights) > 0
    return {
        "type": "scatter",
        "mode": "lines",
        "x": list(x),
        "y": _without_rests(weights),
        "line": {
            "color": "--yes" if yes else "--no",
            "width": 2.2 if rank < NAMED else 1.3,
            "dash": "solid" if yes else "6px,2px",
        },
        "opacity": 0.95 if rank < NAMED else 0.6,
        "meta": [in_picture(named(token), _HOVER), percent(token["share"])],
        "customdata": [[s, weight(w)] for s, w in zip(strengths, weights, strict=True)],
        "hovertemplate": (
            "<b>%{meta[0]}</b><br>weight %{customdata[1]} at strength %{customdata[0]}"
            "<br>in %{meta[1]} of messages<extra></extra>"
        ),
    }


def _side(weights: Sequence[float]) -> float:
    """Positive for a token towards yes: by its weight where the penalty is weakest, but not zero."""
    return next((w for w in reversed(weights) if w), 0.0)


def _without_rests(weights: Sequence[float]) -> list[float | None]:
    """Weights, and None where a line would rest on zero: forty lines on one another tell nothing."""
    padded_out = [0.0, *weights, 0.0]
    return [None if not any(padded_out[i : i + 3]) else w for i, w in enumerate(weights)]


def _labels(tokens: Sequence[Mapping[str, Any]], up: Sequence[float]) -> list[Figure]:
    """Names at the right ends of the first lines, moved apart so that none covers another."""
    ends = sorted(((t["weights"][-1], t) for t in tokens if t["weights"][-1]), key=lambda end: -abs(end[0]))
    ends = sorted(ends[:NAMED], key=lambda end: -end[0])
    scale = INNER / (up[1] - up[0])
    wanted = [(up[1] - end) * scale for end, _ in ends]
    return [
        {
            "xref": "paper",
            "x": 1,
            "y": end,
            "text": in_picture(named(token), _LABEL),
            "showarrow": True,
            "arrowhead": 0,
            "arrowwidth": 0.8,
            "arrowcolor": "--axis",
            "ax": 16,
            "ay": place - want,
            "xanchor": "left",
            "font": {"size": 12, "color": "--yes" if _side(token["weights"]) > 0 else "--no"},
        }
        for (end, token), want, place in zip(ends, wanted, _apart(wanted), strict=True)
    ]


def _apart(wanted: Sequence[float]) -> list[float]:
    """Places near the wanted ones (ascending), at least APART from each other and within the picture."""
    places: list[float] = []
    for want in wanted:
        places.append(max(want, places[-1] + APART) if places else max(want, 8.0))
    limit = float(INNER)
    for i in range(len(places) - 1, -1, -1):
        places[i] = min(places[i], limit)
        limit = places[i] - APART
    return places


def _summary(drawn: Mapping[str, Any]) -> str:
    first = ", ".join(named(token) for token in drawn["tokens"][:5])
    said = f"Weights of {len(drawn['tokens'])} tokens against the strength of the penalty."
    return f"{said} The strongest: {first}."
