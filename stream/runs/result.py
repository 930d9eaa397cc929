"""A run that learned in, what it found as one document out."""

from __future__ import annotations

import resource
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from stream.metrics import Summary, WindowRow
from stream.runs.learning import LearningRun

__all__ = ["RunResult", "result_of"]


@dataclass(frozen=True, slots=True)
class RunResult:
    """What a run found; `seconds` from opening the log to results, `messages_read` in this run."""

    summary: Summary
    windows: list[WindowRow]
    slices: list[tuple[str, Summary]]
    rejects_by_reason: dict[str, int]
    tokens: int
    nnz: int
    live: int
    learned: int
    epochs: int
    refused_updates: int
    refused_coordinates: int
    seconds: float
    messages_read: int
    peak_rss_bytes: int
    resumed_from: int | None
    checkpoints: int
    snapshot: Path
    memory: dict[str, int]
    interrupted: bool
    warnings: list[str]

    def to_json(self) -> dict[str, Any]:
        """One document; an undefined metric is null."""
        return {
            **self.summary.to_json(),
            "tokens": self.tokens,
            "nnz": self.nnz,
            "live": self.live,
            "learned": self.learned,
            "epochs": self.epochs,
            "seconds": self.seconds,
            "messages_per_s": self.messages_read / self.seconds if self.seconds > 0 else None,
            "peak_rss_bytes": self.peak_rss_bytes,
            "resumed_from": self.resumed_from,
            "checkpoints": self.checkpoints,
            "snapshot": str(self.snapshot),
            "interrupted": self.interrupted,
            "rejects_by_reason": self.rejects_by_reason,
            "refused_updates": self.refused_updates,
            "refused_coordinates": self.refused_coordinates,
            "memory": self.memory,
            "windows": [row.to_json() for row in self.windows],
            "slices": {name: summary.to_json() for name, summary in self.slices},
            "warnings": self.warnings,
        }


def result_of(
    run: LearningRun,
    windows: list[WindowRow],
    *,
    nnz: int,
    seconds: float,
    resumed_from: int | None,
    checkpoints: int,
    snapshot: Path,
    interrupted: bool,
    warnings: list[str],
) -> RunResult:
    """The result of a run that has ended, with the figures that the run itself does not know."""
    model, metrics = run.model, run.progress
    return RunResult(
        summary=metrics.summary(),
        windows=windows,
        slices=metrics.slice_summaries(),
        rejects_by_reason=dict(run.rejects.by_reason),
        tokens=run.tokens,
        nnz=nnz,
        live=model.live,
        learned=model.learned,
        epochs=run.epoch + 1,
        refused_updates=model.refused_updates,
        refused_coordinates=model.refused_coordinates,
        seconds=seconds,
        messages_read=run.messages - (resumed_from or 0),
        peak_rss_bytes=1024 * resource.getrusage(resource.RUSAGE_SELF).ru_maxrss,
        resumed_from=resumed_from,
        checkpoints=checkpoints,
        snapshot=snapshot,
        memory=model.memory(),
        interrupted=interrupted,
        warnings=[*warnings, *run.presence.warnings(resumed=bool(resumed_from))],
    )
