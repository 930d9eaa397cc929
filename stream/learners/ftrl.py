"""FTRL-Proximal with a penalty that grows: rows and examples in, updated rows and margins out.

Source: McMahan et al., "Ad click prediction: a view from the trenches", KDD 2013, Algorithm 1; a
penalty that grows with every example as in McMahan, "Follow-the-regularized-leader and mirror
descent", AISTATS 2011. Letters of the papers against the settings:

    alpha  learning_rate        beta  damping        lambda_2  l2
    lambda_1 in force for example k = l1 + strength; strength = sum of l1_per_example * weight before k
    z, n   FIRST and SECOND of a row, float64; of the intercept, without a penalty, in `sums`

A weight is a function of its row and the strength in force, so one that is not touched lapses to zero
by itself as the strength grows.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from stream.coordinate import FIRST, LEAST, NAMED, SECOND, TOUCH, leave, row_of, touched
from stream.exact import sigmoid
from stream.kernel import kernel, prefetch, small
from stream.learners.layout import (
    AHEAD,
    DAMPING,
    HORIZON,
    INTERCEPT_FIRST,
    INTERCEPT_SECOND,
    L1,
    L2,
    LEARNED,
    LIMIT,
    PER_EXAMPLE,
    RATE,
    REFUSED,
    STRENGTH,
)

__all__ = ["ftrl_intercept", "ftrl_learn", "ftrl_weights"]


@small
def _weight(z: float, root: float, strength: float, beta: float, per_alpha: float, lambda_2: float) -> float:
    """-(z - sgn(z) lambda_1) / ((beta + sqrt n) / alpha + lambda_2) where |z| > lambda_1, else 0."""
    beyond = max(abs(z) - strength, 0.0)
    return math.copysign(beyond, -z) / ((beta + root) * per_alpha + lambda_2)


@small
def _sum(terms: npt.NDArray[np.float64], count: np.uint64) -> float:
    """Sum of the first `count` terms in four lanes, by position in the row: four additions at a time."""
    a, b, c, d = 0.0, 0.0, 0.0, 0.0
    fours = count & ~np.uint64(3)
    for i in range(np.uint64(0), fours, np.uint64(4)):
        a += terms[i]
        b += terms[i + np.uint64(1)]
        c += terms[i + np.uint64(2)]
        d += terms[i + np.uint64(3)]
    for i in range(fours, count):
        a += terms[i]
    return (a + b) + (c + d)


@kernel
def ftrl_intercept(sums: npt.NDArray[np.float64], options: npt.NDArray[np.float64]) -> float:
    """The unpenalised constant: -z alpha / (beta + sqrt n)."""
    rate = options[RATE] / (options[DAMPING] + math.sqrt(sums[INTERCEPT_SECOND]))
    return float(0.0 - sums[INTERCEPT_FIRST] * rate)  # 0.0 at the start, not -0.0


@kernel
def ftrl_learn(
    cells: npt.NDArray[np.uint64],
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
    scratch: npt.NDArray[np.float64],
    margins: npt.NDArray[np.float64],
    named: npt.NDArray[np.int64],
    undo: npt.NDArray[np.uint64],
) -> int:
    """Predicts, then updates, examples first to last - 1, one after the other.

    `cells` uint64[4 * slots] and `floats` its float64 view; `slots` int64[nnz], -1 without state;
    CSR arrays as in Batch; `sums`, `counts`, `options` as in `stream.learners.layout`; `scratch`
    float64[SCRATCH, longest row]; `margins` float64[m] is filled, each before its update;
    `named` int64[nnz] receives the entries whose weight became non-zero and has no name in the
    ledger. Returns how many. Rows that `undo` (see `stream.coordinate`) asks for are left there first.
    """
    events = 0
    limit, used = undo[0], undo[1]
    beta, per_alpha, lambda_2 = options[DAMPING], 1.0 / options[RATE], options[L2]
    zs, ns, roots, ws, terms = scratch[0], scratch[1], scratch[2], scratch[3], scratch[4]
    top = np.uint64(max(row_ptr[last] - 1, 0))
    for example in range(first, last):
        begin = np.uint64(row_ptr[example])
        count = np.uint64(row_ptr[example + 1]) - begin
        strength = options[L1] + sums[STRENGTH]
        intercept = ftrl_intercept(sums, options)
        for i in range(count):
            prefetch(floats, row_of(max(slots[min(begin + i + AHEAD, top)], 0)))
            if slots[begin + i] >= 0:
                row = row_of(slots[begin + i])
                zs[i], ns[i] = floats[row + FIRST], floats[row + SECOND]
            else:
                zs[i], ns[i] = 0.0, 0.0
        for i in range(count):  # vector instructions: no branch
            roots[i] = math.sqrt(ns[i])
            ws[i] = _weight(zs[i], roots[i], strength, beta, per_alpha, lambda_2)
            terms[i] = ws[i] * values[begin + i]
        margin = intercept + _sum(terms, count)
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
        for i in range(count):  # vector instructions again
            g = gradient * values[begin + i]
            grown = ns[i] + g * g
            zs[i] = zs[i] + g - (math.sqrt(grown) - roots[i]) * per_alpha * ws[i]
            ns[i] = grown
        for i in range(count):
            if slots[begin + i] < 0:
                continue
            if not abs(zs[i]) + ns[i] < LIMIT:
                counts[REFUSED] += 1
                continue
            row = row_of(slots[begin + i])
            word = cells[row + TOUCH]
            if word - LEAST < limit:
                used = leave(undo, used, cells, row)
            floats[row + FIRST] = zs[i]
            floats[row + SECOND] = ns[i]
            word = touched(word, number)
            if abs(zs[i]) > strength and word & NAMED == np.uint64(0):
                word |= NAMED
                named[events] = begin + i
                events += 1
            cells[row + TOUCH] = word
        n = sums[INTERCEPT_SECOND]
        grown = n + gradient * gradient
        sums[INTERCEPT_FIRST] += gradient - (math.sqrt(grown) - math.sqrt(n)) * per_alpha * intercept
        sums[INTERCEPT_SECOND] = grown
    undo[1] = used
    return events


@kernel
def ftrl_weights(
    cells: npt.NDArray[np.uint64],
    floats: npt.NDArray[np.float64],
    begin: int,
    end: int,
    sums: npt.NDArray[np.float64],
    options: npt.NDArray[np.float64],
    out: npt.NDArray[np.float64],
) -> None:
    """out[i] = weight in slot begin + i at the strength in force; 0 in an empty slot, whatever it holds."""
    strength = options[L1] + sums[STRENGTH]
    beta, per_alpha, lambda_2 = options[DAMPING], 1.0 / options[RATE], options[L2]
    for slot in range(begin, end):
        row = row_of(slot)
        out[slot - begin] = 0.0
        if cells[row] != np.uint64(0):
            root = math.sqrt(floats[row + SECOND])
            out[slot - begin] = _weight(floats[row + FIRST], root, strength, beta, per_alpha, lambda_2)
