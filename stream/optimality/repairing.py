"""Residuals that break some limits of the dual, and rows held for it, in; residuals that keep them out.

Scaling all residuals down until the worst coordinate fits costs most where the penalty is weak: a limit is
then worth a few examples, and some coordinate is always past it by as much again. Instead, only residuals
of the rows held are moved, to where all their coordinates fit and the bound is best. That is the dual of an
L1 problem over these rows, tilted by the gradient of all others, which stay as they are; the residuals of its
solution are what we want.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from stream.optimality.bound import DualPoint, residuals_of
from stream.optimality.nearby import Nearby
from stream.optimality.solving import Columns, Tilt, approach

__all__ = ["repaired"]

Floats = npt.NDArray[np.float64]
USABLE = 0.8
"""Share of what held rows could move a gradient at most that is counted on."""
TOLERANCE = 1e-6
STEPS = 20


def repaired(
    point: DualPoint,
    strength: float,
    held: Columns,
    numbers: npt.NDArray[np.int64],
    places: npt.NDArray[np.int64],
    near: Nearby,
) -> DualPoint:
    """The point after the residuals of the rows held were moved.

    `strength`: per example; `numbers` int64[r]: which examples the rows of `held` are; `places` int64[k]: the
    coordinate of each of its columns; `near`: the weights that gave the residuals.
    """
    residuals, gradient = point.residuals, point.up - point.down
    signed = point.weights * np.where(point.labels == 1, residuals, -residuals)
    old_up, old_down = held.sums(residuals[numbers])
    limit = strength * float(point.weights.sum())
    limit *= _leeway(gradient, limit, residuals[numbers], held, places)
    tilt = Tilt(
        (old_up - old_down) - gradient[places],
        np.zeros(len(places)),
        float(signed[numbers].sum() - signed.sum()),
    )
    found, intercept, _ = approach(held, near.weights[places], near.intercept, limit, tilt, TOLERANCE, STEPS)
    moved, up, down = residuals.copy(), point.up.copy(), point.down.copy()
    moved[numbers] = residuals_of(np.nan_to_num(held.margins(found, intercept)), held.labels)
    new_up, new_down = held.sums(moved[numbers])
    up[places] += new_up - old_up
    down[places] += new_down - old_down
    return replace(point, residuals=moved, up=up, down=down)


def _leeway(
    gradient: Floats, limit: float, residuals: Floats, held: Columns, places: npt.NDArray[np.int64]
) -> float:
    """By how much the limits must be passed (1: not at all) since rows held cannot move gradients more."""
    movable = np.zeros(len(gradient))
    whole = replace(held, values=np.abs(held.values))
    movable[places] = sum(whole.sums(np.minimum(residuals, 1.0 - residuals)))
    return max(float(np.max(np.abs(gradient) - USABLE * movable, initial=0.0)) / limit, 1.0)
