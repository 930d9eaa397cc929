"""A snapshot and a log in; a certificate out: how far, at most, the weights are from the log's batch fit."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from stream.errors import BadData, BadSettings, UsageError
from stream.runs.certifying.log import Progress
from stream.runs.certifying.passes import Findings, examine
from stream.runs.certifying.worst import Worst
from stream.runs.presence import refuse_late_outcomes
from stream.runs.scoring import must_match, settings_of
from stream.settings import Settings
from stream.settings.models import Learner
from stream.snapshots import Snapshot
from stream.token_names import field_and_token

__all__ = ["Certificate", "Window", "certify", "last_windows", "strength_in_force"]

WINDOWS = 5
STANDARD_INPUT = "-"


@dataclass(frozen=True, slots=True)
class Window:
    """Labelled messages `first` to `last` of the log, from 1; `mean_loss` None where none has weight."""

    first: int
    last: int
    mean_loss: float | None


@dataclass(frozen=True, slots=True)
class Certificate:
    """What was found of the snapshot in the folder `snapshot`, with `nnz` weights.

    `l1_per_example` is the strength certified; losses in nats, means by example weight.
    """

    snapshot: Path
    nnz: int
    findings: Findings
    windows: tuple[Window, ...]

    @property
    def l1_per_example(self) -> float:
        """The strength of the batch problem."""
        return self.findings.strength

    def to_json(self) -> dict[str, Any]:
        """All of it as JSON types."""
        found = self.findings
        return {
            "snapshot": str(self.snapshot),
            "objective": found.objective,
            "lower_bound": found.bound,
            "gap": found.gap,
            "l1_per_example": found.strength,
            "messages": found.messages,
            "labelled": found.labelled,
            "rejected": found.rejected,
            "mean_loss": found.mean_loss,
            "penalty": found.penalty,
            "intercept_shift": found.shift,
            "plain_bound": found.plain_bound,
            "nnz": self.nnz,
            "coordinates": found.coordinates,
            "worst": [_worst_json(worst) for worst in found.worst],
            "windows": [{"first": w.first, "last": w.last, "mean_loss": w.mean_loss} for w in self.windows],
        }


def certify(
    snapshot: Snapshot,
    paths: Sequence[str],
    settings: Settings | None = None,
    *,
    folder: Path | None = None,
    strength: float | None = None,
    progress: Progress = lambda stage, fraction: None,
) -> Certificate:
    """Goes through the log twice, and learns nothing.

    `settings`: how to read the log, in the snapshot's feature space, its own by default; `folder`: what
    `paths` are relative to; `strength`: per example, instead of that at which the snapshot was learned.
    Raises UsageError, BadSettings, BadData and what reading raises.
    """
    if STANDARD_INPUT in paths:
        raise UsageError(
            "certifying reads the log more than once: save standard input to a file, and name that"
        )
    reading = settings or settings_of(snapshot)
    must_match(reading, snapshot)
    refuse_late_outcomes(reading)
    if reading.message.label is None:
        raise BadSettings("message.label names no outcome: set it, a batch fit needs labels")
    per_example, on_sum = (strength, 0.0) if strength is not None else strength_in_force(snapshot)
    if not per_example + on_sum > 0.0:
        raise BadSettings(
            "the strength to certify is 0: a bound is made of what the L1 penalty leaves to each gradient, "
            "which is nothing then; on separable data there is no optimum at all. Give --strength X above 0"
        )
    weights = snapshot.weights
    found = examine(reading, tuple(paths), folder or Path(), weights, per_example, progress, on_sum=on_sum)
    _check_rejects(found, reading)
    windows = last_windows(found, reading.metrics.window)
    return Certificate(snapshot.path, len(weights), found, windows)


def strength_in_force(snapshot: Snapshot) -> tuple[float, float]:
    """(per example, on the sum of losses) at which the snapshot was learned; docs/proof.md has the formula.

    Raises BadSettings where the settings in the snapshot press with l2.
    """
    learner, learned = settings_of(snapshot).learner, snapshot.weights.learned
    if learner.l2 > 0:
        raise BadSettings(
            f"{snapshot.path}: learned with learner.l2 = {learner.l2:g}, and the bound is for the L1 penalty "
            "alone. Give --strength X to compare with the batch fit that has L1 at X and no l2"
        )
    return learner.l1_per_example * _share_pressed(learner, learned), learner.l1


def _share_pressed(learner: Learner, learned: int) -> float:
    """The share of the learned messages by which the accumulated strength grew."""
    if learner.horizon is None or learned <= learner.horizon:
        return 1.0
    return learner.horizon / learned


def last_windows(found: Findings, size: int) -> tuple[Window, ...]:
    """The last whole windows of `size` labelled messages, counted back from the end of the log."""
    weights = found.example_weights
    losses = found.losses * weights
    windows = []
    for back in range(min(WINDOWS, len(losses) // size), 0, -1):
        first = len(losses) - back * size
        part = slice(first, first + size)
        weight = float(weights[part].sum())
        mean = float(losses[part].sum()) / weight if weight > 0 else None
        windows.append(Window(first + 1, first + size, mean))
    return tuple(windows)


def _check_rejects(found: Findings, settings: Settings) -> None:
    allowed = settings.message.max_reject_share
    if found.rejected > allowed * found.messages:
        raise BadData(
            f"{found.rejected:,} of {found.messages:,} messages were rejected, more than "
            f"message.max_reject_share = {allowed:g} allows. `bedload score --json` over the log says why"
        )


def _worst_json(worst: Worst) -> dict[str, Any]:
    field, token = field_and_token(worst.name)
    return {
        "address": worst.address,
        "field": field,
        "token": token,
        "weight": worst.weight,
        "gradient": worst.gradient,
        "violation": worst.violation,
    }
