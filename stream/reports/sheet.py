"""A title, parts and figures in, one HTML page out that asks nothing of the network."""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Mapping, Sequence
from importlib.resources import files
from typing import Any

from stream.reports.markup import Section
from stream.reports.plotting import script
from stream.reports.texts import escaped, json_in_page

__all__ = ["figures_of", "sheet"]


def sheet(
    title: str,
    under: str,
    lead: Section,
    head: str,
    parts: Sequence[Section],
    data: Mapping[str, Any],
    closing: str,
) -> str:
    """The whole page as a text.

    `under`: HTML of the line below the title; `head`: HTML of the first part, to which `lead` is the way;
    `data`: what the page's script draws from; `closing`: HTML of the last line.
    """
    scripts = [script(), files("stream.reports").joinpath("page.js").read_text("utf-8")]
    style = files("stream.reports").joinpath("page.css").read_text("utf-8")
    ways = "".join(f'<li><a href="#{part.name}">{escaped(part.short)}</a></li>' for part in (lead, *parts))
    shown = "".join(
        f'<section id="{part.name}" aria-labelledby="{part.name}-title">'
        f'<h2 id="{part.name}-title">{escaped(part.title)}</h2>{part.body}</section>\n'
        for part in parts
    )
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{_policy(scripts)}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta name="color-scheme" content="light dark">\n<meta name="referrer" content="no-referrer">\n'
        '<link rel="icon" href="data:,">\n'
        f"<title>{escaped(title)}</title>\n<style>\n{style}</style>\n</head>\n<body>\n"
        f'<header><h1>{escaped(title)}</h1><p class="log">{under}</p></header>\n'
        f'<div class="columns"><nav aria-label="Parts"><ol>{ways}</ol></nav>\n<main>\n{head}\n'
        f"{shown}</main></div>\n<footer><p>{closing}</p></footer>\n"
        f'<script type="application/json" id="report">{json_in_page(data)}</script>\n'
        + "".join(f"<script>{text}</script>\n" for text in scripts)
        + "</body>\n</html>\n"
    )


def figures_of(parts: Sequence[Section]) -> dict[str, Any]:
    """Every picture's figure, by its name."""
    return {name: picture.figure for part in parts for name, picture in part.pictures.items()}


def _policy(scripts: Sequence[str]) -> str:
    """What the browser may do with this file: run these scripts and no other, load nothing."""
    digests = (base64.b64encode(hashlib.sha256(text.encode()).digest()).decode() for text in scripts)
    allowed = " ".join(f"'sha256-{digest}'" for digest in digests)
    return f"default-src 'none'; script-src {allowed}; style-src 'unsafe-inline'; img-src data: blob:"
