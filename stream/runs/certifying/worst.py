"""Gradients and weights in; the coordinates that break the conditions of an optimum most, with names, out.

At an optimum the gradient of the mean loss is -strength * sign(weight) where a weight is not zero, and within
+-strength where it is (docs/proof.md). How much a coordinate breaks that is its violation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.runs.certifying.numbered import Numbered
from stream.weights import Weights

__all__ = ["Watched", "Worst", "violations"]

CANDIDATES = 200
Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Worst:
    """A coordinate, its `name` as tokens are hashed, and by how much it breaks its condition, nats a unit."""

    address: int
    name: bytes
    weight: float
    gradient: float
    violation: float


def violations(weights: Floats, gradient: Floats, strength: float) -> Floats:
    """How far each gradient is from where an optimum has it: float64[n]."""
    of_zero = np.maximum(np.abs(gradient) - strength, 0.0)
    return np.where(weights == 0.0, of_zero, np.abs(gradient + strength * np.sign(weights)))


class Watched:
    """Coordinates that seem to break their conditions most: their exact gradients, and names, from a pass.

    `addresses` uint64[n], ascending, of the log, with their `gradient` as far as it is known. Coordinates of
    `weights` that the log lacks are watched too: their gradient is 0, so that weights there cost for nothing.
    """

    def __init__(
        self, addresses: npt.NDArray[np.uint64], gradient: Floats, weights: Weights, strength: float
    ) -> None:
        every = np.union1d(addresses, weights.addresses)
        here, slope = weights.at(every), np.zeros(len(every))
        slope[np.searchsorted(every, addresses)] = gradient
        seem = np.argsort(-violations(here, slope, strength), kind="stable")[:CANDIDATES]
        chosen = np.sort(seem)
        self._weights, self._strength = here[chosen], strength
        self._sums = np.zeros(len(chosen))
        known = dict(zip(weights.addresses.tolist(), weights.names, strict=True))
        names = [known.get(address, b"") for address in every[chosen].tolist()]
        self._numbered = Numbered(every[chosen], names)

    def add(self, batch: Batch, pulls: Floats) -> None:
        """`pulls` float64[m]: of each example its weight times (probability - label); 0 without a label."""
        entries, places = self._numbered.found(batch)
        rows = np.searchsorted(batch.row_ptr, entries, side="right") - 1
        self._sums += np.bincount(places, pulls[rows] * batch.values[entries], len(self._sums))

    def worst(self, total: float, most: int) -> tuple[Worst, ...]:
        """The `most` worst that break their conditions at all, worst first; `total` example weight."""
        gradient = self._sums / total
        broken = violations(self._weights, gradient, self._strength)
        order = np.argsort(-broken, kind="stable")[:most]
        return tuple(
            Worst(
                int(self._numbered.addresses[i]),
                self._numbered.names[i],
                float(self._weights[i]),
                float(gradient[i]),
                float(broken[i]),
            )
            for i in order.tolist()
            if broken[i] > 0.0
        )
