"""A finished tune in, the document that it leaves as tuning.json, and that its report is drawn from, out."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import version
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.metrics.slices import OTHER
from stream.reports import texts
from stream.runs.tuning import histograms
from stream.runs.tuning.candidate_rows import (
    LAST,
    candidate_rows,
    forward_losses,
    number,
    snapshot_sizes,
)
from stream.runs.tuning.choosing import Candidates, Choice, Rule, choose
from stream.runs.tuning.first_pass import LogFacts
from stream.runs.tuning.grid import Grid
from stream.runs.tuning.saying import cautions, said
from stream.runs.tuning.strongest import NamedWeights
from stream.runs.tuning.trial import Plan, Trial
from stream.runs.tuning.truth import Truth, planted_at
from stream.settings import Settings

__all__ = ["Tuned", "document"]

FORMAT = "bedload tuning"
FORMAT_VERSION = 1
PATHS = 40
LISTED = 10
STRONGEST = 25
DAY_MS = 86_400_000
FEW_OUTCOMES = 100
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Tuned:
    """All that a finished tune knows.

    `files`, `digest`: of the log; `trial`: all lanes of the grid, over `plan`; `frozen`: the same lanes,
    which learned nothing from `frozen_plan.frozen_from` on; `truth`: of a simulated log, with the excess log
    loss of each lane (float64[K]); `warnings`: of the log, and of how it was gone through.
    """

    settings: Settings
    command: str
    files: Sequence[str]
    digest: str
    facts: LogFacts
    grid: Grid
    plan: Plan
    trial: Trial
    rule: Rule
    frozen: Trial | None = None
    frozen_plan: Plan | None = None
    truth: tuple[Truth, Floats] | None = None
    warnings: Sequence[str] = ()
    passes: Sequence[str] = ()
    seconds: float = 0.0


def document(tuned: Tuned) -> dict[str, Any]:
    """JSON types only, no NaN. Raises what `choose` raises."""
    trial, plan = tuned.trial, tuned.plan
    candidates = Candidates.of(trial, plan, snapshot_sizes(trial, tuned.settings), tuned.grid.over)
    choice = choose(candidates, tuned.rule)
    named = NamedWeights(trial.weights, float(trial.block_totals[:, 1].sum()))
    along = _along(candidates, choice.index)
    bins = trial.bins[LAST, choice.index]
    return {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "program": version("bedload"),
        "command": tuned.command,
        "settings": tuned.settings.model_dump(mode="json"),
        "log": _log(tuned),
        "grid": _grid(tuned, candidates),
        "blocks": {"messages": list(plan.ends), "last_part_from": plan.last_from},
        "candidates": candidate_rows(trial, plan, candidates, choice.best, _forward(tuned)),
        "choice": _choice(candidates, choice, _forward_said(tuned, choice.index)),
        "paths": {
            "learning_rate": trial.lanes[choice.index].learning_rate,
            "strengths": [candidates.strength(i) for i in along],
            "tokens": named.paths(along, choice.index, PATHS),
        },
        "models": [_model(candidates, named, i) for i in along],
        "reliability": {
            "bins": histograms.reliability(bins),
            "calibration_ratio": histograms.calibration_ratio(bins),
            "expected_calibration_error": histograms.calibration_error(bins),
        },
        "thresholds": {"messages_per_day": _per_day(tuned.facts), "rows": histograms.thresholds(bins)},
        "slices": _slices(tuned, choice.index),
        "strongest": _both_ways(named, choice.index, STRONGEST),
        "truth": _truth(tuned, choice.index),
        "warnings": [*tuned.warnings, *_warnings(tuned, choice.index), *cautions(candidates, choice)],
        "passes": list(tuned.passes),
        "seconds": tuned.seconds,
    }


def _forward(tuned: Tuned) -> list[float | None]:
    if tuned.frozen is None or tuned.frozen_plan is None:
        return [None] * len(tuned.trial.lanes)
    return forward_losses(tuned.frozen, tuned.frozen_plan)


def _forward_said(tuned: Tuned, index: int) -> list[str]:
    """What the choice loses once frozen, beside the best of the candidates and a constant."""
    losses = _forward(tuned)
    known = [nats for nats in losses if nats is not None]
    chosen = losses[index]
    if chosen is None or tuned.frozen is None or tuned.frozen_plan is None:
        return []
    frozen_from = tuned.frozen_plan.frozen_from
    before = tuned.frozen.block_totals[:frozen_from, 2:].sum(axis=0)
    after = tuned.frozen.block_totals[frozen_from:, 2:].sum(axis=0)
    learned, met = float(before[1] / before[0]), float(after[1] / after[0])
    constant = f", the share of yes before it {_constant(learned, met)}" if 0.0 < learned < 1.0 else ""
    return [
        f"Forward test: frozen, the choice loses {texts.loss(chosen)} nats a message over the rest of the "
        f"log; the best candidate {texts.loss(min(known))}{constant}."
    ]


def _constant(learned: float, met: float) -> str:
    return texts.loss(-met * math.log(learned) - (1.0 - met) * math.log1p(-learned))


def _few_outcomes(tuned: Tuned) -> list[str]:
    """Whether so few messages carry the figures that chance has much to say in them."""
    labelled, weight, positive = tuned.trial.block_totals[tuned.plan.last_from :, 1:].sum(axis=0).tolist()
    if not weight > 0:
        return []
    yes = round(labelled * positive / weight)
    fewest, said = min((yes, "yes"), (round(labelled) - yes, "no"))
    if fewest >= FEW_OUTCOMES:
        return []
    return [
        f"Only {fewest:,} messages of the last part have the outcome {said}: log loss, AUC, calibration and "
        "thresholds all hang on those few, and may be quite other on the next log."
    ]


def _warnings(tuned: Tuned, index: int) -> list[str]:
    """What of this run keeps its figures from being those of a replay with the chosen settings."""
    lines = _few_outcomes(tuned)
    state = tuned.settings.state
    bounds = [name for name in ("max_live", "idle_after") if getattr(state, name) is not None]
    if bounds:
        lines.append(
            f"The settings remove coordinates (state.{' and state.'.join(bounds)}). Here one was removed "
            "only when it was zero in all candidates of a pass, so a replay with the chosen settings may end "
            "differently."
        )
    if refused := int(tuned.trial.refused[index]):
        lines.append(
            f"The chosen candidate refused {refused:,} updates, after which a weight would not have been a "
            "finite number: take a smaller learning rate, or scale the quantities among the fields."
        )
    return lines


def _along(candidates: Candidates, index: int) -> list[int]:
    """Candidates with the learning rate of this one, strengths descending."""
    rate = candidates.lanes[index].learning_rate
    same = [i for i, lane in enumerate(candidates.lanes) if lane.learning_rate == rate]
    return sorted(same, key=lambda i: -candidates.strength(i))


def _log(tuned: Tuned) -> dict[str, Any]:
    _, labelled, weight, positive = tuned.trial.block_totals.sum(axis=0).tolist()
    return {
        "files": list(tuned.files),
        "digest": tuned.digest,
        "messages": tuned.facts.messages,
        "labelled": int(labelled),
        "rejected": tuned.trial.rejected,
        "base_rate": positive / weight if weight > 0 else None,
        "first_time": _time(tuned.facts.first_time_ms),
        "last_time": _time(tuned.facts.last_time_ms),
    }


def _time(ms: int | None) -> str | None:
    """RFC 3339 to the second; None also beyond the years that have four digits."""
    if ms is None:
        return None
    try:
        return datetime.fromtimestamp(ms // 1000, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    except (ValueError, OverflowError, OSError):
        return None


def _per_day(facts: LogFacts) -> float | None:
    """Messages a day, of a log that is at least a day long: a shorter one may be the busy part of one."""
    if facts.first_time_ms is None or facts.last_time_ms is None:
        return None
    span = facts.last_time_ms - facts.first_time_ms
    return facts.messages * DAY_MS / span if span >= DAY_MS else None


def _grid(tuned: Tuned, candidates: Candidates) -> dict[str, Any]:
    facts, over = tuned.facts, tuned.grid.over
    strongest = facts.strongest
    if strongest is not None and over == "l1":
        strongest *= facts.weight or 0.0
    return {
        "unit": over,
        "strongest": strongest,
        "searched": tuned.grid.searched,
        "strengths": sorted({candidates.strength(i) for i in range(len(candidates.lanes))}, reverse=True),
        "learning_rates": sorted({lane.learning_rate for lane in candidates.lanes}),
    }


def _choice(candidates: Candidates, choice: Choice, forward: list[str]) -> dict[str, Any]:
    halved = None
    if choice.halved is not None and choice.halved_costs is not None:
        halved = {
            "index": choice.halved,
            "nnz": int(candidates.nnz[choice.halved]),
            "log_loss_more": choice.halved_costs.nats,
            "log_loss_se": choice.halved_costs.error,
        }
    return {
        "rule": choice.rule.pick,
        "index": choice.index,
        "best": choice.best,
        "runner_up": choice.runner_up,
        "said": [*said(candidates, choice), *forward],
        "halved": halved,
    }


def _model(candidates: Candidates, named: NamedWeights, index: int) -> dict[str, Any]:
    return {
        "index": index,
        "strength": candidates.strength(index),
        "nnz": int(candidates.nnz[index]),
        "log_loss": number(candidates.log_loss[index]),
        **_both_ways(named, index, LISTED),
    }


def _both_ways(named: NamedWeights, index: int, most: int) -> dict[str, Any]:
    return {
        "towards_yes": named.towards(True, index, most),
        "towards_no": named.towards(False, index, most),
    }


def _slices(tuned: Tuned, index: int) -> dict[str, Any]:
    """Of the whole log, the largest first; what came after the last slice of its own is one row."""
    by = tuned.settings.metrics.slice_by
    if by is None:
        return {"by": None, "rows": []}
    rows = []
    trial = tuned.trial
    for name, loss, totals in zip(
        (OTHER, *trial.slice_names), trial.slice_loss, trial.slice_totals, strict=True
    ):
        messages, _, weight, positive = totals.tolist()
        log_loss = number(loss[index] / weight) if weight > 0 else None
        guess = histograms.entropy_of(positive, weight)
        rows.append(
            {
                "slice": name,
                "messages": int(messages),
                "log_loss": log_loss,
                "base_rate": positive / weight if weight > 0 else None,
                "normalised_entropy": log_loss / guess if guess and log_loss is not None else None,
            }
        )
    rows = [row for row in rows if row["messages"]]
    return {"by": by, "rows": sorted(rows, key=lambda row: (-row["messages"], row["slice"]))}


def _truth(tuned: Tuned, index: int) -> dict[str, Any] | None:
    """Planted tokens against non-zero ones, by address, and what is lost more than the truth loses."""
    if tuned.truth is None:
        return None
    truth, excess = tuned.truth
    weights = tuned.trial.weights
    kept = set(weights.addresses[weights.values[:, index] != 0].tolist())
    places = planted_at(tuned.settings, truth)
    found = sum(not kept.isdisjoint(place) for place in places)
    right = len(kept & frozenset().union(*places))
    return {
        "planted": len(places),
        "found": found,
        "precision": right / len(kept) if kept else None,
        "recall": found / len(places) if places else None,
        "excess_log_loss": number(excess[index]),
        "best_excess_log_loss": number(np.nanmin(excess)),
    }
