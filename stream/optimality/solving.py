"""A log in memory and weights to begin with in; the batch optimum, as near as wanted, with its proof out."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.optimality.bound import Bound, best_intercept, log_losses, lower_bound, probabilities
from stream.optimality.solver_kernel import add_columns, column_sums, curvatures, descend

__all__ = ["Columns", "Solution", "solve"]

Floats = npt.NDArray[np.float64]
MOST_STEPS = 500
NEAR = 0.97
"""A zero weight takes part where its gradient is beyond this share of the strength."""
STEEP = 1e-18


@dataclass(frozen=True, slots=True)
class Columns:
    """A log as n columns over m labelled examples.

    `starts` int64[n + 1], `rows` int32[nnz] and `values` float32[nnz]: column by column; `labels` int8[m], 0
    or 1; `weights` float64[m] of the examples.
    """

    starts: npt.NDArray[np.int64]
    rows: npt.NDArray[np.int32]
    values: npt.NDArray[np.float32]
    labels: npt.NDArray[np.int8]
    weights: Floats

    @classmethod
    def of(
        cls,
        columns: npt.NDArray[np.int64],
        row_ptr: npt.NDArray[np.int64],
        values: npt.NDArray[np.float32],
        labels: npt.NDArray[np.int8],
        weights: Floats,
        count: int,
    ) -> Columns:
        """From rows: `columns` int64[nnz], the number of each entry's column, 0 to count - 1."""
        order = np.argsort(columns, kind="stable")
        rows = np.repeat(np.arange(len(labels), dtype=np.int32), np.diff(row_ptr))
        starts = np.concatenate([np.zeros(1, np.int64), np.cumsum(np.bincount(columns, minlength=count))])
        return cls(starts, rows[order], values[order], labels, weights)


@dataclass(frozen=True, slots=True)
class Solution:
    """Weights float64[n] and intercept; objective and bound in nats a message; `steps` taken."""

    weights: Floats
    intercept: float
    objective: float
    bound: float
    steps: int

    @property
    def gap(self) -> float:
        """The objective is at most this far above the optimum."""
        return max(self.objective - self.bound, 0.0)


def solve(
    log: Columns,
    weights: Floats,
    intercept: float,
    strength: float,
    tolerance: float,
    tell: Callable[[float], None] = lambda gap: None,
) -> Solution:
    """Goes on from the given weights until the gap is under `tolerance` of the objective, or no step helps.

    `strength`: per unit of example weight, > 0. `tell` is given the gap, as a share of the objective, after
    each step.
    """
    total = float(log.weights.sum())
    here = np.array(weights, np.float64)
    margins = np.full(len(log.labels), float(intercept))
    everything = np.arange(len(here))
    add_columns(log.starts, log.rows, log.values, everything, here, margins)
    shift = best_intercept(margins, log.labels, log.weights)
    margins += shift
    intercept += shift
    best, steps = Bound(0.0, 0.0), 0
    objective = _objective(log, margins, here, strength, total)
    while True:
        p = probabilities(margins)
        up, down = _sums(log, margins, len(here))
        bound = lower_bound(margins, log.labels, log.weights, up, down, strength)
        best = max(best, bound, key=lambda one: one.value)
        tell((objective - best.value) / objective)
        if objective - best.value <= tolerance * objective or steps == MOST_STEPS:
            break
        gradient = down - up
        chosen = np.flatnonzero((here != 0.0) | (np.abs(gradient) > NEAR * strength * total))
        moved, step, shift = _direction(log, p, chosen, here, gradient, strength * total, steps)
        size, reached = _along(log, margins, moved, here, chosen, step, strength, total, objective)
        if size == 0.0:
            break
        here[chosen] += size * step
        margins += size * moved
        intercept += size * shift
        objective = reached
        steps += 1
    return Solution(here, intercept, objective, best.value, steps)


def _sums(log: Columns, margins: Floats, count: int) -> tuple[Floats, Floats]:
    up, down = np.empty(count), np.empty(count)
    one = log.labels == 1
    residuals = log.weights * probabilities(np.where(one, -margins, margins))  # 1 - p would round to 0
    column_sums(log.starts, log.rows, log.values, np.where(one, residuals, 0.0), up)
    column_sums(log.starts, log.rows, log.values, np.where(one, 0.0, residuals), down)
    return up, down


def _direction(
    log: Columns,
    p: Floats,
    chosen: npt.NDArray[np.int64],
    here: Floats,
    gradient: Floats,
    strength: float,
    steps: int,
) -> tuple[Floats, Floats, float]:
    """Change of margins, of the chosen weights and of the intercept, to where the model is least, nearly."""
    curve = log.weights * p * (1 - p) + STEEP
    steep = np.empty(len(chosen))
    curvatures(log.starts, log.rows, log.values, chosen, curve, steep)
    moved, step = np.zeros(len(p)), np.zeros(len(chosen))
    pull = float((log.weights * (p - log.labels)).sum())
    shift = descend(
        log.starts, log.rows, log.values, chosen, here[chosen], gradient[chosen], np.maximum(steep, STEEP),
        curve, pull, strength, step, moved, 10 + 10 * steps, 1e-8,
    )  # fmt: skip
    return moved, step, float(shift)


def _along(
    log: Columns,
    margins: Floats,
    moved: Floats,
    here: Floats,
    chosen: npt.NDArray[np.int64],
    step: Floats,
    strength: float,
    total: float,
    objective: float,
) -> tuple[float, float]:
    """The largest of 1, 1/2, 1/4, ... that lowers the objective, and what it then is; 0 where none does."""
    size = 1.0
    while size > 1e-10:
        there = here.copy()
        there[chosen] += size * step
        reached = _objective(log, margins + size * moved, there, strength, total)
        if reached < objective:
            return size, reached
        size /= 2
    return 0.0, objective


def _objective(log: Columns, margins: Floats, weights: Floats, strength: float, total: float) -> float:
    losses = float((log_losses(margins, log.labels) * log.weights).sum())
    return losses / total + strength * float(np.abs(weights).sum())
