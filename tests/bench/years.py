"""State after years of messages: the learner against a twin with compensated sums, over 1e9 examples."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from stream.coordinate import example_of, tally_of
from stream.kernel import kernel
from stream.learners import Learner
from stream.settings.models import Learner as LearnerSettings
from stream.settings.models import State
from stream.tables import Table
from tests.bench.drawn import BLOCK, block_of, draw_labels
from tests.bench.figures import Figure, timed

__all__ = ["years"]

SHARES = np.array([0.5, 0.2, 0.1, 0.1, 0.03, 0.03, 0.01, 0.01, 0.003, 0.001, 0.001, 0.0003])
EFFECTS = np.array([0.3, -0.5, 1.0, 0.0, 1.5, -1.0, 2.0, 0.0, 1.0, 2.0, 4.0, 4.0])
BASE_RATE = 0.001
SETTINGS = LearnerSettings(learning_rate=0.1, l1_per_example=1e-6)

Floats = npt.NDArray[np.float64]


@kernel
def _add(total: Floats, term: float) -> None:
    """total[0] + total[1] grows by `term`: Neumaier's form of Kahan's compensated sum (ZAMM 54, 1974)."""
    new = total[0] + term
    if abs(total[0]) >= abs(term):
        total[1] += (total[0] - new) + term
    else:
        total[1] += (term - new) + total[0]
    total[0] = new


@kernel
def _weight(z: Floats, n: Floats, strength: float, alpha: float, beta: float) -> float:
    """Algorithm 1 of McMahan et al., KDD 2013, without its second penalty."""
    whole = z[0] + z[1]
    if abs(whole) <= strength:
        return 0.0
    return -(whole - math.copysign(strength, whole)) / ((beta + math.sqrt(n[0] + n[1])) / alpha)


@kernel
def _twin_learn(
    row_ptr: npt.NDArray[np.int64],
    columns: npt.NDArray[np.int64],
    labels: npt.NDArray[np.int8],
    last: int,
    z: Floats,
    n: Floats,
    strength: Floats,
    alpha: float,
    beta: float,
    per_example: float,
) -> None:
    """Updates by the examples before `last`. Sums are float64[k + 1, 2]; the last is the intercept's."""
    constant = len(z) - 1
    for i in range(last):
        force = strength[0] + strength[1]
        margin = _weight(z[constant], n[constant], 0.0, alpha, beta)
        for e in range(row_ptr[i], row_ptr[i + 1]):
            margin += _weight(z[columns[e]], n[columns[e]], force, alpha, beta)
        g = 1.0 / (1.0 + math.exp(-margin)) - labels[i]
        for e in range(row_ptr[i], row_ptr[i + 1] + 1):
            c = columns[e] if e < row_ptr[i + 1] else constant
            w = _weight(z[c], n[c], force if c < constant else 0.0, alpha, beta)
            before = n[c, 0] + n[c, 1]
            _add(n[c], g * g)
            sigma = (math.sqrt(n[c, 0] + n[c, 1]) - math.sqrt(before)) / alpha
            _add(z[c], g - sigma * w)
        _add(strength, per_example)


class _Twin:
    """The same learner again: nothing shared with stream, sums compensated."""

    def __init__(self, row_ptr: npt.NDArray[np.int64], columns: npt.NDArray[np.int64]) -> None:
        self._row_ptr, self._columns = row_ptr, columns
        self._z, self._n = np.zeros((len(SHARES) + 1, 2)), np.zeros((len(SHARES) + 1, 2))
        self._strength = np.zeros(2)
        self._alpha, self._beta = SETTINGS.learning_rate, SETTINGS.damping

    def learn(self, labels: npt.NDArray[np.int8], last: int) -> None:
        _twin_learn(
            self._row_ptr, self._columns, labels, last, self._z, self._n, self._strength,
            self._alpha, self._beta, SETTINGS.l1_per_example,
        )  # fmt: skip

    def weights(self) -> Floats:
        """Of each coordinate, then the intercept: float64[k + 1]."""
        force = [self._strength.sum()] * len(SHARES) + [0.0]
        sums = zip(self._z, self._n, force, strict=True)
        return np.array([_weight(z, n, strength, self._alpha, self._beta) for z, n, strength in sums])


def _probabilities(row_ptr: npt.NDArray[np.int64], columns: npt.NDArray[np.int64]) -> Floats:
    """Of each example, BASE_RATE in the mean."""
    rows = np.repeat(np.arange(len(row_ptr) - 1), np.diff(row_ptr))
    lifts = np.exp(np.bincount(rows, EFFECTS[columns], len(row_ptr) - 1))
    return np.minimum(lifts * (BASE_RATE / lifts.mean()), 1.0)


def years(examples: int, block: int = BLOCK) -> list[Figure]:
    """Weights of both after `examples` at a base rate of 0.1 %; counts, which must not have wrapped."""
    batch = block_of(SHARES, seed=1, size=block)
    columns = batch.addresses.astype(np.int64) - 1
    probabilities = _probabilities(batch.row_ptr, columns)
    table, learner, twin = Table(State()), Learner(SETTINGS), _Twin(batch.row_ptr, columns)
    table.admit(batch, 0, block)
    slots = table.slots_of(batch.addresses)
    seen, times = np.zeros(len(SHARES)), np.zeros((2, 2))
    for first in range(0, examples, block):
        size = min(block, examples - first)
        draw_labels(probabilities, first + 1, batch.labels)
        seen += np.bincount(columns[: batch.row_ptr[size]], minlength=len(SHARES))
        times[0] += timed(learner.predict_then_update, table.cells, batch, slots, 0, size)
        times[1] += timed(twin.learn, batch.labels, size)
    rows = table.slots_of(np.arange(1, len(SHARES) + 1, dtype=np.uint64))
    weights = np.append(learner.weights(table.cells, 0, table.slots)[rows], learner.intercept)
    return _figures(weights, twin.weights(), seen, table.touches(rows), learner, examples, times[:, 1])


def _figures(
    weights: Floats,
    expected: Floats,
    seen: Floats,
    touches: npt.NDArray[np.uint64],
    learner: Learner,
    examples: int,
    cpu_s: Floats,
) -> list[Figure]:
    some = (weights != 0) | (expected != 0)
    with np.errstate(divide="ignore"):
        apart = np.abs(weights[some] / expected[some] - 1.0)
    strength = SETTINGS.l1_per_example * examples
    counts = {
        "learned, off by %": abs(learner.learned / examples - 1.0) * 100,
        "tallies of tokens, off by %": float(np.max(np.abs(tally_of(touches) / seen - 1.0))) * 100,
        "last touch, off by %": (1.0 - float(example_of(touches).max()) / examples) * 100,
    }
    details = {
        "non-zero of 12 and the intercept": np.count_nonzero(weights),
        "accumulated strength, off by %": abs(learner.strength / strength - 1.0) * 100,
        "learner, ns an example": cpu_s[0] * 1e9 / examples,
        "twin, ns an example": cpu_s[1] * 1e9 / examples,
    }
    what = f"{examples:,} examples: "
    return [
        Figure(what + "weights off by, most", float(apart.max()) * 100, "%", at_most=1, details=details),
        Figure(what + "counts off by, most", max(counts.values()), "%", at_most=0.1, details=counts),
    ]
