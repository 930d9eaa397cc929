"""Scored examples in, sums that give gradient and curvature of the mean log loss out: by coordinate, and in
full for a few frequent ones.

Three numbers of a table row, all over labelled examples with example weight o, value x and probability p:

    FIRST   sum of o x (1 - p) over label 1: what pulls the weight up
    SECOND  sum of o x p over label 0: what pulls it down
    TOUCH   sum of o p (1 - p) x x, as the bits of a float64: the curvature

The gradient of the sum of losses is SECOND - FIRST.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.coordinate import FIRST, SECOND, TOUCH, row_of
from stream.exact import sigmoid
from stream.kernel import kernel, prefetch

__all__ = ["add_sums", "gather_sums", "solve_model"]

Floats = npt.NDArray[np.float64]
Int64s = npt.NDArray[np.int64]
AHEAD = np.uint64(64)


@kernel
def add_sums(
    floats: Floats,
    slots: Int64s,
    row_ptr: Int64s,
    values: npt.NDArray[np.float32],
    labels: npt.NDArray[np.int8],
    weights: Floats,
    margins: Floats,
    first: int,
    last: int,
    frequent: Int64s,
    full: Floats,
    held: Int64s,
) -> None:
    """Adds examples first to last - 1, whose margins (float64[m]) are given.

    `frequent` int64[nnz]: place of each entry among the frequent coordinates, or -1; `full`
    float64[K + 1, K + 1]: the lower half of their curvature, the intercept last; K = 0 leaves it out. `held`
    int64[K + 1]: room for one row.
    """
    top = np.uint64(max(row_ptr[last] - 1, 0))
    K = full.shape[0] - 1
    for example in range(first, last):
        if labels[example] < 0:
            continue
        p, weight = sigmoid(margins[example]), weights[example]
        # not 1 - p: the bound scales residuals up, and with them what that would have lost
        up = weight * sigmoid(-margins[example]) if labels[example] == 1 else 0.0
        down = weight * p if labels[example] == 0 else 0.0
        curve = weight * p * (1.0 - p)
        count = 0
        for e in range(np.uint64(row_ptr[example]), np.uint64(row_ptr[example + 1])):
            prefetch(floats, row_of(max(slots[min(e + AHEAD, top)], 0)))
            row = row_of(slots[e])
            x = np.float64(values[e])
            floats[row + FIRST] += up * x
            floats[row + SECOND] += down * x
            floats[row + TOUCH] += curve * x * x
            if K > 0 and frequent[e] >= 0:
                held[count] = np.int64(e)
                count += 1
        if K > 0:
            full[K, K] += curve
            for i in range(count):
                a, x = frequent[held[i]], curve * values[held[i]]
                full[K, a] += x
                for j in range(i + 1):
                    b = frequent[held[j]]
                    full[max(a, b), min(a, b)] += x * values[held[j]]


@kernel
def gather_sums(cells: npt.NDArray[np.uint64], floats: Floats, slots: Int64s, out: Floats) -> None:
    """out[:, i] = the three sums of the row in slots[i]."""
    for i in range(len(slots)):
        row = row_of(slots[i])
        out[0, i], out[1, i], out[2, i] = floats[row + FIRST], floats[row + SECOND], floats[row + TOUCH]


@kernel
def solve_model(
    gradient: Floats, full: Floats, weights: Floats, strength: float, step: Floats, rounds: int
) -> None:
    """step = where gradient * step + step full step / 2 + strength * |weights + step| is least, nearly.

    By coordinate descent, `rounds` times over all K + 1 coordinates; the last, the intercept, has no penalty.
    All sums are over examples, `full` is symmetric.
    """
    K = len(gradient) - 1
    slope = gradient.copy()
    for _ in range(rounds):
        moved = 0.0
        for j in range(K + 1):
            curve = full[j, j]
            if not curve > 0.0:
                continue
            here = weights[j] + step[j]
            wanted = here - slope[j] / curve
            if j < K:
                wanted = np.sign(wanted) * max(abs(wanted) - strength / curve, 0.0)
            change = wanted - here
            if change != 0.0:
                step[j] += change
                moved = max(moved, change * change * curve)
                for i in range(K + 1):
                    slope[i] += change * full[j, i]
        if moved < 1e-12:
            return
