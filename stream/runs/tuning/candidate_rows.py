"""A trial in; for each of its lanes the figures by which candidates are told apart, as JSON types, out."""

from __future__ import annotations

from dataclasses import fields
from importlib.metadata import version
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.metrics import Summary
from stream.metrics.lanes import SWEPT_EVERY
from stream.runs.tuning import histograms
from stream.runs.tuning.choosing import Candidates
from stream.runs.tuning.trial import Plan, Trial
from stream.settings import Settings
from stream.snapshots import About
from stream.snapshots.layout import snapshot_size

__all__ = ["LAST", "candidate_rows", "forward_losses", "number", "snapshot_sizes"]

Floats = npt.NDArray[np.float64]
LAST = 1
"""Scope of the bins of the last part."""


def snapshot_sizes(trial: Trial, settings: Settings) -> npt.NDArray[np.int64]:
    """Bytes of a snapshot of each lane, to within some digits of its manifest: int64[K]."""
    weights = trial.weights
    lengths = np.fromiter(map(len, weights.names), np.int64, len(weights.names))
    counts = ("messages", "rejected", "labelled", "positives")
    figures = {field.name: 1 / 3 for field in fields(Summary)} | dict.fromkeys(counts, 10**8)
    calibration = dict.fromkeys(("calibration_ratio", "expected_calibration_error", "base_rate"), 1 / 3)
    about = About(settings.model_dump(mode="json"), figures, calibration, version("bedload"))
    fingerprint = settings.fingerprint()
    return np.array(
        [
            snapshot_size(int(np.count_nonzero(on)), int(lengths[on].sum()), fingerprint, about)
            for on in (weights.values != 0).T
        ],
        np.int64,
    )


def candidate_rows(
    trial: Trial, plan: Plan, candidates: Candidates, best: int, forward: list[float | None]
) -> list[dict[str, Any]]:
    """A row for each lane; differences are to the lane `best`, `forward` as `forward_losses` gives it."""
    mean, error = candidates.against(best)
    totals = trial.block_totals
    weight, positive = totals[plan.last_from :, 2].sum(), totals[plan.last_from :, 3].sum()
    guess = histograms.entropy_of(positive, weight)
    log_loss = candidates.log_loss
    whole = trial.loss / totals[:, 2].sum()
    return [
        {
            "index": i,
            "learning_rate": lane.learning_rate,
            "l1_per_example": lane.l1_per_example,
            "l1": lane.l1,
            "log_loss": number(log_loss[i]),
            "log_loss_whole": number(whole[i]),
            "difference": number(mean[i]),
            "log_loss_se": number(error[i]),
            "nnz": int(candidates.nnz[i]),
            "bytes": int(candidates.size[i]),
            "auc": histograms.auc(trial.bins[LAST, i]),
            "calibration_ratio": histograms.calibration_ratio(trial.bins[LAST, i]),
            "normalised_entropy": number(log_loss[i] / guess) if guess else None,
            "forward_log_loss": forward[i],
            "block_log_loss": _ratios(trial.block_loss[:, i], totals[:, 2]),
            "block_nnz": _block_nnz(trial, i),
        }
        for i, lane in enumerate(trial.lanes)
    ]


def forward_losses(frozen: Trial, plan: Plan) -> list[float | None]:
    """Log loss of each lane over the blocks that came after it was frozen."""
    loss = frozen.block_loss[plan.frozen_from :].sum(axis=0)
    return _ratios(loss, np.full(len(loss), frozen.block_totals[plan.frozen_from :, 2].sum()))


def number(value: float) -> float | None:
    """None where it is not finite, which JSON has no word for."""
    return float(value) if np.isfinite(value) else None


def _block_nnz(trial: Trial, lane: int) -> list[int | None]:
    """Non-zero weights at the end of each time block; None where they were not counted."""
    counted: list[int | None] = [None] * len(trial.block_loss)
    counted[SWEPT_EVERY - 1 :: SWEPT_EVERY] = trial.block_nnz[:, lane].tolist()
    return counted


def _ratios(above: Floats, below: Floats) -> list[float | None]:
    return [number(a / b) if b > 0 else None for a, b in zip(above.tolist(), below.tolist(), strict=True)]
