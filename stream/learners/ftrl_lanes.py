"""FTRL-Proximal for many settings at once: rows and examples in, updated lane rows and margins out.

A lane is one setting of the learner. Its arithmetic is that of `stream.learners.ftrl`, operation for
operation, so that each lane ends with the bits of a run of its own (source and letters: see there). Lanes
are innermost, so that one instruction takes several. Cell FIRST of a table row holds the number of its lane
row, 0 before it has one; the 2 * K numbers of a lane row are z of each lane, then n of each lane.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from stream.coordinate import FIRST, NAMED, TOUCH, row_of, touched
from stream.exact import sigmoid
from stream.kernel import kernel, prefetch, small
from stream.learners.eight import LANES, learn_eight, learn_eight_zeros, on_eight, score_eight
from stream.learners.ftrl import _weight
from stream.learners.layout import (
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

__all__ = [
    "count_on",
    "count_refused",
    "ftrl_lane_intercepts",
    "ftrl_lane_sweep",
    "ftrl_lane_weights",
    "ftrl_lanes_learn",
]

Floats = npt.NDArray[np.float64]
AHEAD_TABLE, AHEAD_LANES, AHEAD_SWEEP = np.uint64(48), np.uint64(12), np.uint64(16)
LINE = np.uint64(8)
ONE, EIGHT = np.uint64(1), np.uint64(LANES)


@kernel
def ftrl_lane_intercepts(sums: Floats, options: Floats, out: Floats) -> None:
    """out[k]: the unpenalised constant of each lane."""
    for k in range(len(out)):
        rate = options[RATE, k] / (options[DAMPING, k] + math.sqrt(sums[INTERCEPT_SECOND, k]))
        out[k] = 0.0 - sums[INTERCEPT_FIRST, k] * rate


@small
def count_refused(counts: npt.NDArray[np.int64], at: np.uint64, told: int, gradients: Floats) -> None:
    """Counts the updates that eight lanes refused; one without a gradient has refused the whole example."""
    for k in range(EIGHT):
        if told >> np.int64(k) & 1 and not math.isnan(gradients[at + k]):
            counts[REFUSED, at + k] += 1


@kernel
def ftrl_lanes_learn(
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
    """Predicts, then updates, examples first to last - 1 in every lane.

    `lanes` float64[2 * K * rows], K a multiple of LANES; `used` int64[2]: lane rows in use (row 0 stays
    zero), examples learned; `sums`, `options` float64[..., K] and `counts` int64[2, K] as in
    `stream.learners.layout`, a column a lane; `scratch` float64[(10 + 2 * longest) * K]; `places`, `masks`
    uint64[longest]; `margins` float64[m, K] is filled. The rest as of `ftrl_learn`, but that a name is
    wanted at the first touch: then it does not depend on who the other lanes are.
    """
    events = 0
    K = np.uint64(sums.shape[1])
    wide = K + K
    longest = np.uint64(len(places))
    into = scratch[: 4 * K]
    bounds, intercept = scratch[4 * K : 5 * K], scratch[5 * K : 6 * K]
    gradients = scratch[6 * K : 7 * K]
    beta, per_alpha, lambda_2 = scratch[7 * K : 8 * K], scratch[8 * K : 9 * K], scratch[9 * K : 10 * K]
    ws = scratch[10 * K : (10 + longest) * K]
    roots = scratch[(10 + longest) * K :]
    top = np.uint64(max(row_ptr[last] - 1, 0))
    for k in range(K):
        beta[k] = options[DAMPING, k]
        per_alpha[k] = 1.0 / options[RATE, k]
        lambda_2[k] = options[L2, k]
    for example in range(first, last):
        begin = np.uint64(row_ptr[example])
        count = np.uint64(row_ptr[example + 1]) - begin
        for k in range(K):
            bounds[k] = options[L1, k] + sums[STRENGTH, k]
        into[:] = 0.0
        ftrl_lane_intercepts(sums, options, intercept)
        fours = count & ~np.uint64(3)
        for i in range(count):
            e = begin + i
            prefetch(cells, row_of(max(slots[min(e + AHEAD_TABLE, top)], 0)))
            ahead = slots[min(e + AHEAD_LANES, top)]
            if ahead >= 0:
                place = cells[row_of(ahead) + FIRST] * wide
                for line in range(np.uint64(0), wide, LINE):
                    prefetch(lanes, place + line)
            place = np.uint64(0)
            if slots[e] >= 0:
                row = row_of(slots[e])
                if cells[row + FIRST] == np.uint64(0):
                    cells[row + FIRST] = np.uint64(used[0])
                    used[0] += 1
                place = cells[row + FIRST] * wide
            places[i] = place
            value = np.float64(values[e])
            into_at = (i & np.uint64(3)) * K if i < fours else np.uint64(0)
            mask, bit = np.uint64(0), ONE
            for at in range(np.uint64(0), K, EIGHT):
                if on_eight(lanes, place + at, bounds, at):
                    mask |= bit
                    score_eight(lanes, place + at, place + K + at, bounds, at, beta, per_alpha, lambda_2,
                                value, ws, roots, i * K + at, into, into_at + at)  # fmt: skip
                bit <<= ONE
            masks[i] = mask
        for k in range(K):
            fours_sum = (into[k] + into[K + k]) + (into[2 * K + k] + into[3 * K + k])
            margins[example, k] = intercept[k] + fours_sum
        if labels[example] < 0:
            continue
        weight = weights[example]
        learns = False
        for k in range(K):
            margin = margins[example, k]
            if not abs(margin) < LIMIT:
                counts[REFUSED, k] += 1
                gradients[k] = math.nan
                continue
            learns = True
            counts[LEARNED, k] += 1
            gradients[k] = (sigmoid(margin) - labels[example]) * weight
            if counts[LEARNED, k] <= options[HORIZON, k]:
                sums[STRENGTH, k] += options[PER_EXAMPLE, k] * weight
            n = sums[INTERCEPT_SECOND, k]
            grown = n + gradients[k] * gradients[k]
            sums[INTERCEPT_FIRST, k] += (
                gradients[k] - (math.sqrt(grown) - math.sqrt(n)) * per_alpha[k] * intercept[k]
            )
            sums[INTERCEPT_SECOND, k] = grown
            bounds[k] = options[L1, k] + sums[STRENGTH, k]
        if not learns:
            continue
        used[1] += 1
        number = np.uint64(used[1])
        for i in range(count):
            e = begin + i
            if slots[e] < 0:
                continue
            value = np.float64(values[e])
            place, mask = places[i], masks[i]
            for at in range(np.uint64(0), K, EIGHT):
                if mask & ONE:
                    told = learn_eight(lanes, place + at, place + K + at, gradients, at, value, per_alpha,
                                       ws, roots, i * K + at)  # fmt: skip
                else:
                    told = learn_eight_zeros(lanes, place + at, place + K + at, gradients, at, value)
                mask >>= ONE
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
def ftrl_lane_weights(
    lanes: Floats, rows: npt.NDArray[np.int64], sums: Floats, options: Floats, out: Floats
) -> None:
    """out[i, k] = weight of lane row rows[i] in lane k at the strength in force."""
    K = sums.shape[1]
    for i in range(len(rows)):
        place = rows[i] * 2 * K
        for k in range(K):
            z, root = lanes[place + k], math.sqrt(lanes[place + K + k])
            strength = options[L1, k] + sums[STRENGTH, k]
            out[i, k] = _weight(
                z, root, strength, options[DAMPING, k], 1.0 / options[RATE, k], options[L2, k]
            )


@small
def count_on(
    bits: int, row: np.uint64, at: np.uint64, K: np.uint64, nonzeros: npt.NDArray[np.int64],
    kept: npt.NDArray[np.uint8],
) -> None:  # fmt: skip
    """Counts the lanes of eight whose bits are set."""
    for k in range(EIGHT):
        on = bits >> np.int64(k) & 1
        nonzeros[at + k] += on
        kept[row * K + at + k] += np.uint8(on)


@kernel
def ftrl_lane_sweep(
    lanes: Floats,
    first: int,
    last: int,
    sums: Floats,
    options: Floats,
    nonzeros: npt.NDArray[np.int64],
    kept: npt.NDArray[np.uint8],
    some: npt.NDArray[np.uint8],
) -> None:
    """For each non-zero weight of lane rows first to last - 1 adds 1 to nonzeros[k] and kept[row * K + k].

    some[row]: whether any weight of the row is not zero.
    """
    K = np.uint64(sums.shape[1])
    bounds = options[L1] + sums[STRENGTH]
    for row in range(np.uint64(first), np.uint64(last)):
        ahead = min(row + AHEAD_SWEEP, np.uint64(last) - ONE) * (K + K)
        for line in range(np.uint64(0), K, LINE):
            prefetch(lanes, ahead + line)
        found = 0
        for at in range(np.uint64(0), K, EIGHT):
            bits = on_eight(lanes, row * (K + K) + at, bounds, at)
            found |= bits
            if bits:
                count_on(bits, np.uint64(row), np.uint64(at), K, nonzeros, kept)
        some[row] = found != 0
