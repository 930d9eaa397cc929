"""The tuning document in, one HTML file out that asks nothing of the network."""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Mapping, Sequence
from importlib.resources import files
from pathlib import Path
from typing import Any

from stream.durable import write_file
from stream.reports.answer import answer, warnings
from stream.reports.markup import Section
from stream.reports.plotting import script
from stream.reports.sections import sections
from stream.reports.sections.paths import models
from stream.reports.sections.thresholds import budget
from stream.reports.texts import bdi, count, escaped, json_in_page, percent

__all__ = ["page", "write_report"]

_CLOSING = (
    "Weights are associations in the log, not causes. A person decides what follows from a score; where "
    "scores touch people, local rules and licensed practice come first. Tokens may be personal data, and "
    "this file holds some."
)


def write_report(document: Mapping[str, Any], path: Path) -> None:
    """Draws the report of a finished tune into the file `path` (0600, some 5 MB), whole or not at all.

    `document` is what tuning.json holds. The same document gives the same bytes. Raises what
    `stream.durable.write_file` does.
    """
    write_file(path, page(document).encode("utf-8", "replace"))


def page(document: Mapping[str, Any]) -> str:
    """The whole page as a text."""
    parts = sections(document)
    scripts = [script(), files("stream.reports").joinpath("page.js").read_text("utf-8")]
    style = files("stream.reports").joinpath("page.css").read_text("utf-8")
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{_policy(scripts)}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta name="color-scheme" content="light dark">\n<meta name="referrer" content="no-referrer">\n'
        '<link rel="icon" href="data:,">\n'
        f"<title>Tuning report</title>\n<style>\n{style}</style>\n</head>\n<body>\n{_body(document, parts)}"
        f'<script type="application/json" id="report">{json_in_page(_data(document, parts))}</script>\n'
        + "".join(f"<script>{text}</script>\n" for text in scripts)
        + "</body>\n</html>\n"
    )


def _policy(scripts: Sequence[str]) -> str:
    """What the browser may do with this file: run these scripts and no other, load nothing."""
    digests = (base64.b64encode(hashlib.sha256(text.encode()).digest()).decode() for text in scripts)
    allowed = " ".join(f"'sha256-{digest}'" for digest in digests)
    return f"default-src 'none'; script-src {allowed}; style-src 'unsafe-inline'; img-src data: blob:"


def _body(document: Mapping[str, Any], parts: Sequence[Section]) -> str:
    ways = "".join(f'<li><a href="#{part.name}">{escaped(part.short)}</a></li>' for part in parts)
    shown = "".join(
        f'<section id="{part.name}" aria-labelledby="{part.name}-title">'
        f'<h2 id="{part.name}-title">{escaped(part.title)}</h2>{part.body}</section>\n'
        for part in parts
    )
    return (
        f'<header><h1>Tuning report</h1><p class="log">{_log(document["log"])}</p></header>\n'
        '<div class="columns">'
        f'<nav aria-label="Parts"><ol><li><a href="#choice">Choice</a></li>{ways}</ol></nav>\n<main>\n'
        f"{warnings(document)}{answer(document)}\n"
        "<noscript><p>Pictures, slider and budget need JavaScript; texts and tables do not.</p></noscript>\n"
        f"{shown}</main></div>\n<footer><p>{_CLOSING}</p></footer>\n"
    )


def _log(log: Mapping[str, Any]) -> str:
    names = [bdi(str(name), 60) for name in log["files"]]
    shown = ", ".join(names[:3]) + (f" and {len(names) - 3} more" if len(names) > 3 else "")
    text = f"{shown}: {count(log['messages'])} messages, {percent(log['base_rate'])} of the outcomes are yes"
    if log["first_time"] and log["last_time"]:
        text += f", {escaped(str(log['first_time']))} to {escaped(str(log['last_time']))}"
    return text


def _data(document: Mapping[str, Any], parts: Sequence[Section]) -> dict[str, Any]:
    figures = {name: picture.figure for part in parts for name, picture in part.pictures.items()}
    return {"figures": figures, "models": models(document), "budget": budget(document)}
