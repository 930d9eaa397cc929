"""A log and some settings of the learner in; what each of them would have predicted, and its weights, out."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from stream.metrics.lanes import LaneProgress
from stream.rejects import RejectLog
from stream.runs.lane_model import LaneModel, LaneWeights
from stream.runs.steps import BLOCK, Steps, is_sliced
from stream.settings import Settings
from stream.settings.models import Learner as LearnerSettings
from stream.sources import LogSource

__all__ = ["Lane", "OutOfMemory", "Plan", "Trial", "run_trial"]

OnProgress = Callable[[float | None, int], None]
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Lane:
    """One candidate: what of the learner's settings differs."""

    learning_rate: float
    l1_per_example: float
    l1: float = 0.0

    def over(self, learner: LearnerSettings) -> LearnerSettings:
        """The learner's settings with these."""
        return learner.model_copy(
            update={"learning_rate": self.learning_rate, "l1_per_example": self.l1_per_example, "l1": self.l1}
        )


@dataclass(frozen=True, slots=True)
class Plan:
    """How a log is gone through: time blocks that end after `ends` messages each, the last of them its end.

    `last_from`: the block that the last part begins with; `frozen_from`: the block from which on nothing is
    learned, if any.
    """

    ends: tuple[int, ...]
    last_from: int
    frozen_from: int | None = None


@dataclass(frozen=True, slots=True)
class Trial:
    """What K lanes did over a log of B blocks.

    `loss` float64[K] (whole run) and `block_loss` float64[B, K]: sums of weight * log loss, nats;
    `block_totals` float64[B, 4]: messages, labelled, weight, weight * label; `block_nnz` int64[B, K]; `bins`
    float64[2, K, 1024, 3] as in `lane_tally`; `slice_loss` float64[S, K] and `slice_totals` float64[S, 4],
    row 0 for messages beyond `slice_names`, the others for those; `refused` int64[K]; `rejected` messages.
    """

    lanes: tuple[Lane, ...]
    loss: Floats
    block_loss: Floats
    block_totals: Floats
    block_nnz: npt.NDArray[np.int64]
    bins: Floats
    slice_loss: Floats
    slice_totals: Floats
    slice_names: tuple[str, ...]
    refused: npt.NDArray[np.int64]
    rejected: int
    weights: LaneWeights

    @property
    def nnz(self) -> npt.NDArray[np.int64]:
        """Non-zero weights of each lane at the end, as a snapshot counts them: int64[K]."""
        return np.asarray(np.count_nonzero(self.weights.values, axis=0))


class OutOfMemory(Exception):
    """The lanes of one pass take more memory than they may."""


def run_trial(
    settings: Settings,
    lanes: Sequence[Lane],
    plan: Plan,
    memory_bytes: int,
    progress: OnProgress = lambda fraction, messages: None,
) -> Trial:
    """Goes through the log once with all lanes side by side; each is bit-equal to a replay of its own.

    Raises OutOfMemory where table and lanes would take more than `memory_bytes`, and what a replay raises.
    """
    model = LaneModel(settings, [lane.over(settings.learner) for lane in lanes])
    sliced, window = is_sliced(settings), settings.metrics.window
    metrics = LaneProgress(len(lanes), plan.ends, plan.last_from, window, sliced)
    run = Steps(settings, model, metrics, RejectLog(Path(), settings.message, action="skip"))
    source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
    try:
        while run.step(source, BLOCK):
            model.frozen = plan.frozen_from is not None and metrics.block >= plan.frozen_from
            if model.lane_bytes + sum(model.memory().values()) > memory_bytes:
                raise OutOfMemory
            progress(source.fraction_read(), run.messages)
    finally:
        source.close()
    return Trial(
        tuple(lanes),
        metrics.loss,
        metrics.block_loss,
        metrics.block_totals,
        np.array(model.block_nnz),
        metrics.bins,
        metrics.slice_loss[: 1 + len(metrics.slices.names)],
        metrics.slice_totals[: 1 + len(metrics.slices.names)],
        tuple(metrics.slices.names),
        model.refused,
        run.rejects.count,
        model.weights(),
    )
