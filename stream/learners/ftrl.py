"""FTRL-Proximal with a penalty that grows: rows and examples in, updated rows and margins out.

Source: McMahan et al., "Ad click prediction: a view from the trenches", KDD 2013, Algorithm 1; a
penalty that grows with every example as in McMahan, "Follow-the-regularized-leader and mirror
descent", AISTATS 2011. Letters of the papers against the settings:

    alpha  learning_rate        beta  damping        lambda_2  l2
    lambda_1 in force for example k = l1 + strength; strength = sum of l1_per_example * weight before k
    z, n   FIRST and SECOND of a row, float64

A weight is a function of its row and the strength in force, so one that is not touched lapses to zero
by itself as the strength grows. The intercept has a z and n of its own and no penalty.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from stream.coordinate import FIRST, NAMED, SECOND, TOUCH, touched
from stream.exact import sigmoid
from stream.kernel import kernel, small

__all__ = ["LIMIT", "ftrl_intercept", "ftrl_learn", "ftrl_weights"]

LIMIT = 1e300
"""Sums beyond this are not stored: the update is refused, so that a weight can never stop being finite."""

# places in `sums`, `counts`, `options`: see stream.learners.learner
STRENGTH, INTERCEPT_FIRST, INTERCEPT_SECOND = 0, 1, 2
LEARNED, REFUSED = 0, 1
RATE, DAMPING, L1, PER_EXAMPLE, L2, HORIZON = 0, 1, 2, 3, 4, 5


@small
def ftrl_weight(z: float, n: float, strength: float, options: npt.NDArray[np.float64]) -> float:
    """w = 0 if |z| <= lambda_1, else -(z - sgn(z) lambda_1) / ((beta + sqrt n) / alpha + lambda_2)."""
    if z > strength:
        return (strength - z) / ((options[DAMPING] + math.sqrt(n)) / options[RATE] + options[L2])
    if z < -strength:
        return (-strength - z) / ((options[DAMPING] + math.sqrt(n)) / options[RATE] + options[L2])
    return 0.0


@kernel
def ftrl_intercept(sums: npt.NDArray[np.float64], options: npt.NDArray[np.float64]) -> float:
    """The unpenalised constant: -z / ((beta + sqrt n) / alpha)."""
    return -sums[INTERCEPT_FIRST] / (
        (options[DAMPING] + math.sqrt(sums[INTERCEPT_SECOND])) / options[RATE]
    )


@kernel
def ftrl_learn(
    rows: npt.NDArray[np.uint64],
    floats: npt.NDArray[np.float64],
    slots: npt.NDArray[np.int64],
    row_ptr: npt.NDArray[np.int64],
    values: npt.NDArray[np.float32],
    labels: npt.NDArray[np.int8],
    weights: npt.NDArray[np.float64],
    first: int,
    last: int,
    sums: npt.NDArray[np.float64],
    counts: npt.NDArray[np.int64],
    options: npt.NDArray[np.float64],
    row_weights: npt.NDArray[np.float64],
    margins: npt.NDArray[np.float64],
    named: npt.NDArray[np.int64],
) -> int:
    """Predicts, then updates, examples first to last - 1 in order.

    `rows` uint64[slots, 4] and `floats` its float64 view; `slots` int64[nnz]; CSR arrays as in Batch;
    `row_weights` float64[longest row] is scratch; `margins` float64[m] is filled before each update;
    `named` int64[nnz] receives entries whose weight became non-zero without a name in the ledger.
    Returns how many.
    """
    events = 0
    alpha = options[RATE]
    for example in range(first, last):
        begin = row_ptr[example]
        end = row_ptr[example + 1]
        strength = options[L1] + sums[STRENGTH]
        intercept = ftrl_intercept(sums, options)
        margin = intercept
        for e in range(begin, end):
            slot = slots[e]
            w = 0.0
            if slot >= 0:
                w = ftrl_weight(floats[slot, FIRST], floats[slot, SECOND], strength, options)
                margin += w * values[e]
            row_weights[e - begin] = w
        margins[example] = margin
        if labels[example] < 0:
            continue
        if not abs(margin) < LIMIT:
            counts[REFUSED] += 1
            continue
        counts[LEARNED] += 1
        number = np.uint64(counts[LEARNED])
        gradient = (sigmoid(margin) - labels[example]) * weights[example]
        if counts[LEARNED] <= options[HORIZON]:
            sums[STRENGTH] += options[PER_EXAMPLE] * weights[example]
        strength = options[L1] + sums[STRENGTH]
        for e in range(begin, end):
            slot = slots[e]
            if slot < 0:
                continue
            g = gradient * values[e]
            n = floats[slot, SECOND]
            grown = n + g * g
            z = floats[slot, FIRST] + g
            w = row_weights[e - begin]
            if w != 0.0:
                z -= (math.sqrt(grown) - math.sqrt(n)) / alpha * w
            if not (abs(z) < LIMIT and grown < LIMIT):
                counts[REFUSED] += 1
                continue
            floats[slot, FIRST] = z
            floats[slot, SECOND] = grown
            word = touched(rows[slot, TOUCH], number)
            if abs(z) > strength and word & NAMED == np.uint64(0):
                word |= NAMED
                named[events] = e
                events += 1
            rows[slot, TOUCH] = word
        n = sums[INTERCEPT_SECOND]
        grown = n + gradient * gradient
        sums[INTERCEPT_FIRST] += gradient - (math.sqrt(grown) - math.sqrt(n)) / alpha * intercept
        sums[INTERCEPT_SECOND] = grown
    return events


@kernel
def ftrl_weights(
    floats: npt.NDArray[np.float64],
    begin: int,
    end: int,
    sums: npt.NDArray[np.float64],
    options: npt.NDArray[np.float64],
    out: npt.NDArray[np.float64],
) -> None:
    """out[i] = weight of the row begin + i at the strength in force now (0 for an empty slot)."""
    strength = options[L1] + sums[STRENGTH]
    for slot in range(begin, end):
        out[slot - begin] = ftrl_weight(floats[slot, FIRST], floats[slot, SECOND], strength, options)
