"""Margins, labels and weights in, running sums out: the compiled half of the progressive metrics.

One example at a time, so that batch cuts change no bit. Scope 0 holds the windows that were closed, 1 the
current window, 2 + code a slice. Per scope:

    counts  int64[4]        messages, rejected, labelled, labelled 1
    loss    float64         sum of weight * log loss, nats
    bins    float64[64, 3]  sums of weight, weight * label, weight * probability, by bins of the margin:
                            half a unit wide from -16 to 16, the outer two without end
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.exact import exp, log1p
from stream.kernel import kernel, small
from stream.metrics.auc_kernel import append

__all__ = ["BINS", "CLOSED", "FIRST_SLICE", "MESSAGES", "REJECTED", "WINDOW", "entropy", "tally"]

Floats = npt.NDArray[np.float64]
Int64s = npt.NDArray[np.int64]
Int8s = npt.NDArray[np.int8]

BINS = 64
BINS_PER_UNIT = 2.0
MESSAGES, REJECTED, LABELLED, POSITIVES = 0, 1, 2, 3
WEIGHT, POSITIVE, PROBABILITY = 0, 1, 2
CLOSED, WINDOW, FIRST_SLICE = 0, 1, 2


@small
def _bin(margin: float) -> int:
    """Bin of a finite margin."""
    place = margin * BINS_PER_UNIT + BINS / 2
    return int(min(max(place, 0.0), BINS - 1.0))


@small
def _add(
    counts: Int64s, loss: Floats, bins: Floats, scope: int, cell: int, label: int, weight: float,
    weighted_loss: float, weighted_probability: float,
) -> None:  # fmt: skip
    counts[scope, LABELLED] += 1
    counts[scope, POSITIVES] += label
    loss[scope] += weighted_loss
    bins[scope, cell, WEIGHT] += weight
    bins[scope, cell, POSITIVE] += weight * label
    bins[scope, cell, PROBABILITY] += weighted_probability


@kernel
def tally(
    margins: Floats, labels: Int8s, weights: Floats, codes: Int64s,
    counts: Int64s, loss: Floats, bins: Floats,
    points: Floats, fill: Int64s, items: Floats, used: Int64s,
    slice_points: Floats, slice_fill: Int64s, slice_items: Floats, slice_used: Int64s,
) -> None:  # fmt: skip
    """Adds m examples to the window: margins, weights float64[m], labels int8[m].

    codes int64[m] adds them to slices too; int64[0] where there are none. The sums are as above with a
    leading axis of scopes; the AUC arrays as in `auc_kernel`, of scopes 0 and 1, then of the slices.
    """
    sliced = len(codes) > 0
    for i in range(len(margins)):
        scope = FIRST_SLICE + codes[i] if sliced else 0
        counts[WINDOW, MESSAGES] += 1
        if sliced:
            counts[scope, MESSAGES] += 1
        label = int(labels[i])
        if label < 0:
            continue
        margin, weight = margins[i], weights[i]
        e = exp(-abs(margin))  # sigmoid and softplus of stream.exact, sharing one exp
        probability = 1.0 / (1.0 + e) if margin >= 0.0 else e / (1.0 + e)
        against = -margin if label == 1 else margin
        weighted_loss = weight * (max(against, 0.0) + log1p(e))
        weighted_probability = weight * probability
        signed = weight if label == 1 else -weight
        cell = _bin(margin)
        _add(counts, loss, bins, WINDOW, cell, label, weight, weighted_loss, weighted_probability)
        if weight > 0.0:
            append(points, fill, items, used, WINDOW, margin, signed)
        if sliced:
            _add(counts, loss, bins, scope, cell, label, weight, weighted_loss, weighted_probability)
            if weight > 0.0:
                append(slice_points, slice_fill, slice_items, slice_used, codes[i], margin, signed)


@kernel
def entropy(positive: float, negative: float) -> float:
    """Entropy in nats of a yes/no that came out so often (weights, both > 0)."""
    total = positive + negative
    return positive / total * log1p(negative / positive) + negative / total * log1p(positive / negative)
