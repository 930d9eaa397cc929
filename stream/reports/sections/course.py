"""Log loss of each time block in, the course of a few strengths over the log out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from stream.reports.drawing import Entry, Figure, Picture, axis, layout, padded, swatch_dash, vertical
from stream.reports.markup import Section, paragraphs, pictured
from stream.reports.sections.sizes import roles
from stream.reports.texts import UNKNOWN, count, escaped, loss, plain

__all__ = ["course"]

Candidate = Mapping[str, Any]

HEIGHT = 520
_LOOKS = {
    "choice": ("--accent", "solid", 2.6),
    "lowest loss": ("--series-3", "dash", 1.8),
    "half the weights": ("--series-4", "dashdot", 1.8),
    "strongest": ("--muted", "dot", 1.8),
    "weakest": ("--series-6", "longdash", 1.8),
}
_GIST = (
    "Above, log loss in each time block, always predicted before learning, so no model has seen the "
    "messages that it is judged by. Below, how much more each has lost than the choice, on average over all "
    "messages so far."
)
_READING = (
    "All models ride the same waves, because some hours are harder than others; the lower picture takes the "
    "waves out. Above its zero is worse than the choice (the strongest penalty may leave the picture). A "
    "line that still falls at the right end belongs to a model that has not finished learning. The shaded "
    "part is the last part of the log, whose figures this page compares."
)


def course(document: Mapping[str, Any]) -> Section:
    """The picture of up to five candidates over the messages of the log."""
    title, short = "Through the log, block by block", "Over time"
    known = _known(document)
    if not document["blocks"]["messages"] or not known:
        body = paragraphs("The log has no time blocks to draw.")
        return Section("course", title, short, body, {})
    picture = _picture(document, known)
    first, last = document["log"]["first_time"], document["log"]["last_time"]
    times = f" The log runs from {escaped(str(first))} to {escaped(str(last))}." if first and last else ""
    return Section(
        "course", title, short, pictured("course", picture, _GIST, _READING + times), {"course": picture}
    )


def _known(document: Mapping[str, Any]) -> dict[str, Candidate]:
    """The drawn candidates by what they are known for, each once, the choice first."""
    by_index = {c["index"]: c for c in document["candidates"]}
    found = {}
    for name, index in roles(document).items():
        drawn = [role for role in name.split(", ") if role in _LOOKS]  # a runner-up only as something else
        if drawn and index in by_index:
            found[", ".join(drawn)] = by_index[index]
    chosen = by_index[document["choice"]["index"]]
    unit = document["grid"]["unit"]
    same_rate = [c for c in by_index.values() if c["learning_rate"] == chosen["learning_rate"]]
    for name, pick in (("strongest", max), ("weakest", min)):
        end = pick(same_rate, key=lambda c: c[unit])
        if all(end is not c for c in found.values()):
            found[name] = end
    return found


def _picture(document: Mapping[str, Any], known: Mapping[str, Candidate]) -> Picture:
    ends = document["blocks"]["messages"]
    unit = document["grid"]["unit"]
    sizes = [end - start for start, end in zip([0, *ends], ends, strict=False)]
    chosen = next(iter(known.values()))["block_log_loss"]
    above, below, key = [], [], []
    for name, candidate in known.items():
        colour, dash, width = _LOOKS[name.split(", ")[0]]
        line = {"color": colour, "width": width, "dash": dash}
        above.append(_trace(ends, candidate["block_log_loss"], name, line, "y"))
        key.append(Entry(_words(name, candidate, unit), {"colour": colour, "dash": swatch_dash(dash)}))
        if candidate["block_log_loss"] is not chosen:
            more = _running(candidate["block_log_loss"], chosen, sizes)
            below.append((name, _trace(ends, more, name, line, "y2")))
    figure = {"data": [*above, *(trace for _, trace in below)], "layout": _layout(document, above, below)}
    return Picture(figure, HEIGHT, f"Log loss over {count(ends[-1])} messages for {', '.join(known)}.", key)


def _words(name: str, candidate: Candidate, unit: str) -> str:
    return f"{name}: {plain(candidate[unit])}, {count(candidate['nnz'])} weights"


def _trace(ends: Sequence[int], values: Sequence[float | None], name: str, line: Figure, up: str) -> Figure:
    told = "log loss" if up == "y" else "more than the choice"
    signs = [loss(v) if up == "y" else UNKNOWN if v is None else f"{v:+.5f}" for v in values]
    return {
        "type": "scatter",
        "mode": "lines",
        "x": list(ends),
        "y": list(values),
        "yaxis": up,
        "line": line,
        "name": name,
        "customdata": [[count(end), text] for end, text in zip(ends, signs, strict=True)],
        "hovertemplate": (
            f"<b>{name}</b><br>through message %{{customdata[0]}}<br>{told} %{{customdata[1]}}<extra></extra>"
        ),
    }


def _running(
    values: Sequence[float | None], chosen: Sequence[float | None], sizes: Sequence[int]
) -> list[float | None]:
    """Mean difference to the choice from the first block on; None until a block has both."""
    total, messages, means = 0.0, 0, list[float | None]()
    for value, other, size in zip(values, chosen, sizes, strict=True):
        if value is not None and other is not None:
            total += (value - other) * size
            messages += size
        means.append(total / messages if messages else None)
    return means


def _layout(
    document: Mapping[str, Any], above: Sequence[Figure], below: Sequence[tuple[str, Figure]]
) -> Figure:
    ends, first = document["blocks"]["messages"], document["blocks"]["last_part_from"]
    start = ends[first - 1] if first else 0
    shade = vertical(start) | {"type": "rect", "x1": ends[-1], "fillcolor": "--shade", "line": {"width": 0}}
    return layout(
        HEIGHT,
        xaxis=axis("messages", anchor="y2", range=[0, ends[-1]], tickformat=",", nticks=6),
        yaxis=axis("log loss in the block", domain=[0.46, 1], range=padded(_numbers(above), 0.05)),
        yaxis2=axis(
            "more than the choice",
            domain=[0, 0.38],
            range=_telling(below),
            zeroline=True,
            zerolinecolor="--axis",
            zerolinewidth=1.5,
        ),
        shapes=[shade | {"layer": "below"}],
        annotations=[
            {
                "x": (start + ends[-1]) / 2,
                "yref": "paper",
                "y": 1,
                "yanchor": "bottom",
                "text": "last part",
                "showarrow": False,
                "font": {"size": 12, "color": "--muted"},
            }
        ],
        margin={"l": 62, "r": 18, "t": 24, "b": 54},
    )


def _numbers(traces: Sequence[Figure]) -> list[float]:
    return [v for trace in traces for v in trace["y"] if v is not None] or [0.0]


def _telling(below: Sequence[tuple[str, Figure]]) -> list[float]:
    """The range of the lower picture without the first eighth, which is noise, and without the strongest
    penalty, which has hardly a weight: both would flatten the others.
    """
    kept = [t for name, t in below if name != "strongest"] or [t for _, t in below]
    return padded([0.0, *(v for t in kept for v in t["y"][len(t["y"]) // 8 :] if v is not None)], 0.12)
