"""Addresses and a batch in; which of its entries hold one of them out, at the cost of a look-up each."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.tables.lookup import Lookup
from stream.weights import Weights

__all__ = ["Numbered"]

Int64s = npt.NDArray[np.int64]


class Numbered:
    """`addresses` uint64[k], ascending, k < 2**24, and their names, b"" until a batch tells."""

    def __init__(self, addresses: npt.NDArray[np.uint64], names: list[bytes]) -> None:
        self.addresses, self.names = addresses, names
        count = np.arange(1, len(addresses) + 1, dtype=np.float32)
        self._lookup = Lookup(Weights(addresses, count, (), np.zeros(len(addresses)), 0.0, 0, {}))

    def found(self, batch: Batch) -> tuple[Int64s, Int64s]:
        """Entries of the batch with such an address, and its place among `addresses`; notes names."""
        numbers = self._lookup.weights_of(batch.addresses)
        entries = np.flatnonzero(numbers)
        places = numbers[entries].astype(np.int64) - 1
        for place, first in zip(*np.unique(places, return_index=True), strict=True):
            if not self.names[place]:
                self.names[place] = batch.text(int(entries[first]))
        return entries, places
