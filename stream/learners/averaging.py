"""Averages over the stream beside a learner: rows and examples in, rows of averages and margins out.

The loss of each example is taken as a parabola in each weight alone, about the weight w that the learner had
then: slope g x, curvature h x^2. These add up, and the weight at which their sum and the penalty on it are
least is nearer to the batch fit than the learner's last weight, which the latest examples have moved.
Averaging of such approximations: Mairal, "Stochastic majorization-minimization algorithms", NIPS 2013; the
sums for each coordinate alone and the intercept are this project's arrangement. Per coordinate, in a
row of its own (`stream.coordinate`):

    FIRST   sum of h x^2 w - g x        SECOND  sum of h x^2
    TOUCH   as that of the learner's row; NAMED when an average that is not zero has told its name

g = o (p - label), h = o ((p - label)^2 + p (1 - p)) / 2, for p the probability, o the example weight.
p (1 - p) alone is too flat where p is far off, (p - label)^2 alone is 0 where p was right: their mean is
neither. After every `averaging` learned examples all sums are halved, each row when it is next read
(exact: powers of two).
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from stream.coordinate import FIRST, LEAST, NAMED, SECOND, TOUCH, TOUCH_SHIFT, leave, row_of, touched
from stream.exact import sigmoid
from stream.kernel import kernel, prefetch, small
from stream.learners.ftrl import ftrl_intercept, ftrl_learn
from stream.learners.layout import AHEAD, L1, L2, LEARNED, LIMIT, STRENGTH
from stream.learners.truncated_gradient import truncated_gradient_intercept, truncated_gradient_learn

__all__ = [
    "INTERCEPT_CURVE",
    "INTERCEPT_PULL",
    "IN_SUMS",
    "LEARNED_WEIGHT",
    "average_weights",
    "ftrl_learn_averaging",
    "truncated_gradient_learn_averaging",
]

# averages, float64[4]: state
IN_SUMS, LEARNED_WEIGHT, INTERCEPT_PULL, INTERCEPT_CURVE = 0, 1, 2, 3
"""Example weight in the sums, halved with them; of all learned; the intercept's sums, each example counted as
often as there was weight in the sums before it: its early values are far from where the weights end."""

FTRL_WEIGHTS, TRUNCATED_GRADIENT_WEIGHTS = 3, 0
"""Row of `scratch` in which a learner leaves the weights that an example had before its update."""
MOST = 1e30
"""Largest weight: a snapshot's float32 must hold it."""
ONE = np.uint64(1)

Floats = npt.NDArray[np.float64]
Int64s = npt.NDArray[np.int64]
Uint64s = npt.NDArray[np.uint64]


