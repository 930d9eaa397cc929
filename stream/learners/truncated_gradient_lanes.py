"""Truncated gradient for many settings at once: rows and examples in, updated lane rows and margins out.

As `stream.learners.ftrl_lanes`, with the arithmetic of `stream.learners.truncated_gradient` (source and
letters: see there). The 2 * K numbers of a lane row are w of each lane, then the strength up to which it
has been truncated.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from stream.coordinate import FIRST, NAMED, TOUCH, row_of, touched
from stream.exact import sigmoid
from stream.kernel import kernel, prefetch
from stream.learners.eight import LANES, draw_eight, move_eight, undrawn_eight
from stream.learners.ftrl_lanes import AHEAD_LANES, AHEAD_SWEEP, AHEAD_TABLE, LINE, count_on, count_refused
from stream.learners.layout import (
    INTERCEPT_FIRST,
    LEARNED,
    LIMIT,
    PER_EXAMPLE,
    RATE,
    REFUSED,
    STRENGTH,
)
from stream.learners.truncated_gradient import WEIGHT_LIMIT, truncate

__all__ = [
    "truncated_lane_intercepts",
    "truncated_lane_sweep",
    "truncated_lane_weights",
    "truncated_lanes_learn",
]

Floats = npt.NDArray[np.float64]
EIGHT = np.uint64(LANES)


@kernel
def truncated_lane_intercepts(sums: Floats, options: Floats, out: Floats) -> None:
    """out[k]: the unpenalised constant of each lane."""
    out[:] = sums[INTERCEPT_FIRST]


@kernel
def truncated_lanes_learn(
    cells: npt.NDArray[np.uint64],
    lanes: Floats,
    used: npt.NDArray[np.int64],
    slots: npt.NDArray[np.int64],
    row_ptr: npt.NDArray[np.int64],
    values: npt.NDArray[np.float32],
    labels: npt.NDArray[np.int8],
    weights: Floats,
    first: int,
    last: int,
    sums: Floats,
    counts: npt.NDArray[np.int64],
    options: Floats,
    scratch: Floats,
    places: npt.NDArray[np.uint64],
    masks: npt.NDArray[np.uint64],
    margins: Floats,
    named: npt.NDArray[np.int64],
) -> int:
    """Predicts, then updates, examples first to last - 1 in every lane; arguments and result as of
    `ftrl_lanes_learn`."""
    events = 0
    K = np.uint64(sums.shape[1])
    wide = K + K
    into, strength, steps = scratch[:K], scratch[K : 2 * K], scratch[2 * K : 3 * K]
    eta, gradients = scratch[3 * K : 4 * K], scratch[4 * K : 5 * K]
    ws = scratch[10 * K :]
    top = np.uint64(max(row_ptr[last] - 1, 0))
    eta[:] = options[RATE]
    for example in range(first, last):
        begin = np.uint64(row_ptr[example])
        count = np.uint64(row_ptr[example + 1]) - begin
        strength[:] = sums[STRENGTH]
        into[:] = sums[INTERCEPT_FIRST]
        for i in range(count):
            e = begin + i
            prefetch(cells, row_of(max(slots[min(e + AHEAD_TABLE, top)], 0)))
            ahead = slots[min(e + AHEAD_LANES, top)]
            if ahead >= 0:
                place = cells[row_of(ahead) + FIRST] * wide
                for line in range(np.uint64(0), wide, LINE):
                    prefetch(lanes, place + line)
            if slots[e] < 0:
                continue
            row = row_of(slots[e])
            if cells[row + FIRST] == np.uint64(0):
                cells[row + FIRST] = np.uint64(used[0])
                used[0] += 1
            place = cells[row + FIRST] * wide
            places[i] = place
            value = np.float64(values[e])
            for at in range(np.uint64(0), K, EIGHT):
                draw_eight(lanes, place + at, place + K + at, strength, at, eta, value, ws, i * K + at, into)
        margins[example] = into
        if labels[example] < 0:
            continue
        weight = weights[example]
        learns = False
        for k in range(K):
            margin = margins[example, k]
            if not abs(margin) < LIMIT:
                counts[REFUSED, k] += 1
                gradients[k] = steps[k] = math.nan
                continue
            learns = True
            counts[LEARNED, k] += 1
            gradients[k] = (sigmoid(margin) - labels[example]) * weight
            steps[k] = eta[k] * gradients[k]
            sums[STRENGTH, k] += options[PER_EXAMPLE, k] * weight
            moved = sums[INTERCEPT_FIRST, k] - steps[k]
            if abs(moved) < WEIGHT_LIMIT:
                sums[INTERCEPT_FIRST, k] = moved
            else:
                counts[REFUSED, k] += 1
        if not learns:
            continue
        used[1] += 1
        number = np.uint64(used[1])
        for i in range(count):
            e = begin + i
            if slots[e] < 0:
                continue
            value, place = np.float64(values[e]), places[i]
            for at in range(np.uint64(0), K, EIGHT):
                told = move_eight(lanes, place + at, place + K + at, strength, at, steps, value, ws,
                                  i * K + at, WEIGHT_LIMIT)  # fmt: skip
                if told:
                    count_refused(counts, np.uint64(at), told, gradients)
            row = row_of(slots[e])
            word = touched(cells[row + TOUCH], number)
            if word & NAMED == np.uint64(0):
                word |= NAMED
                named[events] = np.int64(e)
                events += 1
            cells[row + TOUCH] = word
    return events


@kernel
def truncated_lane_weights(
    lanes: Floats, rows: npt.NDArray[np.int64], sums: Floats, options: Floats, out: Floats
) -> None:
    """out[i, k] = weight of lane row rows[i] in lane k, truncated up to now."""
    K = sums.shape[1]
    for i in range(len(rows)):
        place = rows[i] * 2 * K
        for k in range(K):
            a = options[RATE, k] * (sums[STRENGTH, k] - lanes[place + K + k])
            out[i, k] = truncate(lanes[place + k], a)


@kernel
def truncated_lane_sweep(
    lanes: Floats,
    first: int,
    last: int,
    sums: Floats,
    options: Floats,
    nonzeros: npt.NDArray[np.int64],
    kept: npt.NDArray[np.uint8],
    some: npt.NDArray[np.uint8],
) -> None:
    """As `ftrl_lane_sweep`."""
    K = np.uint64(sums.shape[1])
    strength, eta = sums[STRENGTH].copy(), options[RATE].copy()
    for row in range(np.uint64(first), np.uint64(last)):
        ahead = min(row + AHEAD_SWEEP, np.uint64(last) - np.uint64(1)) * (K + K)
        for line in range(np.uint64(0), K + K, LINE):
            prefetch(lanes, ahead + line)
        found = 0
        for at in range(np.uint64(0), K, EIGHT):
            place = row * (K + K) + at
            bits = undrawn_eight(lanes, place, place + K, strength, at, eta)
            found |= bits
            if bits:
                count_on(bits, np.uint64(row), np.uint64(at), K, nonzeros, kept)
        some[row] = found != 0
