"""A log in memory and weights to begin with in; the batch optimum, as near as wanted, with its proof out.

`approach` does the same for part of a log, with a tilt that stands for the rest of it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.optimality.bound import (
    Bound,
    DualPoint,
    best_intercept,
    log_losses,
    lower_bound,
    probabilities,
    residuals_of,
)
from stream.optimality.solver_kernel import add_columns, column_sums, curvatures, descend

__all__ = ["Columns", "Solution", "Tilt", "approach", "solve"]

Floats = npt.NDArray[np.float64]
MOST_STEPS = 500
MOST_ROUNDS = 300
STALLED = 20
"""Steps in which the proof must come nearer by a tenth, or there is no end in sight."""
NEAR = 0.97
"""A zero weight takes part where its gradient is beyond this share of the strength."""
STEEP = 1e-18
CAREFUL = 0.1
LEAST_CAUTION = 1e-6


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

    def margins(self, weights: Floats, intercept: float) -> Floats:
        """float64[m] of weights float64[n]."""
        margins = np.full(len(self.labels), float(intercept))
        add_columns(self.starts, self.rows, self.values, np.arange(len(weights)), weights, margins)
        return margins

    def sums(self, residuals: Floats) -> tuple[Floats, Floats]:
        """Of each column, the sums of o x u over label 1 and over label 0, u the residual (float64[m])."""
        up, down = np.empty(len(self.starts) - 1), np.empty(len(self.starts) - 1)
        one, weighted = self.labels == 1, self.weights * residuals
        column_sums(self.starts, self.rows, self.values, np.where(one, weighted, 0.0), up)
        column_sums(self.starts, self.rows, self.values, np.where(one, 0.0, weighted), down)
        return up, down

    def curvatures(self, curve: Floats, columns: npt.NDArray[np.int64] | None = None) -> Floats:
        """Sums of value^2 * curve (float64[m]) of the columns given, or of all."""
        chosen = np.arange(len(self.starts) - 1) if columns is None else columns
        steep = np.empty(len(chosen))
        curvatures(self.starts, self.rows, self.values, chosen, curve, steep)
        return steep


@dataclass(frozen=True, slots=True)
class Tilt:
    """What is added to the sum of losses: slope * weights + curvature / 2 * (weights - start)^2, of each
    column (float64[n]), and `pull` * intercept."""

    slope: Floats
    curvature: Floats
    pull: float


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
    """Goes on from the given weights until the gap is under `tolerance` of the objective, or steps help
    hardly any more.

    `strength`: per unit of example weight, > 0. `tell` is given the gap, as a share of the objective, after
    each step.
    """
    total = float(log.weights.sum())
    point = _Point.at(log, weights, intercept)
    point = _Point(point.weights, *_with_best_intercept(log, point))
    best, steps = Bound(0.0, 0.0), 0

    def value(at: _Point) -> float:
        losses = float((log_losses(at.margins, log.labels) * log.weights).sum())
        return losses / total + strength * float(np.abs(at.weights).sum())

    objective, none, caution = value(point), np.zeros(len(weights)), 0.0
    gaps: list[float] = []
    while True:
        up, down = log.sums(residuals_of(point.margins, log.labels))
        bound = lower_bound(DualPoint.of(point.margins, log.labels, log.weights, up, down), strength)
        best = max(best, bound, key=lambda one: one.value)
        tell((objective - best.value) / objective)
        gaps.append(objective - best.value)
        if gaps[-1] <= tolerance * objective or steps == MOST_STEPS:
            break
        if steps > STALLED and gaps[-1] > 0.9 * gaps[-STALLED]:
            break
        pull = float((log.weights * (probabilities(point.margins) - log.labels)).sum())
        step = _direction(log, point, down - up, none, pull, strength * total, steps, caution)
        point, objective, size = _along(point, step, value, objective)
        if size == 0.0 and caution == 1.0:
            break
        caution = _next_caution(caution, size)
        steps += 1
    return Solution(point.weights, point.intercept, objective, best.value, steps)


def approach(
    log: Columns,
    weights: Floats,
    intercept: float,
    strength: float,
    tilt: Tilt,
    tolerance: float,
    most_steps: int,
) -> tuple[Floats, float, Floats]:
    """Weights and intercept from the given ones towards where losses, `tilt` and penalty are least together,
    and the gradient of the first two there.

    `strength`: on the sum of losses. Ends when no gradient is more than `tolerance` of its limit beyond it,
    after `most_steps`, or where no step helps.
    """
    start = np.array(weights, np.float64)
    point = _Point.at(log, start, intercept)

    def value(at: _Point) -> float:
        losses = float((log_losses(at.margins, log.labels) * log.weights).sum())
        away = at.weights - start
        tilted = float(tilt.slope @ away + 0.5 * (tilt.curvature * away) @ away)
        return losses + tilted + tilt.pull * at.intercept + strength * float(np.abs(at.weights).sum())

    objective, steps, caution = value(point), 0, 0.0
    while True:
        up, down = log.sums(residuals_of(point.margins, log.labels))
        gradient = down - up + tilt.slope + tilt.curvature * (point.weights - start)
        beyond = float(np.max(np.abs(gradient), initial=0.0)) / strength - 1.0
        if (steps and beyond <= tolerance) or steps == most_steps:
            break
        pull = float((log.weights * (probabilities(point.margins) - log.labels)).sum()) + tilt.pull
        step = _direction(log, point, gradient, tilt.curvature, pull, strength, steps, caution)
        point, objective, size = _along(point, step, value, objective)
        if size == 0.0 and caution == 1.0:
            break
        caution = _next_caution(caution, size)
        steps += 1
    return point.weights, point.intercept, gradient


@dataclass(frozen=True, slots=True)
class _Point:
    """Weights float64[n], intercept, and the margins float64[m] that they give; or a change of these."""

    weights: Floats
    intercept: float
    margins: Floats

    @classmethod
    def at(cls, log: Columns, weights: Floats, intercept: float) -> _Point:
        here = np.array(weights, np.float64)
        return cls(here, intercept, log.margins(here, intercept))

    def plus(self, size: float, step: _Point) -> _Point:
        return _Point(
            self.weights + size * step.weights,
            self.intercept + size * step.intercept,
            self.margins + size * step.margins,
        )


def _with_best_intercept(log: Columns, point: _Point) -> tuple[float, Floats]:
    shift = best_intercept(point.margins, log.labels, log.weights)
    return point.intercept + shift, point.margins + shift


def _direction(
    log: Columns,
    point: _Point,
    gradient: Floats,
    extra: Floats,
    pull: float,
    strength: float,
    steps: int,
    caution: float,
) -> _Point:
    """The change to where the second-order model is least, nearly. See `_next_caution`."""
    chosen = np.flatnonzero((point.weights != 0.0) | (np.abs(gradient) > NEAR * strength))
    curve = log.weights * _curve(point.margins, caution) + STEEP
    steep = log.curvatures(curve, chosen)
    moved, step = np.zeros(len(curve)), np.zeros(len(chosen))
    shift = descend(
        log.starts, log.rows, log.values, chosen, point.weights[chosen], gradient[chosen],
        np.maximum(steep + extra[chosen], STEEP), extra[chosen], curve, pull, strength, step, moved,
        min(10 + 10 * steps, MOST_ROUNDS), 1e-8,
    )  # fmt: skip
    change = np.zeros(len(point.weights))
    change[chosen] = step
    return _Point(change, float(shift), moved)


def _curve(margins: Floats, caution: float) -> Floats:
    """Curvature of each loss: its own, mixed with a share `caution` of that of the parabola above it.

    The parabola touches the loss at the margin and is nowhere below it (Jaakkola, Jordan, Statistics and
    Computing 10:25-37, 2000; from memory), so with caution 1 every step lowers the objective.
    """
    p = probabilities(margins)
    size = np.maximum(np.abs(margins), 1e-4)
    above = np.tanh(size / 2) / (2 * size)
    return np.asarray((1.0 - caution) * p * (1.0 - p) + caution * above)


def _next_caution(caution: float, size: float) -> float:
    """Full caution where only a small part of a step helped: margins are so far out that the losses have no
    curvature left there, and steps run away. A tenth of it where whole steps help."""
    if size < CAREFUL:
        return 1.0
    if size < 1.0:
        return caution
    return caution / 10 if caution > LEAST_CAUTION else 0.0


def _along(
    point: _Point, step: _Point, value: Callable[[_Point], float], objective: float
) -> tuple[_Point, float, float]:
    """As far as lowers the objective, of 1, 1/2, 1/4, ..., what it then is, and how far: 0 if nowhere."""
    size = 1.0
    while size > 1e-10:
        there = point.plus(size, step)
        with np.errstate(over="ignore", invalid="ignore"):  # a tilted problem may have no end
            reached = value(there)
        if reached < objective:
            return there, reached, size
        size /= 2
    return point, objective, 0.0