@small
def _halvings(number: np.uint64, every: np.uint64) -> int:
    """How often the sums have been halved when example `number` (from 1) is added; 0 before the first."""
    return int((max(number, ONE) - ONE) // every)


@small
def _fade(word: np.uint64, halvings: int, every: np.uint64) -> float:
    """What a row with this touch word counts, now that the sums have been halved so often in all."""
    if halvings == 0:  # as long as a log that is learned once lasts: no division
        return 1.0
    due = halvings - _halvings(word >> TOUCH_SHIFT, every)
    return math.ldexp(1.0, -due) if due > 0 else 1.0


@small
def _threshold(sums: Floats, options: Floats, averages: Floats) -> float:
    """The strength in force on what is in the sums: the same for each unit of example weight."""
    strength = float(options[L1] + sums[STRENGTH])
    if averages[LEARNED_WEIGHT] > 0.0:
        strength *= averages[IN_SUMS] / averages[LEARNED_WEIGHT]
    return strength


@small
def _begin(
    constant: float,
    slope: float,
    curve: float,
    weight: float,
    number: np.uint64,
    every: np.uint64,
    averages: Floats,
) -> None:
    """Halves the small sums when that is due, and adds an example to them."""
    if number > ONE and (number - ONE) % every == np.uint64(0):
        averages[IN_SUMS] *= 0.5
        averages[INTERCEPT_PULL] *= 0.25
        averages[INTERCEPT_CURVE] *= 0.25
    averages[IN_SUMS] += weight
    averages[LEARNED_WEIGHT] += weight
    averages[INTERCEPT_PULL] += averages[IN_SUMS] * (curve * constant - slope)
    averages[INTERCEPT_CURVE] += averages[IN_SUMS] * curve


@small
def _add(
    cells: Uint64s,
    slots: Int64s,
    row_ptr: Int64s,
    values: npt.NDArray[np.float32],
    labels: npt.NDArray[np.int8],
    weights: Floats,
    example: int,
    constant: float,
    before: Floats,
    sums: Floats,
    counts: Int64s,
    options: Floats,
    margins: Floats,
    rows: Uint64s,
    row_floats: Floats,
    places: Int64s,
    averages: Floats,
    every: np.uint64,
    named: Int64s,
    events: int,
    undo: Uint64s,
) -> int:
    """Adds an example that was just learned; `constant`, `before`: intercept and weights that it had.

    Returns `events` and the new ones.
    """
    limit, used = undo[0], undo[1]
    p, number = sigmoid(margins[example]), np.uint64(counts[LEARNED])
    off = p - labels[example]
    slope, curve = weights[example] * off, weights[example] * (off * off + p * (1.0 - p)) * 0.5
    _begin(constant, slope, curve, weights[example], number, every, averages)
    threshold, halvings = _threshold(sums, options, averages), _halvings(number, every)
    begin, end = row_ptr[example], row_ptr[example + 1]
    for e in range(begin, end):
        if slots[e] < 0 or cells[row_of(slots[e]) + TOUCH] >> TOUCH_SHIFT != number:
            continue  # without state, or its update was refused
        row = row_of(places[e])
        word = rows[row + TOUCH]
        x = np.float64(values[e])
        fade = _fade(word, halvings, every)
        first, second = row_floats[row + FIRST] * fade, row_floats[row + SECOND] * fade
        pull, steep = curve * x * x * before[e - begin] - slope * x, curve * x * x
        if abs(first + pull) + (second + steep) < LIMIT:
            first, second = first + pull, second + steep
        if word - LEAST < limit:
            used = leave(undo, used, rows, row)
        row_floats[row + FIRST] = first
        row_floats[row + SECOND] = second
        word = touched(word, number)
        if abs(first) > threshold and word & NAMED == np.uint64(0):
            word |= NAMED
            named[events] = e
            events += 1
        rows[row + TOUCH] = word
    undo[1] = used
    return events


@small
def _prefetch(
    floats: Floats,
    slots: Int64s,
    row_floats: Floats,
    places: Int64s,
    row_ptr: Int64s,
    example: int,
    last: int,
) -> None:
    """Asks for the rows that come AHEAD entries after those of `example`."""
    top = row_ptr[last] - 1
    for e in range(row_ptr[example], row_ptr[example + 1]):
        ahead = min(e + np.int64(AHEAD), top)
        prefetch(floats, row_of(max(slots[ahead], 0)))
        prefetch(row_floats, row_of(max(places[ahead], 0)))


@kernel
def ftrl_learn_averaging(
    cells: Uint64s,
    floats: Floats,
    slots: Int64s,
    row_ptr: Int64s,
    values: npt.NDArray[np.float32],
    labels: npt.NDArray[np.int8],
    weights: Floats,
    first: int,
    last: int,
    sums: Floats,
    counts: Int64s,
    options: Floats,
    scratch: Floats,
    margins: Floats,
    named: Int64s,
    undo: Uint64s,
    rows: Uint64s,
    row_floats: Floats,
    places: Int64s,
    averages: Floats,
    every: np.uint64,
    rows_undo: Uint64s,
) -> int:
    """`ftrl_learn`, bit for bit, and the averages after each example.

    `rows` uint64[4 * slots] and `row_floats` hold averages, that of entry e in slot places[e] (int64[nnz],
    >= 0 where the example has a label and slots[e] >= 0); `averages` float64[4]; `rows_undo` as `undo`.
    `named` int64[2 * nnz] receives entries with a name to be told, some of them twice.
    """
    events, before = 0, scratch[FTRL_WEIGHTS]
    for example in range(first, last):
        _prefetch(floats, slots, row_floats, places, row_ptr, example, last)
        learned, constant = counts[LEARNED], ftrl_intercept(sums, options)
        events += ftrl_learn(
            cells, floats, slots, row_ptr, values, labels, weights, example, example + 1, sums, counts,
            options, scratch, margins, named[events:], undo,
        )  # fmt: skip
        if counts[LEARNED] > learned:
            events = _add(
                cells, slots, row_ptr, values, labels, weights, example, constant, before, sums, counts,
                options, margins, rows, row_floats, places, averages, every, named, events, rows_undo,
            )  # fmt: skip
    return events


@kernel
def truncated_gradient_learn_averaging(
    cells: Uint64s,
    floats: Floats,
    slots: Int64s,
    row_ptr: Int64s,
    values: npt.NDArray[np.float32],
    labels: npt.NDArray[np.int8],
    weights: Floats,
    first: int,
    last: int,
    sums: Floats,
    counts: Int64s,
    options: Floats,
    scratch: Floats,
    margins: Floats,
    named: Int64s,
    undo: Uint64s,
    rows: Uint64s,
    row_floats: Floats,
    places: Int64s,
    averages: Floats,
    every: np.uint64,
    rows_undo: Uint64s,
) -> int:
    """`truncated_gradient_learn`, bit for bit, and the averages; as `ftrl_learn_averaging`."""
    events, before = 0, scratch[TRUNCATED_GRADIENT_WEIGHTS]
    for example in range(first, last):
        _prefetch(floats, slots, row_floats, places, row_ptr, example, last)
        learned, constant = counts[LEARNED], truncated_gradient_intercept(sums, options)
        events += truncated_gradient_learn(
            cells, floats, slots, row_ptr, values, labels, weights, example, example + 1, sums, counts,
            options, scratch, margins, named[events:], undo,
        )  # fmt: skip
        if counts[LEARNED] > learned:
            events = _add(
                cells, slots, row_ptr, values, labels, weights, example, constant, before, sums, counts,
                options, margins, rows, row_floats, places, averages, every, named, events, rows_undo,
            )  # fmt: skip
    return events


@kernel
def average_weights(
    rows: Uint64s,
    row_floats: Floats,
    slots: Int64s,
    sums: Floats,
    options: Floats,
    averages: Floats,
    learned: np.uint64,
    every: np.uint64,
    out: Floats,
) -> None:
    """out[i] = weight by the row of averages in slots[i] after `learned` examples; 0 where slots[i] < 0."""
    threshold, now = _threshold(sums, options, averages), _halvings(learned, every)
    lambda_2 = options[L2]
    if averages[LEARNED_WEIGHT] > 0.0:
        lambda_2 *= averages[IN_SUMS] / averages[LEARNED_WEIGHT]
    for i in range(len(slots)):
        out[i] = 0.0
        if slots[i] < 0:
            continue
        row = row_of(slots[i])
        fade = _fade(rows[row + TOUCH], now, every)
        first, curve = row_floats[row + FIRST] * fade, row_floats[row + SECOND] * fade + lambda_2
        beyond = abs(first) - threshold
        if beyond > 0.0:
            out[i] = math.copysign(min(beyond, curve * MOST) / curve if curve > 0.0 else MOST, first)
