"""Margins of one lane in bins, as `lane_tally` leaves them, in; ranking, calibration and thresholds out.

A bin is 1/32 of a unit of margin wide, the two outer ones are open. Everything is weighted by example weight.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.metrics.lane_tally import LANE_BINS, LANE_BINS_PER_UNIT
from stream.metrics.tally_kernel import POSITIVE, PROBABILITY, WEIGHT, entropy

__all__ = ["auc", "calibration_error", "calibration_ratio", "entropy_of", "reliability", "thresholds"]

Floats = npt.NDArray[np.float64]

STEPS = 20
"""Bins of the reliability diagram, of equal width in probability."""
TOP_SHARE = 0.995
"""Share of the weight that those bins spread over; the rest, often far out, is in one more."""
MOST_THRESHOLDS = 200
COARSE = int(LANE_BINS_PER_UNIT) // 2
"""Bins in half a unit of margin, the width over which docs/metrics.md takes the calibration error."""


def auc(bins: Floats) -> float | None:
    """Area under the ROC curve; pairs of one bin count half, and are all that it can be wrong by."""
    positive = bins[:, POSITIVE]
    negative = np.maximum(bins[:, WEIGHT] - positive, 0.0)
    pairs = positive.sum() * negative.sum()
    if not pairs > 0:
        return None
    below = np.cumsum(negative) - negative
    return float((positive * (below + 0.5 * negative)).sum() / pairs)


def calibration_ratio(bins: Floats) -> float | None:
    """Expected over observed yes answers."""
    observed = bins[:, POSITIVE].sum()
    return float(bins[:, PROBABILITY].sum() / observed) if observed > 0 else None


def calibration_error(bins: Floats) -> float | None:
    """Expected calibration error over bins half a unit of margin wide, as docs/metrics.md has it."""
    weight = bins[:, WEIGHT].sum()
    if not weight > 0:
        return None
    coarse = bins.reshape(-1, COARSE, 3).sum(axis=1)
    return float(np.abs(coarse[:, POSITIVE] - coarse[:, PROBABILITY]).sum() / weight)


def entropy_of(positive: float, weight: float) -> float | None:
    """Nats that a guesser loses who knows the share of yes answers; None where all answers are the same."""
    return float(entropy(positive, weight - positive)) if 0 < positive < weight else None


def reliability(bins: Floats) -> list[dict[str, float]]:
    """Bins by predicted probability that hold something: limits, mean prediction, share of yes, weight.

    Equal steps from 0 to where nearly all predictions lie, so that a rare outcome is not all in one bin.
    """
    held = np.flatnonzero(bins[:, WEIGHT] > 0)
    if not len(held):
        return []
    heaped = np.cumsum(bins[held, WEIGHT])
    crowd = held[np.searchsorted(heaped, TOP_SHARE * heaped[-1])]
    edges = np.linspace(0.0, _probability(int(crowd) + 1), STEPS + 1)
    mean = bins[held, PROBABILITY] / bins[held, WEIGHT]
    step = np.minimum(np.searchsorted(edges, mean, side="right") - 1, STEPS - 1)
    step[held > crowd] = STEPS
    found = []
    for at in np.unique(step):
        weight, positive, predicted = bins[held[step == at]].sum(axis=0).tolist()
        found.append(
            {
                "from": float(edges[at]),
                "to": float(edges[at + 1]) if at < STEPS else _probability(int(held[-1]) + 1),
                "predicted": predicted / weight,
                "observed": positive / weight,
                "weight": weight,
            }
        )
    return found


def thresholds(bins: Floats) -> list[dict[str, Any]]:
    """What flagging every message from a probability on gives, from high thresholds to low.

    `flagged`: share of the labelled messages (by weight); `precision`: share of yes among them; `recall`:
    share of all yes that they hold, None where there is none. The last threshold flags everything.
    """
    held = np.flatnonzero(bins[:, WEIGHT] > 0)[::-1]
    if not len(held):
        return []
    weight, positive = np.cumsum(bins[held, WEIGHT]), np.cumsum(bins[held, POSITIVE])
    shown = np.unique(np.linspace(0, len(held) - 1, min(len(held), MOST_THRESHOLDS)).round().astype(np.int64))
    return [
        {
            "threshold": _probability(int(held[i])),
            "flagged": float(weight[i] / weight[-1]),
            "precision": float(positive[i] / weight[i]),
            "recall": float(positive[i] / positive[-1]) if positive[-1] > 0 else None,
        }
        for i in shown
    ]


def _probability(edge: int) -> float:
    """At the lower edge of a bin; the outer edges are those of all margins."""
    if edge <= 0:
        return 0.0
    if edge >= LANE_BINS:
        return 1.0
    return 1.0 / (1.0 + math.exp((LANE_BINS / 2 - edge) / LANE_BINS_PER_UNIT))
