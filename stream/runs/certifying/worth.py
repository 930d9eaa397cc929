"""A certificate and its log in; the refined weights, what they cost and what they are worth, out."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from stream.errors import BadData
from stream.optimality.bound import log_losses
from stream.runs.certifying.certify import Certificate
from stream.runs.certifying.log import Log, Progress, Scored
from stream.runs.certifying.refining import Refined, refine
from stream.runs.scoring import settings_of
from stream.settings import Settings
from stream.snapshots import Snapshot
from stream.tables.lookup import Lookup
from stream.weights import Weights

__all__ = ["Worth", "worth"]


@dataclass(frozen=True, slots=True)
class Worth:
    """`refined`, and on `fresh_messages` labelled messages of other logs the log loss before and after."""

    refined: Refined
    changed: int
    fresh_messages: int | None
    fresh_before: float | None
    fresh_after: float | None

    def to_json(self) -> dict[str, Any]:
        """As JSON types; the gap in nats a message."""
        solution = self.refined.solution
        return {
            "refined_objective": solution.objective,
            "refined_lower_bound": solution.bound,
            "refined_gap": solution.gap,
            "refined_nnz": len(self.refined.weights),
            "refined_steps": solution.steps,
            "refined_changed": self.changed,
            "fresh_messages": self.fresh_messages,
            "fresh_log_loss": self.fresh_before,
            "fresh_log_loss_refined": self.fresh_after,
        }


def worth(
    snapshot: Snapshot,
    certificate: Certificate,
    paths: tuple[str, ...],
    folder: Path,
    settings: Settings | None,
    fresh: tuple[str, ...],
    memory_bytes: int,
    progress: Progress,
) -> Worth:
    """Refines the snapshot on the log until the gap is 1e-6 of the objective.

    `fresh`: patterns of logs that neither learned from, or none. Raises what `refine` and reading raise.
    """
    reading = settings or settings_of(snapshot)
    strength = certificate.l1_per_example
    messages, before_loss = _fresh_loss(reading, fresh, snapshot.weights, progress) if fresh else (None, None)
    refined = refine(reading, paths, folder, snapshot.weights, strength, memory_bytes, progress)
    before = dict(
        zip(snapshot.weights.addresses.tolist(), np.sign(snapshot.weights.values).tolist(), strict=True)
    )
    after = dict(
        zip(refined.weights.addresses.tolist(), np.sign(refined.weights.values).tolist(), strict=True)
    )
    changed = sum(before.get(address) != after.get(address) for address in before.keys() | after.keys())
    after_loss = _fresh_loss(reading, fresh, refined.weights, progress)[1] if fresh else None
    return Worth(refined, changed, messages, before_loss, after_loss)


def _fresh_loss(
    settings: Settings, paths: tuple[str, ...], model: Weights, progress: Progress
) -> tuple[int, float]:
    """Labelled messages of other logs, BadData where there are none; the mean log loss of `model` on them."""
    log, lookup, scored = Log(settings, paths, Path()), Lookup(model), Scored()
    for batch in log.batches("fresh messages", progress):
        scored.add(batch, lookup.score(batch)[0])
    weight = float(scored.weights.sum())
    if not weight > 0.0:
        raise BadData(
            f"{', '.join(paths)}: none of {log.messages:,} messages has an outcome that counts "
            f"({settings.message.label}), so there is nothing to compare on: give a later log with outcomes"
        )
    losses = log_losses(scored.margins, scored.labels)
    return scored.count, float((losses * scored.weights).sum()) / weight
