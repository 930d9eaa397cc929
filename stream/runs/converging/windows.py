"""A log cut into windows in; what learners lose in each, and batch fits of all and of the past, out."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from stream.runs.converging.fitting import fitted
from stream.runs.converging.following import Tell, window_losses
from stream.runs.converging.held import Held
from stream.runs.converging.job import Job, Known, learner_settings
from stream.runs.converging.judging import Fitted, mean_loss
from stream.settings import Settings

__all__ = ["BEFORE", "HINDSIGHT", "LAST", "windows_of"]

HINDSIGHT, BEFORE, LAST = "hindsight", "all_before", "last_window"


def windows_of(
    settings: Settings, held: Held, job: Job, known: Known | None, strength: float, tell: Tell
) -> dict[str, Any]:
    """Mean log loss in each window, nats a message, under the actual outcomes.

    `learners`: of predictions from before each update, in which averages take no part; `batch`: of a fit of
    the whole log in hindsight, which has seen what it is judged by, of one of everything before the window,
    and of one of the window before; `truth`: of the true shares of yes. `means`: over all windows but the
    first, which nothing comes before.
    """
    size = job.messages // job.windows
    ends = [size * (i + 1) for i in range(job.windows)]
    spans = [(end - size, end) for end in ends]
    learners, losses_of = [], []
    plain = tuple(dict.fromkeys(replace(one, averaged=False) for one in job.learners))
    for wanted in plain:
        own = learner_settings(settings, wanted, strength)
        losses = window_losses(own, ends[-1], size, tell)
        losses_of.append(losses)
        learners.append({**wanted.to_json(plain), "losses": losses})
    batch = _batch(held, job, strength, spans, tell)
    truth = None if known is None else [_of_truth(held, known, *span) for span in spans]
    return {
        "strength": strength,
        "through": ends,
        "base_rate": [float(held.part(*span).labels.mean()) for span in spans],
        "truth": truth,
        "learners": learners,
        "batch": batch,
        "means": {
            "truth": _mean(truth),
            "learners": [_mean(losses) for losses in losses_of],
            "batch": {name: _mean(losses) for name, losses in batch.items()},
        },
    }


def _batch(
    held: Held, job: Job, strength: float, spans: list[tuple[int, int]], tell: Tell
) -> dict[str, list[float | None]]:
    def fit(first: int, last: int) -> Fitted:
        return fitted(job.solver, held.part(first, last), strength, len(held.addresses)).fitted

    def loss(of: Fitted, span: tuple[int, int]) -> float:
        return mean_loss(held.part(*span), of.weights, of.intercept)

    tell(0.0, "fitting windows")
    whole = fit(0, spans[-1][1])
    before: list[float | None] = [None]
    last: list[float | None] = [None]
    for i, span in enumerate(spans[1:], 1):
        tell(i / len(spans), "fitting windows")
        everything = fit(0, span[0])
        before.append(loss(everything, span))
        last.append(before[-1] if i == 1 else loss(fit(*spans[i - 1]), span))
    return {HINDSIGHT: [loss(whole, span) for span in spans], BEFORE: before, LAST: last}


def _of_truth(held: Held, known: Known, first: int, last: int) -> float:
    rows, numbers = held.part(first, last), held.numbers[held.row_after(first) : held.row_after(last)]
    said = np.where(rows.labels == 1, known.shares[numbers], 1.0 - known.shares[numbers])
    return float(np.average(-np.log(np.maximum(said, 1e-300)), weights=rows.weights))


def _mean(losses: list[float | None] | list[float] | None) -> float | None:
    """Over all windows but the first; they are of one size."""
    some = [loss for loss in (losses or [])[1:] if loss is not None]
    return sum(some) / len(some) if some else None
