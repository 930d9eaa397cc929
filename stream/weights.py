"""Weights: the non-zero weights of a model at one moment, what a snapshot stores and a scorer reads."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["Weights"]


@dataclass(frozen=True, slots=True)
class Weights:
    """k non-zero weights, sorted by address.

    `addresses`: uint64[k], ascending; `values`: float32[k], none zero, all finite;
    `names`: k byte strings `field-name 0x1F token` (UTF-8), b"" where the name is not known;
    `messages`: float64[k], learned messages in which the token was seen since it has state;
    `intercept`: float; `learned`: learned messages so far;
    `fingerprint`: the feature space, as `Settings.fingerprint()` gives it.
    """

    addresses: npt.NDArray[np.uint64]
    values: npt.NDArray[np.float32]
    names: tuple[bytes, ...]
    messages: npt.NDArray[np.float64]
    intercept: float
    learned: int
    fingerprint: dict[str, Any]

    def __len__(self) -> int:
        return len(self.addresses)

    def at(self, addresses: npt.NDArray[np.uint64]) -> npt.NDArray[np.float64]:
        """The weight at each of `addresses`, uint64[n]; 0 where there is none."""
        found = np.zeros(len(addresses))
        places = np.searchsorted(self.addresses, addresses)
        there = places < len(self)
        there[there] = self.addresses[places[there]] == addresses[there]
        found[there] = self.values[places[there]]
        return found
