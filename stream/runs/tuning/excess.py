"""A simulated log, its truth and some lanes in; what each lane loses more than the truth does out."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
import numpy.typing as npt

from stream.errors import BadData
from stream.message import Block
from stream.metrics.lanes import LaneProgress
from stream.rejects import RejectLog
from stream.runs.lane_model import LaneModel
from stream.runs.steps import BLOCK, Steps
from stream.runs.tuning.trial import Lane, Plan
from stream.runs.tuning.truth import TrueRates, Truth
from stream.settings import Settings
from stream.sources import LogSource

__all__ = ["expected_excess"]

OnProgress = Callable[[float | None, int], None]
Floats = npt.NDArray[np.float64]


def expected_excess(
    settings: Settings,
    lanes: Sequence[Lane],
    plan: Plan,
    truth: Truth,
    memory_bytes: int,
    progress: OnProgress = lambda fraction, messages: None,
) -> Floats:
    """Excess log loss of each lane over the last part, nats a message: float64[K].

    It is the mean, over labelled messages by example weight, of what a prediction loses on average over the
    outcome's true distribution, less what that distribution itself loses: a mean of Kullback-Leibler
    divergences, never below 0, free of the luck of the outcomes. Lanes learn again as in a trial; where
    they take more than `memory_bytes` they are parted.
    """
    found = _together(settings, lanes, plan, truth, memory_bytes, progress)
    if found is not None:
        return found
    middle = len(lanes) // 2
    halves = (lanes[:middle], lanes[middle:])
    return np.concatenate(
        [expected_excess(settings, half, plan, truth, memory_bytes, progress) for half in halves]
    )


def _together(
    settings: Settings,
    lanes: Sequence[Lane],
    plan: Plan,
    truth: Truth,
    memory_bytes: int,
    progress: OnProgress,
) -> Floats | None:
    """The same in one pass; None where it takes too much memory and can be parted."""
    model = LaneModel(settings, [lane.over(settings.learner) for lane in lanes])
    metrics = LaneProgress(len(lanes), plan.ends, plan.last_from, settings.metrics.window)
    kept = _Excess(TrueRates(settings, truth), lambda: metrics.block >= plan.last_from, len(lanes))
    rejects = RejectLog(Path(), settings.message, action="skip")
    unsliced = settings.model_copy(update={"metrics": settings.metrics.model_copy(update={"slice_by": None})})
    run = Steps(unsliced, model, metrics, rejects, kept.add)
    source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
    try:
        while run.step(source, BLOCK):
            if len(lanes) > 1 and model.lane_bytes + sum(model.memory().values()) > memory_bytes:
                return None
            progress(source.fraction_read(), run.messages)
    finally:
        source.close()
    if not kept.weight > 0:
        raise BadData("no labelled message in the last part of the log can be read as the truth file has it")
    return np.asarray(kept.sums / kept.weight)


class _Excess:
    """Sums of weighted divergences, and the weight, of the messages that come while `counts` says so."""

    def __init__(self, rates: TrueRates, counts: Callable[[], bool], lanes: int) -> None:
        self._rates, self._counts = rates, counts
        self.sums, self.weight = np.zeros(lanes), 0.0

    def add(self, block: Block, rows: npt.NDArray[np.int64], margins: Floats) -> None:
        """Takes the margins float64[m, K] of some rows of a block."""
        if not self._counts():
            return
        own, batch, rates = self._rates.of(block)
        _, here, there = np.intersect1d(rows, own, assume_unique=True, return_indices=True)
        some = batch.labels[there] >= 0
        here, there = here[some], there[some]
        weight, rate, margin = batch.weights[there], rates[there], margins[here]
        loss = np.logaddexp(0.0, margin) - rate[:, np.newaxis] * margin
        more = weight[:, np.newaxis] * (loss - _entropy(rate)[:, np.newaxis])
        self.sums += np.ascontiguousarray(more.T).sum(axis=1)  # each lane alone, whatever others are there
        self.weight += float(weight.sum())


def _entropy(rate: Floats) -> Floats:
    """Of yes/no outcomes with these shares of yes, nats; 0 where the outcome is certain."""
    safe = np.where((rate > 0) & (rate < 1), rate, 0.5)
    entropy = -safe * np.log(safe) - (1 - safe) * np.log1p(-safe)
    return np.asarray(np.where(safe == rate, entropy, 0.0))
