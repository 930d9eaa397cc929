"""Sums over a log and a sample of its rows in; weights much nearer to the batch optimum out.

The sample's own optimum is far from the log's, by the noise of its gradient. So its losses are tilted: what
is added makes gradient and curvature of every coordinate those of the whole log at the weights that were
scored (the gradient correction of Johnson, Zhang, "Accelerating stochastic gradient descent using predictive
variance reduction", NIPS 2013; from memory). What remains of the sample is how coordinates go together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.optimality.bound import probabilities, residuals_of
from stream.optimality.solving import Columns, Tilt, approach

__all__ = ["Nearby", "Sums", "nearby"]

Floats = npt.NDArray[np.float64]
TOLERANCE = 1e-6
STEPS = 10
FARTHEST = 1e3


@dataclass(frozen=True, slots=True)
class Sums:
    """Of the whole log at some weights: `up`, `down`, `curve` float64[n] as in `sums_kernel`, of all
    coordinates; `pull`: gradient in the intercept; `total`: example weight."""

    up: Floats
    down: Floats
    curve: Floats
    pull: float
    total: float

    @property
    def gradient(self) -> Floats:
        """Of the sum of losses, float64[n]."""
        return self.down - self.up


@dataclass(frozen=True, slots=True)
class Nearby:
    """`weights` float64[n] and intercept; `gradient` float64[n]: what the model says it is there."""

    weights: Floats
    intercept: float
    gradient: Floats


def nearby(
    sums: Sums,
    weights: Floats,
    intercept: float,
    sample: Columns,
    places: npt.NDArray[np.int64],
    strength: float,
) -> Nearby:
    """Where the tilted sample's objective is least, nearly.

    `weights` float64[n] and `intercept`: those at which `sums` were taken; `places` int64[k]: the coordinate
    of each column of the sample; `strength` on the sum of losses.
    """
    with np.errstate(divide="ignore", invalid="ignore"):  # coordinates that the sample lacks: one by one
        wanted = weights - sums.gradient / sums.curve
        moved = np.sign(wanted) * np.maximum(np.abs(wanted) - strength / sums.curve, 0.0)
    moved = np.where(sums.curve > 0.0, moved, 0.0)
    moved = np.clip(np.nan_to_num(moved), -FARTHEST, FARTHEST)  # any weights do for the bound
    gradient = sums.gradient + sums.curve * (moved - weights)
    share = float(sample.weights.sum()) / sums.total
    tilt = _tilt(sums, weights[places], intercept, sample, places, share)
    found, there, slope = approach(
        sample, weights[places], intercept, strength * share, tilt, TOLERANCE, STEPS
    )
    moved[places] = np.clip(np.nan_to_num(found), -FARTHEST, FARTHEST)
    gradient[places] = slope / share
    return Nearby(moved, float(np.clip(np.nan_to_num(there), -FARTHEST, FARTHEST)), gradient)


def _tilt(
    sums: Sums,
    weights: Floats,
    intercept: float,
    sample: Columns,
    places: npt.NDArray[np.int64],
    share: float,
) -> Tilt:
    margins = sample.margins(weights, intercept)
    p = probabilities(margins)
    up, down = sample.sums(residuals_of(margins, sample.labels))
    curve = sample.curvatures(sample.weights * p * (1.0 - p))
    pull = float((sample.weights * (p - sample.labels)).sum())
    return Tilt(
        sums.gradient[places] * share - (down - up),
        np.maximum(sums.curve[places] * share - curve, 0.0),
        sums.pull * share - pull,
    )
