"""The choice in, the head of the page out: warnings, which model to take, and what that gives up."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from stream.reports.markup import facts, paragraphs
from stream.reports.texts import count, difference, escaped, loss, percent, plain, ratio, size, visible

__all__ = ["answer", "warnings"]

_RULES = {
    "lowest_loss": "the lowest log loss",
    "sparsest_within_one_se": "the fewest weights within one standard error of the lowest log loss",
    "max_weights": "the lowest log loss within a number of weights",
    "max_bytes": "the lowest log loss within a size of snapshot",
}


def warnings(document: Mapping[str, Any]) -> str:
    """A box with every warning, nothing where there is none."""
    if not document["warnings"]:
        return ""
    lines = "".join(f"<li>{escaped(visible(line))}</li>" for line in document["warnings"])
    return f'<aside class="warnings" aria-label="Warnings"><h2>Read this first</h2><ul>{lines}</ul></aside>'


def answer(document: Mapping[str, Any]) -> str:
    """The chosen model: its figures, the reason, the price of half of it, lines for the settings file."""
    choice, unit = document["choice"], document["grid"]["unit"]
    chosen = {c["index"]: c for c in document["candidates"]}[choice["index"]]
    rule = _RULES.get(choice["rule"], str(choice["rule"]))
    figures = [
        ("non-zero weights", count(chosen["nnz"])),
        ("log loss, last part", loss(chosen["log_loss"])),
        ("log loss, whole log", loss(chosen["log_loss_whole"])),
        ("of a constant guess's loss", percent(chosen["normalised_entropy"])),
        ("AUC", ratio(chosen["auc"])),
        ("snapshot", size(chosen["bytes"])),
    ]
    said = [escaped(visible(line)) for line in choice["said"]]
    lines = f"[learner]\nlearning_rate = {chosen['learning_rate']!r}\n{unit} = {chosen[unit]!r}"
    return (
        '<section class="answer" id="choice" aria-labelledby="choice-title">'
        f'<p class="rule">Chosen for {escaped(rule)}</p><h2 id="choice-title">'
        f"<code>{escaped(unit)} = {plain(chosen[unit])}</code> at learning rate "
        f"{plain(chosen['learning_rate'])}</h2>"
        + facts(figures, "tiles")
        + paragraphs(*said, _halved(choice.get("halved"), chosen))
        + f'<pre aria-label="Lines for the settings file">{escaped(lines)}</pre></section>'
    )


def _halved(halved: Mapping[str, Any] | None, chosen: Mapping[str, Any]) -> str:
    if not halved:
        return ""
    more = difference(halved["log_loss_more"], halved["log_loss_se"])
    return (
        f"<b>Half the weights</b> ({count(halved['nnz'])} instead of {count(chosen['nnz'])}) would change "
        f"the log loss by {more} nats a message."
    )
