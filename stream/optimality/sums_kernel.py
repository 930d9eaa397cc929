"""Scored examples in, sums that give gradient and curvature of the mean log loss by coordinate out.

Three numbers of a table row, all over labelled examples with example weight o, value x and probability p:

    FIRST   sum of o x (1 - p) over label 1: what pulls the weight up
    SECOND  sum of o x p over label 0: what pulls it down
    TOUCH   sum of o p (1 - p) x x, as the bits of a float64: the curvature

The gradient of the sum of losses is SECOND - FIRST. In a second pass TOUCH is room instead: how far the
examples kept so far can move the gradient of a coordinate that is near its limit, or infinity for others.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.coordinate import FIRST, SECOND, TOUCH, row_of
from stream.exact import sigmoid
from stream.kernel import kernel, prefetch

__all__ = ["add_and_keep", "add_sums", "begin_again", "gather_sums"]

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
) -> None:
    """Adds examples first to last - 1, whose margins (float64[m]) are given."""
    top = np.uint64(max(row_ptr[last] - 1, 0))
    for example in range(first, last):
        if labels[example] < 0:
            continue
        p, weight = sigmoid(margins[example]), weights[example]
        # not 1 - p: the bound scales residuals up, and with them what that would have lost
        up = weight * sigmoid(-margins[example]) if labels[example] == 1 else 0.0
        down = weight * p if labels[example] == 0 else 0.0
        curve = weight * p * (1.0 - p)
        for e in range(np.uint64(row_ptr[example]), np.uint64(row_ptr[example + 1])):
            prefetch(floats, row_of(max(slots[min(e + AHEAD, top)], 0)))
            row = row_of(slots[e])
            x = np.float64(values[e])
            floats[row + FIRST] += up * x
            floats[row + SECOND] += down * x
            floats[row + TOUCH] += curve * x * x


@kernel
def add_and_keep(
    floats: Floats,
    slots: Int64s,
    row_ptr: Int64s,
    values: npt.NDArray[np.float32],
    labels: npt.NDArray[np.int8],
    weights: Floats,
    margins: Floats,
    room: float,
    entries_left: int,
    most_entries: int,
    kept: npt.NDArray[np.bool_],
) -> int:
    """Adds all examples to FIRST and SECOND, and chooses which to keep: kept bool[m]; returns entries_left.

    An example is kept where one of its coordinates has less than `room` yet; what is wanted falls with the
    entries that may still be kept, so that late and rare coordinates get some. Returns -1 where a labelled
    example has a coordinate without row.
    """
    top = np.uint64(max(row_ptr[len(labels)] - 1, 0))
    for example in range(len(labels)):
        kept[example] = False
        if labels[example] < 0:
            continue
        p, weight = sigmoid(margins[example]), weights[example]
        up = weight * sigmoid(-margins[example]) if labels[example] == 1 else 0.0
        down = weight * p if labels[example] == 0 else 0.0
        begin, end = np.uint64(row_ptr[example]), np.uint64(row_ptr[example + 1])
        wanted = room * (entries_left / most_entries)
        short = False
        for e in range(begin, end):
            ahead = slots[min(e + AHEAD, top)]
            prefetch(floats, row_of(max(ahead, 0)))
            if slots[e] < 0:
                return -1
            row = row_of(slots[e])
            x = np.float64(values[e])
            floats[row + FIRST] += up * x
            floats[row + SECOND] += down * x
            short |= floats[row + TOUCH] < wanted
        if short and int(end - begin) <= entries_left:
            kept[example] = True
            entries_left -= int(end - begin)
            movable = weight * min(p, 1.0 - p)
            for e in range(begin, end):
                floats[row_of(slots[e]) + TOUCH] += movable * abs(np.float64(values[e]))
    return entries_left


@kernel
def begin_again(floats: Floats, slots: Int64s, near_limit: npt.NDArray[np.bool_]) -> None:
    """Makes the rows ready for pass two; `near_limit` bool[n]: coordinates that examples are kept for."""
    for i in range(len(slots)):
        row = row_of(slots[i])
        floats[row + FIRST] = 0.0
        floats[row + SECOND] = 0.0
        floats[row + TOUCH] = 0.0 if near_limit[i] else np.inf


@kernel
def gather_sums(floats: Floats, slots: Int64s, out: Floats) -> None:
    """out[:, i] = the three numbers of the row in slots[i]."""
    for i in range(len(slots)):
        row = row_of(slots[i])
        out[0, i], out[1, i], out[2, i] = floats[row + FIRST], floats[row + SECOND], floats[row + TOUCH]
