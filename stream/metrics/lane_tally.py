"""Margins of many lanes, labels and weights in, running sums by lane and time block out.

As `tally_kernel`, for K lanes side by side; bins of the margin are finer, so that thresholds and an AUC can
be read off them, and there are two scopes: 0 the whole run, 1 its last part.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.exact import exp, log1p
from stream.kernel import kernel
from stream.metrics.tally_kernel import POSITIVE, PROBABILITY, WEIGHT

__all__ = ["LANE_BINS", "LANE_BINS_PER_UNIT", "tally_lanes"]

Floats = npt.NDArray[np.float64]

LANE_BINS = 1024
LANE_BINS_PER_UNIT = 32.0


@kernel
def tally_lanes(
    margins: Floats, labels: npt.NDArray[np.int8], weights: Floats, codes: npt.NDArray[np.int64], last: int,
    loss: Floats, block_loss: Floats, totals: Floats, bins: Floats, slice_loss: Floats, slice_totals: Floats,
) -> None:  # fmt: skip
    """Adds m examples: margins float64[m, K], labels int8[m], weights float64[m], codes int64[m] or int64[0].

    `last`: 1 in the last part of the run, else 0. Sums of weight * log loss (nats) in `loss` float64[K],
    `block_loss` float64[K] and `slice_loss` float64[slices, K]; `totals` float64[4] is messages, labelled,
    weight, weight * label, and so is each row of `slice_totals`; `bins` float64[2, K, LANE_BINS, 3] as in
    `tally_kernel`.
    """
    sliced = len(codes) > 0
    K = margins.shape[1]
    for i in range(len(margins)):
        totals[0] += 1.0
        if sliced:
            slice_totals[codes[i], 0] += 1.0
        if labels[i] < 0:
            continue
        weight, positive = weights[i], labels[i] == 1
        positive_weight = weight if positive else 0.0
        totals[1] += 1.0
        totals[2] += weight
        totals[3] += positive_weight
        if sliced:
            slice_totals[codes[i], 1] += 1.0
            slice_totals[codes[i], 2] += weight
            slice_totals[codes[i], 3] += positive_weight
        for k in range(K):
            margin = margins[i, k]
            e = exp(-abs(margin))
            probability = 1.0 / (1.0 + e) if margin >= 0.0 else e / (1.0 + e)
            against = -margin if positive else margin
            weighted_loss = weight * (max(against, 0.0) + log1p(e))
            loss[k] += weighted_loss
            block_loss[k] += weighted_loss
            if sliced:
                slice_loss[codes[i], k] += weighted_loss
            place = margin * LANE_BINS_PER_UNIT + LANE_BINS / 2
            cell = int(min(max(place, 0.0), LANE_BINS - 1.0))
            for scope in range(1 + last):
                bins[scope, k, cell, WEIGHT] += weight
                bins[scope, k, cell, POSITIVE] += positive_weight
                bins[scope, k, cell, PROBABILITY] += weight * probability
