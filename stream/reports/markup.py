"""Cells and sentences in, pieces of HTML out; whoever passes a text here has escaped it."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from stream.reports.drawing import Picture
from stream.reports.texts import bdi, escaped, odds, percent, visible, weight

__all__ = ["Section", "facts", "paragraphs", "pictured", "table", "token_cell", "two_way"]


@dataclass(frozen=True, slots=True)
class Section:
    """A part of the page: `name` in its address, `title` (also `short` for the way there), `body` as HTML."""

    name: str
    title: str
    short: str
    body: str
    pictures: Mapping[str, Picture]


def paragraphs(*texts: str) -> str:
    """Each text as a paragraph."""
    return "".join(f"<p>{text}</p>" for text in texts if text)


def table(
    label: str, titles: Sequence[str], rows: Iterable[Sequence[str]], texts: int = 1, kind: str = ""
) -> str:
    """A table that scrolls inside itself; the first `texts` columns are words, the others numbers."""
    kinds = ['class="text"' if i < texts else 'class="number"' for i in range(len(titles))]
    head = "".join(f'<th scope="col" {k}>{t}</th>' for k, t in zip(kinds, titles, strict=True))
    body = "".join(
        "<tr>" + "".join(f"<td {k}>{cell}</td>" for k, cell in zip(kinds, row, strict=True)) + "</tr>"
        for row in rows
    )
    return (
        f'<div class="scroll {kind}" tabindex="0" role="region" aria-label="{escaped(label)}">'
        f"<table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table></div>"
    )


def facts(pairs: Iterable[tuple[str, str]], kind: str = "facts") -> str:
    """Names and values side by side."""
    rows = "".join(f"<div><dt>{name}</dt><dd>{value}</dd></div>" for name, value in pairs)
    return f'<dl class="{kind}">{rows}</dl>'


def pictured(name: str, picture: Picture, gist: str, reading: str, above: str = "", below: str = "") -> str:
    """A picture with controls above and below it: what it shows comes first, how it is read last."""
    key = "".join(f"<li>{_swatch(entry.look)}{escaped(entry.text)}</li>" for entry in picture.key)
    return (
        f'<figure><p>{gist}</p>{above}<div class="drawn"><ul class="key">{key}</ul>'
        f'<div class="picture" id="picture-{name}" role="img" style="height:{picture.height}px"'
        f' aria-label="{escaped(picture.summary)}"></div></div>{below}'
        f"<figcaption>{reading}</figcaption></figure>"
    )


def token_cell(token: Mapping[str, Any]) -> str:
    """Field, small, before the token."""
    field, text = str(token["field"]), str(token["token"])
    if not visible(field) and not visible(text):
        return "<em>name not known</em>"
    return f'<span class="field">{bdi(field, 40)}</span> {bdi(text) if text else ""}'


def two_way(
    name: str, towards_yes: Sequence[Mapping[str, Any]], towards_no: Sequence[Mapping[str, Any]]
) -> str:
    """The tokens that speak for a yes, and beside them those that speak for a no."""
    titles = ("token", "weight", "odds", "in messages", "kept")
    sides = []
    for side, words, tokens in (("yes", "Towards yes", towards_yes), ("no", "Towards no", towards_no)):
        rows = [
            (token_cell(t), weight(t["weight"]), odds(t["weight"]), percent(t["share"]), percent(t["kept"]))
            for t in tokens
        ]
        listed = table(f"Tokens {words.lower()}", titles, rows, kind="whole")
        sides.append(f'<div id="{name}-{side}" class="side {side}"><h3>{words}</h3>{listed}</div>')
    return f'<div class="sides">{"".join(sides)}</div>'


def _swatch(look: Mapping[str, str]) -> str:
    """A small drawing of how a line or point looks; `look`: colour, and dash or shape where it has them."""
    colour = f"var({look['colour']})"
    line = (
        f'<path d="M1 7H27" stroke="{colour}" stroke-width="2.5" stroke-dasharray="{look["dash"]}"/>'
        if "dash" in look
        else ""
    )
    shape = _SHAPES[look["shape"]].format(colour=colour) if "shape" in look else ""
    return f'<svg width="28" height="14" viewBox="0 0 28 14" aria-hidden="true">{line}{shape}</svg>'


_SHAPES = {
    "circle": '<circle cx="14" cy="7" r="4" fill="{colour}"/>',
    "square": '<rect x="10" y="3" width="8" height="8" fill="{colour}"/>',
    "diamond": '<path d="M14 2l5 5-5 5-5-5z" fill="{colour}"/>',
    "triangle-up": '<path d="M14 2l5 9H9z" fill="{colour}"/>',
    "triangle-down": '<path d="M14 12l5-9H9z" fill="{colour}"/>',
    "cross": '<path d="M12.5 2h3v3.5H19v3h-3.5V12h-3V8.5H9v-3h3.5z" fill="{colour}"/>',
    "star": (
        '<path d="M14 1l1.7 4.2 4.5.3-3.5 2.9 1.1 4.4L14 10.4l-3.8 2.4 1.1-4.4-3.5-2.9 4.5-.3z"'
        ' fill="{colour}"/>'
    ),
    "circle-open": '<circle cx="14" cy="7" r="5" fill="none" stroke="{colour}" stroke-width="1.8"/>',
    "square-open": '<path d="M9 2h10v10H9z" fill="none" stroke="{colour}" stroke-width="1.8"/>',
    "diamond-open": '<path d="M14 1l6 6-6 6-6-6z" fill="none" stroke="{colour}" stroke-width="1.8"/>',
    "bar": '<rect x="4" y="2" width="20" height="10" fill="{colour}"/>',
}
