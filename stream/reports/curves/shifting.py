"""Log loss window by window in; learners beside batch fits of all of it, and of what came before, out."""

from __future__ import annotations

from typing import Any

from stream.reports.curves.looks import Row, learner_look, spoken
from stream.reports.drawing import Entry, Picture, axis, layout, padded, swatch_dash
from stream.reports.markup import Section, pictured, table
from stream.reports.texts import UNKNOWN, count, loss, percent, plain

__all__ = ["shifting"]

HEIGHT = 420
_BATCH = {
    "hindsight": ("batch fit in hindsight", "--series-3", "dash"),
    "all_before": ("refitted on all before", "--ink", "solid"),
    "last_window": ("refitted on the last window", "--series-6", "dashdot"),
}
_GIST = (
    "Mean log loss in each window, under the outcomes as they came. Learners are judged by predictions from "
    "before each update, refitted batch models by messages that they have not seen; the fit in hindsight has "
    "seen them all, and shows what the best fixed model could have lost."
)
_READING = (
    "Where a learner runs below the model in hindsight, it has followed a feed that no fixed model fits. "
    "Where a fit of the last window alone runs below one of everything before, the past misleads."
)

Line = tuple[str, str, str, list[float | None], float | None]


def shifting(document: Row) -> Section | None:
    """None where no windows were asked for."""
    if not document["windows"]:
        return None
    pictures, body = {}, []
    last = len(document["windows"]) - 1
    for i, windows in enumerate(document["windows"]):
        lines = _lines(windows)
        name = f"windows-{i}"
        pictures[name] = _picture(windows, lines)
        body.append(f"<h3>Strength {plain(windows['strength'])}</h3>")
        body.append(pictured(name, pictures[name], _GIST if i == 0 else "", _READING if i == last else ""))
        body.append(_table(windows, lines))
    return Section("windows", "Window by window", "Windows", "".join(body), pictures)


def _lines(windows: Row) -> list[Line]:
    """Name, colour, dash, losses and their mean of everything that is drawn."""
    means = windows["means"]
    found: list[Line] = []
    if windows["truth"]:
        found.append(("truth", "--muted", "dot", windows["truth"], means["truth"]))
    for i, (one, mean) in enumerate(zip(windows["learners"], means["learners"], strict=True)):
        dash = "solid" if i == 0 else "longdash"
        found.append((spoken(one["name"]), learner_look(i)[0], dash, one["losses"], mean))
    for key, look in _BATCH.items():
        found.append((*look, windows["batch"][key], means["batch"][key]))
    return found


def _picture(windows: Row, lines: list[Line]) -> Picture:
    through = windows["through"]
    values = [v for *_, losses, _ in lines for v in losses if v is not None]
    traces = [_trace(through, *line[:4]) for line in lines]
    figure = {
        "data": traces,
        "layout": layout(
            HEIGHT,
            xaxis=axis("messages", range=[0, through[-1] * 1.02], tickformat=",", nticks=6),
            yaxis=axis("log loss in the window", range=padded(values)),
        ),
    }
    key = [Entry(name, {"colour": c, "dash": swatch_dash(d)}) for name, c, d, *_ in lines]
    return Picture(figure, HEIGHT, "Log loss window by window of learners and batch fits.", key)


def _trace(
    through: list[int], name: str, colour: str, dash: str, losses: list[float | None]
) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "lines+markers",
        "x": through,
        "y": losses,
        "line": {"color": colour, "width": 2, "dash": dash},
        "marker": {"color": colour, "size": 5},
        "name": name,
        "customdata": [[count(t), loss(v)] for t, v in zip(through, losses, strict=True)],
        "hovertemplate": f"<b>{name}</b><br>through %{{customdata[0]}}<br>%{{customdata[1]}}<extra></extra>",
    }


def _table(windows: Row, lines: list[Line]) -> str:
    titles = ("through", "base rate", *(name for name, *_ in lines))
    rows = [
        (count(end), percent(windows["base_rate"][i]), *(_cell(losses[i]) for *_, losses, _ in lines))
        for i, end in enumerate(windows["through"])
    ]
    rows.append(("mean from the 2nd on", "", *(_cell(mean) for *_, mean in lines)))
    return table(f"Windows at strength {plain(windows['strength'])}", titles, rows)


def _cell(value: float | None) -> str:
    return UNKNOWN if value is None else loss(value)
