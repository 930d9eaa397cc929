"""Weights of a snapshot and a batch in, margins and probabilities out, at the cost of the non-zero weights.

An open-addressed table of only the k non-zero weights, a quarter full, so that a token without weight
is told by one look. A margin is the exactly rounded sum of the intercept and the effects (weight times
value, two float32, exact in float64): it does not depend on the order of the tokens.
"""

from __future__ import annotations

import secrets

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.exact import sigmoid
from stream.exact_sum import PARTIALS, add_term, exact_sum
from stream.kernel import kernel, small
from stream.weights import Weights

__all__ = ["Lookup"]

Float64s = npt.NDArray[np.float64]


class Lookup:
    """The non-zero weights of a snapshot, ready to score batches of the same feature space."""

    def __init__(self, weights: Weights) -> None:
        bits = max(4, (4 * len(weights)).bit_length())
        self._shift = np.uint64(64 - bits)
        # An odd multiplier that nobody outside knows: tokens cannot be chosen to meet in one place.
        self._secret = np.uint64(secrets.randbits(64) | 1)
        self._addresses = np.zeros(1 << bits, np.uint64)
        self._weights = np.zeros(1 << bits, np.float32)
        self._intercept = float(weights.intercept)
        _fill(self._addresses, self._weights, self._secret, self._shift, weights.addresses, weights.values)

    def score(self, batch: Batch) -> tuple[Float64s, Float64s]:
        """(margins, probabilities) of the m examples of `batch`, float64[m] each."""
        margins = np.empty(len(batch), np.float64)
        probabilities = np.empty(len(batch), np.float64)
        _score(
            self._addresses,
            self._weights,
            self._secret,
            self._shift,
            self._intercept,
            batch.row_ptr,
            batch.addresses,
            batch.values,
            margins,
            probabilities,
        )
        return margins, probabilities

    def weights_of(self, addresses: npt.NDArray[np.uint64]) -> npt.NDArray[np.float32]:
        """The weight at each of `addresses`, 0 where there is none: float32[n] for uint64[n]."""
        found = np.empty(len(addresses), np.float32)
        _find(self._addresses, self._weights, self._secret, self._shift, addresses, found)
        return found


@small
def _place(
    held: npt.NDArray[np.uint64],
    weights: npt.NDArray[np.float32],
    secret: np.uint64,
    shift: np.uint64,
    address: np.uint64,
) -> np.int64:
    """The place where `address` is, or would go; weight 0 marks a place that is free."""
    place = np.int64((address * secret) >> shift)
    last = np.int64(len(held) - 1)
    while weights[place] != 0 and held[place] != address:
        place = (place + np.int64(1)) & last
    return place


@kernel
def _fill(
    held: npt.NDArray[np.uint64],
    weights: npt.NDArray[np.float32],
    secret: np.uint64,
    shift: np.uint64,
    addresses: npt.NDArray[np.uint64],
    values: npt.NDArray[np.float32],
) -> None:
    for i in range(len(addresses)):
        place = _place(held, weights, secret, shift, addresses[i])
        held[place] = addresses[i]
        weights[place] = values[i]


@kernel
def _find(
    held: npt.NDArray[np.uint64],
    weights: npt.NDArray[np.float32],
    secret: np.uint64,
    shift: np.uint64,
    addresses: npt.NDArray[np.uint64],
    found: npt.NDArray[np.float32],
) -> None:
    for i in range(len(addresses)):
        found[i] = weights[_place(held, weights, secret, shift, addresses[i])]


@kernel
def _score(
    held: npt.NDArray[np.uint64],
    weights: npt.NDArray[np.float32],
    secret: np.uint64,
    shift: np.uint64,
    intercept: float,
    row_ptr: npt.NDArray[np.int64],
    addresses: npt.NDArray[np.uint64],
    values: npt.NDArray[np.float32],
    margins: Float64s,
    probabilities: Float64s,
) -> None:
    partials = np.empty(PARTIALS, np.float64)
    for row in range(len(row_ptr) - 1):
        count = add_term(partials, 0, intercept)
        for entry in range(row_ptr[row], row_ptr[row + 1]):
            weight = weights[_place(held, weights, secret, shift, addresses[entry])]
            if weight != 0:
                count = add_term(partials, count, np.float64(weight) * np.float64(values[entry]))
        margins[row] = exact_sum(partials, count)
        probabilities[row] = sigmoid(margins[row])
