"""The tuning document in, one HTML file out that asks nothing of the network."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from stream.durable import write_file
from stream.reports.answer import answer, warnings
from stream.reports.markup import Section
from stream.reports.sections import sections
from stream.reports.sections.paths import models
from stream.reports.sections.thresholds import budget
from stream.reports.sheet import figures_of, sheet
from stream.reports.texts import bdi, count, escaped, percent

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
    head = (
        f"{warnings(document)}{answer(document)}\n"
        "<noscript><p>Pictures, slider and budget need JavaScript; texts and tables do not.</p></noscript>"
    )
    data = {"figures": figures_of(parts), "models": models(document), "budget": budget(document)}
    lead = Section("choice", "Choice", "Choice", "", {})
    return sheet("Tuning report", _log(document["log"]), lead, head, parts, data, _CLOSING)


def _log(log: Mapping[str, Any]) -> str:
    names = [bdi(str(name), 60) for name in log["files"]]
    shown = ", ".join(names[:3]) + (f" and {len(names) - 3} more" if len(names) > 3 else "")
    text = f"{shown}: {count(log['messages'])} messages, {percent(log['base_rate'])} of the outcomes are yes"
    if log["first_time"] and log["last_time"]:
        text += f", {escaped(str(log['first_time']))} to {escaped(str(log['last_time']))}"
    return text
