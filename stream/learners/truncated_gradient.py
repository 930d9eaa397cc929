"""Truncated gradient with lazy catch-up: rows and examples in, updated rows and margins out.

Source: Langford, Li, Zhang, "Sparse online learning via truncated gradient", JMLR 10 (2009), with
period K = 1 and theta infinite, where T1 is the soft threshold. Letters against the settings:

    eta    learning_rate, constant
    g      gravity of example k: l1_per_example * its weight
    w      FIRST of a row; SECOND is the accumulated strength up to which w has been truncated

Every weight is truncated at every example; for one that is not touched that is put off until it is,
which is exact, since soft thresholds add up: T1(T1(w, a), b) = T1(w, a + b).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.coordinate import FIRST, LEAST, NAMED, SECOND, TOUCH, leave, row_of, touched
from stream.exact import sigmoid
from stream.kernel import kernel, prefetch, small
from stream.learners.layout import (
    AHEAD,
    INTERCEPT_FIRST,
    LEARNED,
    LIMIT,
    PER_EXAMPLE,
    RATE,
    REFUSED,
    STRENGTH,
)

__all__ = [
    "truncate",
    "truncated_gradient_intercept",
    "truncated_gradient_learn",
    "truncated_gradient_weights",
]

WEIGHT_LIMIT = 1e30
"""Largest weight that is stored: a snapshot's float32 must hold it."""


@small
def truncate(w: float, a: float) -> float:
    """T1(w, a) for theta infinite: w drawn towards zero by a >= 0, never across it."""
    if w > a:
        return w - a
    if w < -a:
        return w + a
    return 0.0


@kernel
def truncated_gradient_intercept(sums: npt.NDArray[np.float64], options: npt.NDArray[np.float64]) -> float:
    """The unpenalised constant."""
    return float(sums[INTERCEPT_FIRST])


@kernel
def truncated_gradient_learn(
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
    """Predicts, then updates, examples first to last - 1; arguments and result as of `ftrl_learn`."""
    events = 0
    limit, used = undo[0], undo[1]
    eta, row_weights = options[RATE], scratch[0]
    top = np.uint64(max(row_ptr[last] - 1, 0))
    for example in range(first, last):
        begin = np.uint64(row_ptr[example])
        end = np.uint64(row_ptr[example + 1])
        strength = sums[STRENGTH]
        margin = sums[INTERCEPT_FIRST]
        for e in range(begin, end):
            prefetch(floats, row_of(max(slots[min(e + AHEAD, top)], 0)))
            w = 0.0
            if slots[e] >= 0:
                row = row_of(slots[e])
                w = truncate(floats[row + FIRST], eta * (strength - floats[row + SECOND]))
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
        sums[STRENGTH] += options[PER_EXAMPLE] * weights[example]
        drawn = eta * (sums[STRENGTH] - strength)
        for e in range(begin, end):
            if slots[e] < 0:
                continue
            row = row_of(slots[e])
            w = row_weights[e - begin] - eta * gradient * values[e]
            if not abs(w) < WEIGHT_LIMIT:
                counts[REFUSED] += 1
                continue
            word = cells[row + TOUCH]
            if word - LEAST < limit:
                used = leave(undo, used, cells, row)
            floats[row + FIRST] = w
            floats[row + SECOND] = strength
            word = touched(word, number)
            if abs(w) > drawn and word & NAMED == np.uint64(0):
                word |= NAMED
                named[events] = e
                events += 1
            cells[row + TOUCH] = word
        moved = sums[INTERCEPT_FIRST] - eta * gradient
        if abs(moved) < WEIGHT_LIMIT:
            sums[INTERCEPT_FIRST] = moved
        else:
            counts[REFUSED] += 1
    undo[1] = used
    return events


@kernel
def truncated_gradient_weights(
    cells: npt.NDArray[np.uint64],
    floats: npt.NDArray[np.float64],
    begin: int,
    end: int,
    sums: npt.NDArray[np.float64],
    options: npt.NDArray[np.float64],
    out: npt.NDArray[np.float64],
) -> None:
    """out[i] = weight in slot begin + i, truncated up to now; 0 in an empty slot, whatever it holds."""
    for slot in range(begin, end):
        row = row_of(slot)
        w = 0.0
        if cells[row] != np.uint64(0):
            w = truncate(floats[row + FIRST], options[RATE] * (sums[STRENGTH] - floats[row + SECOND]))
        out[slot - begin] = w
