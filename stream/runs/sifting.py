"""The rows of a checkpoint pass through on their way to the disk; the weights of that moment stay."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.arrays_file import Arrays
from stream.coordinate import CELLS, FIRST, SECOND, TOUCH, tally_of
from stream.learners import AveragingLearner, Learner
from stream.runs.averaging import average_weights_of
from stream.tables import names_at
from stream.weights import Weights

__all__ = ["Sifting"]


class Sifting:
    """The non-zero weights of rows that pass by ascending address, as `Model.weights` gives them.

    For the thread that writes: `learner` is as it was at the moment of the rows, and nobody else's.
    """

    def __init__(self, learner: Learner, fingerprint: Mapping[str, Any]) -> None:
        self._learner, self._fingerprint = learner, dict(fingerprint)
        self._addresses, self._values = [np.empty(0, np.uint64)], [np.empty(0, np.float32)]
        self._touches = [np.empty(0, np.uint64)]

    def passing(self, pieces: Iterator[Arrays]) -> Iterator[Arrays]:
        """The pieces as they are."""
        for piece in pieces:
            self._take(piece)
            yield piece

    def weights(self, names: Arrays) -> Weights:
        """Weights of all that has passed; `names` as `names_state` gives them."""
        addresses = np.concatenate(self._addresses)
        return Weights(
            addresses,
            np.concatenate(self._values),
            names_at(addresses, names),
            tally_of(np.concatenate(self._touches)),
            self._learner.intercept,
            self._learner.learned,
            self._fingerprint,
        )

    def _take(self, piece: Arrays) -> None:
        weights = self._weights_of(piece).astype(np.float32)
        found = np.flatnonzero(weights)
        self._addresses.append(piece["table.addresses"][found])
        self._values.append(weights[found])
        self._touches.append(piece["table.touch"][found])

    def _weights_of(self, piece: Arrays) -> npt.NDArray[np.float64]:
        if isinstance(self._learner, AveragingLearner):
            return average_weights_of(self._learner, piece)
        rows = np.empty((len(piece["table.addresses"]), CELLS), np.uint64)
        rows[:, 0] = 1  # a key of a slot in use
        rows[:, int(FIRST)] = piece["table.first"].view(np.uint64)
        rows[:, int(SECOND)] = piece["table.second"].view(np.uint64)
        rows[:, int(TOUCH)] = piece["table.touch"]
        return self._learner.weights(rows.reshape(-1), 0, len(rows))
