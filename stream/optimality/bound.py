"""Residuals and gradients of some weights in; a lower bound of the batch optimum's objective out.

The dual of the mean-loss L1 problem (Koh, Kim, Boyd, JMLR 8:1519-1555, 2007; from memory): take any numbers
0 <= u <= 1, one an example, whose weighted sum over label 1 is that over label 0, and for which
|sum o x (u where label 1, -u where label 0)| <= strength * W in every coordinate. Then no weights have an
objective below D = (1/W) sum o H(u), H the binary entropy in nats.

u is made of the residuals of weights near the optimum: 1 - p where the label is 1 and p where it is 0, the
two sides scaled so that their sums agree, both then scaled down until every coordinate fits.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = [
    "Bound",
    "DualPoint",
    "best_intercept",
    "entropies",
    "log_losses",
    "lower_bound",
    "probabilities",
    "residuals_of",
]

Floats = npt.NDArray[np.float64]
HALVINGS = 30


@dataclass(frozen=True, slots=True)
class Bound:
    """`value`: no weights have a lower objective, nats a message; `scale`: how far the residuals were scaled
    down to fit, 1 at the optimum."""

    value: float
    scale: float


def log_losses(margins: Floats, labels: npt.NDArray[np.int8]) -> Floats:
    """Nats of each example: float64[m]."""
    return np.asarray(np.logaddexp(0.0, np.where(labels == 1, -margins, margins)))


def best_intercept(margins: Floats, labels: npt.NDArray[np.int8], weights: Floats) -> float:
    """What to add to all margins so that their mean log loss is least, by Newton's method with halving.

    There is none where only one label has weight: then 0.
    """
    total, positive = float(weights.sum()), float(weights[labels == 1].sum())
    if not 0.0 < positive < total:
        return 0.0
    shift = 0.0
    slope, curve = _derivatives(margins + shift, labels, weights)
    for _ in range(100):
        step = -slope / max(curve, 1e-300)
        step = min(max(step, -4.0), 4.0)
        while True:
            moved, curve = _derivatives(margins + (shift + step), labels, weights)
            if abs(moved) <= abs(slope) or abs(step) < 1e-15:
                break
            step /= 2
        shift += step
        if abs(moved) >= abs(slope) * (1 - 1e-12) or abs(moved) < 1e-13 * total:
            break
        slope = moved
    return shift


def _derivatives(margins: Floats, labels: npt.NDArray[np.int8], weights: Floats) -> tuple[float, float]:
    p = probabilities(margins)
    return float((weights * (p - labels)).sum()), float((weights * p * (1 - p)).sum())


def probabilities(margins: Floats) -> Floats:
    """1 / (1 + e**-margin), without overflow."""
    e = np.exp(-np.abs(margins))
    return np.where(margins >= 0, 1.0, e) / (1.0 + e)


def residuals_of(margins: Floats, labels: npt.NDArray[np.int8]) -> Floats:
    """1 - p where the label is 1, p where it is 0: float64[m]; small ones keep their digits."""
    return probabilities(np.where(labels == 1, -margins, margins))


@dataclass(frozen=True, slots=True)
class DualPoint:
    """Residuals u, or any other numbers between 0 and 1, float64[m]; `labels` int8[m], 0 or 1; `weights`
    float64[m]; `up`, `down` float64[n]: sums of o x u over label 1 and over label 0 of every coordinate."""

    residuals: Floats
    labels: npt.NDArray[np.int8]
    weights: Floats
    up: Floats
    down: Floats

    @classmethod
    def of(
        cls, margins: Floats, labels: npt.NDArray[np.int8], weights: Floats, up: Floats, down: Floats
    ) -> DualPoint:
        """The residuals of weights that give these margins (float64[m])."""
        return cls(residuals_of(margins, labels), labels, weights, up, down)


def lower_bound(point: DualPoint, strength: float) -> Bound:
    """The best bound from this point scaled; `strength`: per example."""
    residuals, weights, up, down = point.residuals, point.weights, point.up, point.down
    total = float(weights.sum())
    one = point.labels == 1
    of_one, of_zero = float((weights * residuals)[one].sum()), float((weights * residuals)[~one].sum())
    if not (of_one > 0.0 and of_zero > 0.0):
        return Bound(0.0, 0.0)
    middle = (of_one + of_zero) / 2
    scale_one, scale_zero = middle / of_one, middle / of_zero
    u = residuals * np.where(one, scale_one, scale_zero)
    steepest = float(np.max(np.abs(scale_one * up - scale_zero * down), initial=0.0)) / total
    most = min(1.0 / float(u.max()), strength / steepest if steepest > 0 else np.inf)
    most *= 1 - 1e-12  # rounding may not carry it over the edge

    def slope(scale: float) -> float:
        """Of the bound in the scale, times the total weight."""
        v = np.clip(u * scale, 1e-300, 1.0 - 1e-16)
        return float((weights * u * np.log((1.0 - v) / v)).sum())

    low, high = 0.0, most
    if slope(most) < 0.0:  # concave in the scale: nearly always the edge, else inside
        for _ in range(HALVINGS):
            middle = (low + high) / 2
            low, high = (middle, high) if slope(middle) > 0.0 else (low, middle)
    return Bound(float((weights * entropies(u * high)).sum()) / total, high)


def entropies(u: Floats) -> Floats:
    """-u ln u - (1 - u) ln(1 - u), nats, 0 at both ends."""
    inside = np.clip(u, 1e-300, 1.0)
    rest = np.clip(1.0 - u, 1e-300, 1.0)
    return -u * np.log(inside) - (1.0 - u) * np.log(rest)
