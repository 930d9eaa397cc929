"""What each threshold flags in, precision and recall against it and an answer to a budget of alerts out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from stream.reports.drawing import Entry, Picture, axis, layout, swatch_dash, vertical
from stream.reports.markup import Section, paragraphs, pictured, table
from stream.reports.texts import count, percent, ratio

__all__ = ["budget", "thresholds"]

HEIGHT = 400
LISTED = 12
USUAL_SHARE = 0.02
_LINES = (
    ("precision", "precision: flagged messages that are a yes", "--series-1", "solid"),
    ("recall", "recall: yes answers that are flagged", "--series-2", "dash"),
    ("flagged", "flagged: share of all messages", "--series-3", "dot"),
)
_GIST = (
    "Flag every message whose probability is at least the threshold (across): how many of the flagged are "
    "right, how many of all yes answers are found, how many messages are flagged."
)
_READING = (
    "A lower threshold finds more and is wrong more often. The dotted line is the threshold for the budget "
    "above. Measured on the last part of the log; the feed may shift."
)


def thresholds(document: Mapping[str, Any]) -> Section:
    """The budget's question, the picture and a few thresholds as a table."""
    title, short = "What a threshold gives", "Thresholds"
    rows = document["thresholds"]["rows"]
    if not rows:
        body = paragraphs("No labelled message was scored in the last part of the log.")
        return Section("thresholds", title, short, body, {})
    picture = _picture(rows)
    question = _question(document["thresholds"]["messages_per_day"])
    body = question + pictured("thresholds", picture, _GIST, _READING) + _listed(document["thresholds"])
    return Section("thresholds", title, short, body, {"thresholds": picture})


def budget(document: Mapping[str, Any]) -> dict[str, Any]:
    """What the question is answered from."""
    found = document["thresholds"]
    rows = [[row["threshold"], row["flagged"], row["precision"], row["recall"]] for row in found["rows"]]
    return {"messages_per_day": found["messages_per_day"], "rows": rows}


def _question(per_day: float | None) -> str:
    if per_day:
        value, unit = f"{per_day * USUAL_SHARE:.1g}", f"alerts a day, of {count(per_day)} messages a day"
        value = str(max(1, round(float(value))))
    else:
        value, unit = f"{100 * USUAL_SHARE:g}", "% of the messages (the log does not say how many a day has)"
    return (
        '<div class="budget"><label for="budget">People can look at</label> '
        f'<input type="number" id="budget" min="0" step="any" value="{value}" inputmode="decimal"> '
        f'<span>{unit}</span><output id="budget-said" for="budget" aria-live="polite"></output></div>'
    )


def _picture(rows: Sequence[Mapping[str, Any]]) -> Picture:
    told = [
        [ratio(row["threshold"]), percent(row["flagged"]), percent(row["precision"]), percent(row["recall"])]
        for row in rows
    ]
    traces = [
        {
            "type": "scatter",
            "mode": "lines",
            "x": [row["threshold"] for row in rows],
            "y": [row[name] for row in rows],
            "line": {"color": colour, "width": 2.2, "dash": dash},
            "customdata": told,
            "hovertemplate": (
                "<b>threshold %{customdata[0]}</b><br>flagged %{customdata[1]}<br>precision %{customdata[2]}"
                "<br>recall %{customdata[3]}<extra></extra>"
            ),
        }
        for name, _, colour, dash in _LINES
    ]
    top = max(row["threshold"] for row in rows)
    figure = {
        "data": traces,
        "layout": layout(
            HEIGHT,
            xaxis=axis("threshold", range=[0, max(top, 0.05) * 1.02]),
            yaxis=axis("share", range=[0, 1.02], tickformat=".0%"),
            shapes=[vertical(top)],
        ),
    }
    key = [Entry(words, {"colour": c, "dash": swatch_dash(dash)}) for _, words, c, dash in _LINES]
    return Picture(figure, HEIGHT, f"Precision, recall and flagged share at {len(rows)} thresholds.", key)


def _listed(found: Mapping[str, Any]) -> str:
    """Rows at about equal steps of the flagged share's order, the first and last included."""
    rows, per_day = found["rows"], found["messages_per_day"]
    last = len(rows) - 1
    picked = sorted({round(i * last / (LISTED - 1)) for i in range(LISTED)})
    titles = ["threshold", "flagged", *(["alerts a day"] if per_day else []), "precision", "recall"]
    cells = [
        [
            ratio(rows[i]["threshold"]),
            percent(rows[i]["flagged"]),
            *([count(rows[i]["flagged"] * per_day)] if per_day else []),
            percent(rows[i]["precision"]),
            percent(rows[i]["recall"]),
        ]
        for i in picked
    ]
    return table("Thresholds", titles, cells, texts=0)
