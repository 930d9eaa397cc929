"""The planted truth of a simulated feed in, how much of it the choice found out."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from stream.reports.markup import Section, facts, paragraphs
from stream.reports.texts import count, loss, percent

__all__ = ["planted"]

_READING = (
    "This feed was simulated, so the tokens that truly matter are known, and so is each message's true "
    "probability. Excess log loss is what the model loses more than those probabilities would. Real feeds "
    "have no such page."
)


def planted(truth: Mapping[str, Any]) -> Section:
    """Figures that only a simulated feed can have."""
    body = paragraphs(_READING) + facts(
        [
            ("tokens planted", count(truth["planted"])),
            ("of them found", f"{count(truth['found'])} (recall {percent(truth['recall'])})"),
            ("non-zero weights that are planted", f"precision {percent(truth['precision'])}"),
            ("excess log loss of the choice", loss(truth["excess_log_loss"])),
            ("least excess of all models", loss(truth["best_excess_log_loss"])),
        ]
    )
    return Section("planted", "Against the planted truth", "Truth", body, {})
