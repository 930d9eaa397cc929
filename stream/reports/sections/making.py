"""Settings, log and program in, all that is needed to make the same report again out."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from typing import Any

from stream.reports.markup import Section, facts, table
from stream.reports.plotting import script_version
from stream.reports.texts import bdi, count, escaped, percent, plain, visible

__all__ = ["making"]


def making(document: Mapping[str, Any]) -> Section:
    """Log, grid, passes, command and every setting."""
    log, grid = document["log"], document["grid"]
    rates = ", ".join(plain(rate) for rate in grid["learning_rates"])
    strengths = grid["strengths"]
    span = f", {plain(strengths[0])} to {plain(strengths[-1])}" if strengths else ""
    strongest = "searched from the log" if grid["searched"] else "given"
    pairs = [
        ("command", f"<code>{escaped(visible(document['command']))}</code>"),
        ("program", f"bedload {escaped(visible(str(document['program'])))}"),
        ("log", "<br>".join(bdi(str(name), 200) for name in log["files"])),
        ("digest of the log", f"<code>{escaped(str(log['digest']))}</code>"),
        (
            "messages",
            f"{count(log['messages'])}, {count(log['labelled'])} with an outcome, "
            f"{count(log['rejected'])} rejected",
        ),
        ("base rate", percent(log["base_rate"])),
        ("times", _times(log)),
        (
            "strengths",
            f"{len(strengths)} of <code>{escaped(grid['unit'])}</code>{span}; the strongest was {strongest}",
        ),
        ("learning rates", rates),
        ("passes", "<br>".join(escaped(visible(line)) for line in document["passes"]) or "one"),
        ("seconds", f"{document['seconds']:,.1f}"),
        ("drawn with", f"plotly.js {escaped(script_version())}, inside this file"),
    ]
    rows = [(escaped(visible(key)), bdi(value, 200)) for key, value in _flat(document["settings"])]
    listed = table("Settings", ["setting", "value"], rows, texts=2)
    body = (
        facts(pairs, "facts wide")
        + f"<details data-printed><summary>All settings</summary>{listed}</details>"
    )
    return Section("making", "How this was made", "Settings", body, {})


def _times(log: Mapping[str, Any]) -> str:
    if not log["first_time"] or not log["last_time"]:
        return "the messages carry none"
    return f"{escaped(str(log['first_time']))} to {escaped(str(log['last_time']))}"


def _flat(value: Any, above: str = "") -> Iterator[tuple[str, str]]:
    """Names joined by dots, values as JSON; a list of mappings is numbered."""
    if isinstance(value, Mapping):
        for key, inner in value.items():
            yield from _flat(inner, f"{above}.{key}" if above else str(key))
    elif isinstance(value, list) and value and all(isinstance(item, Mapping) for item in value):
        for i, inner in enumerate(value, 1):
            yield from _flat(inner, f"{above}[{i}]")
    else:
        yield above, json.dumps(value, ensure_ascii=False)
