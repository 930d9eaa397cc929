"""The document of `converge` in, one HTML file out that asks nothing of the network."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from stream.durable import write_file
from stream.reports.curves.falling import excess, gaps, seconds
from stream.reports.curves.looks import BATCH, Row, at_strength, row_name, share
from stream.reports.curves.shifting import shifting
from stream.reports.curves.supports import supports
from stream.reports.markup import Section, facts, table
from stream.reports.plotting import script_version
from stream.reports.sheet import figures_of, sheet
from stream.reports.texts import UNKNOWN, bdi, count, escaped, loss, percent, plain, ratio, visible

__all__ = ["convergence_page", "write_convergence"]

_CLOSING = (
    "A small gap says that the weights fit this feed as well as a batch fit does, not that the model is "
    "right. Weights are associations, not causes."
)


def write_convergence(document: Mapping[str, Any], path: Path) -> None:
    """Draws the report into the file `path` (0600, some 5 MB), whole or not at all.

    The same document gives the same bytes. Raises what `stream.durable.write_file` does.
    """
    write_file(path, convergence_page(document).encode("utf-8", "replace"))


def convergence_page(document: Mapping[str, Any]) -> str:
    """The whole page as a text."""
    windows = shifting(document)
    parts = [gaps(document), *([excess(document)] if document["has_truth"] else []), supports(document)]
    parts += [*([windows] if windows else []), seconds(document), _tables(document), _making(document)]
    lead = Section("end", "At the end", "At the end", "", {})
    return sheet(
        "Convergence report",
        _under(document),
        lead,
        _head(document),
        parts,
        {"figures": figures_of(parts)},
        _CLOSING,
    )


def _under(document: Row) -> str:
    log = document["log"]
    scenario = log["scenario"]
    if scenario is None:
        name = ", ".join(bdi(str(name), 60) for name in log["files"][:3])
        name += f" and {len(log['files']) - 3} more" if len(log["files"]) > 3 else ""
    else:
        name = f"Scenario {escaped(str(scenario['scenario']))}, seed {scenario['seed']}"
    return (
        f"{name}: {count(log['messages'])} messages learned, {count(log['fresh'])} fresh ones after them, "
        f"{percent(log['base_rate'])} of the outcomes yes"
    )


def _head(document: Row) -> str:
    """What holds after all messages."""
    titles = ("weights of", "gap", "fresh loss", "F1", "non-zero")
    tables = []
    for strength in document["strengths"]:
        fit = at_strength(document, strength)[-1]
        batch = fit["batch"]
        rows = [(BATCH, f"≤ {share(batch['proved_gap'])}", UNKNOWN, UNKNOWN, count(batch["nnz"]))]
        rows += [
            (
                escaped(row_name(one["name"], one["epochs"])),
                share(one["gap"]),
                share(one["fresh_over_batch"], signed=True),
                ratio(one["against_batch"]["f1"]),
                count(one["nnz"]),
            )
            for one in fit["learned"]
        ]
        tables.append(f"<h3>Strength {plain(strength)}</h3>")
        tables.append(table(f"At the end, strength {plain(strength)}", titles, rows))
        tables.append(_loose(at_strength(document, strength)))
    return (
        '<section class="answer" id="end" aria-labelledby="end-title">'
        '<p class="rule">Learned online, beside batch fits of the same messages at the same strength</p>'
        f'<h2 id="end-title">After {count(document["log"]["messages"])} messages</h2>'
        + "".join(tables)
        + "<p>The gap of a learner is that of its objective, mean log loss and penalty, above the batch "
        "fit's; that of a batch fit is what is proved: no weights at all are better by more. Fresh loss: log "
        "loss on the fresh messages, above the batch fit's. F1 is that of the non-zero weights against the "
        "batch fit's.</p></section>"
        "<noscript><p>Pictures need JavaScript; texts and tables do not.</p></noscript>"
    )


def _loose(fits: Sequence[Row]) -> str:
    """Says which batch fits are proved too loosely to measure gaps against."""
    loose = [fit for fit in fits if fit["batch"]["loose"]]
    if not loose:
        return ""
    worst = share(max(fit["batch"]["proved_gap"] for fit in loose))
    through = ", ".join(count(fit["messages"]) for fit in loose)
    return (
        f'<p class="warnings">The batch fit of {through} messages may be up to {worst} above the optimum: '
        "gaps and F1 against it may be far from those against the optimum. Another --batch may come "
        "nearer.</p>"
    )


def _tables(document: Row) -> Section:
    """Every figure of every comparison."""
    truth = document["has_truth"]
    titles = (
        *("messages", "weights of", "objective", "gap", "fresh log loss", *(["excess"] if truth else [])),
        *("non-zero", "batch P", "batch R", "batch F1"),
        *(("truth P", "truth R", "truth F1") if truth else ()),
        *("seconds", "whole pass"),
    )
    body = []
    for strength in document["strengths"]:
        rows = []
        for fit in at_strength(document, strength):
            rows.append(_row(fit["messages"], BATCH, fit["batch"], truth))
            for one in fit["learned"]:
                rows.append(_row(fit["messages"], row_name(one["name"], one["epochs"]), one, truth))
        body.append(f"<h3>Strength {plain(strength)}</h3>")
        body.append(table(f"All figures at strength {plain(strength)}", titles, rows, texts=2, kind="every"))
    return Section("figures", "All figures", "Figures", "".join(body), {})


def _row(messages: int, name: str, one: Row, truth: bool) -> tuple[str, ...]:
    batch = name == BATCH
    gap = f"≤ {share(one['proved_gap'])}" if batch else share(one["gap"])
    against_batch = None if batch else one["against_batch"]
    return (
        count(messages),
        escaped(name),
        f"{one['objective']:.6f}",
        gap,
        loss(one["fresh_log_loss"]),
        *([loss(one["excess_log_loss"])] if truth else []),
        count(one["nnz"]),
        *_support(against_batch),
        *(_support(one["against_truth"]) if truth else ()),
        f"{one['seconds'] if batch else one['learning_seconds']:.2f}",
        UNKNOWN if batch else f"{one['seconds']:.2f}",
    )


def _support(support: Row | None) -> tuple[str, str, str]:
    if support is None:
        return UNKNOWN, UNKNOWN, UNKNOWN
    return ratio(support["precision"]), ratio(support["recall"]), ratio(support["f1"])


def _making(document: Row) -> Section:
    """Command, stream, settings."""
    log, learner = document["log"], document["settings"]["learner"]
    rates = ", ".join(f"{w['name']}: {plain(w['learning_rate'])}" for w in document["learners"])
    scenario = log["scenario"] or {}
    pairs = [
        ("command", f"<code>{escaped(visible(document['command']))}</code>"),
        ("program", f"bedload {escaped(str(document['program']))}"),
        ("learning rates", escaped(rates)),
        ("batch fits", f"{escaped(document['batch'])}, each proved by the bound of docs/proof.md"),
        ("different tokens", count(log["different_tokens"])),
        ("seconds in all", f"{document['seconds']:,.1f}"),
        ("drawn with", f"plotly.js {escaped(script_version())}, inside this file"),
    ]
    kept = {
        **{f"feed: {k}": v for k, v in scenario.items()},
        **{f"learner.{k}": v for k, v in learner.items()},
    }
    rows = [(escaped(k), bdi(json.dumps(v, ensure_ascii=False), 200)) for k, v in kept.items()]
    listed = table("Settings", ["setting", "value"], rows, texts=2)
    body = (
        facts(pairs, "facts wide")
        + f"<details data-printed><summary>Feed and learner</summary>{listed}</details>"
    )
    return Section("making", "How this was made", "Settings", body, {})
