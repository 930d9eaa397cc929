"""Two sets of weights in, what entered, left, flipped its sign and moved most out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.errors import BadSettings
from stream.fingerprint import fingerprint_difference
from stream.weights import Weights

__all__ = ["Change", "Comparison", "compare"]


@dataclass(frozen=True, slots=True)
class Change:
    """One weight in both; 0.0 where it is zero (not stored). `name`: field-name 0x1F token, b"" unknown."""

    address: int
    name: bytes
    old: float
    new: float


@dataclass(frozen=True, slots=True)
class Comparison:
    """Counts over all weights, and the first few changes of each kind, largest |new - old| first.

    `size`: sum of |weight| without the intercept; `moved` is over the weights in both; a flipped
    weight counts as kept and as flipped.
    """

    nnz: tuple[int, int]
    size: tuple[float, float]
    intercept: tuple[float, float]
    learned: tuple[int, int]
    kept_count: int
    entered_count: int
    left_count: int
    flipped_count: int
    entered: tuple[Change, ...]
    left: tuple[Change, ...]
    flipped: tuple[Change, ...]
    moved: tuple[Change, ...]


def compare(old: Weights, new: Weights, most: int = 20) -> Comparison:
    """What changed from `old` to `new`; at most `most` changes of each kind are listed.

    Raises BadSettings with the difference where their feature spaces differ: an address then means two
    things.
    """
    lines = fingerprint_difference(old.fingerprint, new.fingerprint)
    if lines:
        raise BadSettings(
            "these snapshots have different feature spaces, so their weights cannot be compared "
            f"(old here, new there): {'; '.join(lines)}"
        )
    every = np.union1d(old.addresses, new.addresses)
    before, after = _spread(old, every), _spread(new, every)
    entered, left = before == 0, after == 0
    both = ~entered & ~left
    flipped = both & ((before > 0) != (after > 0))
    unchanged = before == after

    def largest(chosen: npt.NDArray[np.bool_]) -> tuple[Change, ...]:
        rows = np.flatnonzero(chosen)
        order = np.argsort(-np.abs(after[rows] - before[rows]), kind="stable")[:most]
        return tuple(
            Change(int(every[r]), _name(old, new, every[r]), float(before[r]), float(after[r]))
            for r in rows[order]
        )

    return Comparison(
        nnz=(len(old), len(new)),
        size=(float(np.abs(before).sum()), float(np.abs(after).sum())),
        intercept=(old.intercept, new.intercept),
        learned=(old.learned, new.learned),
        kept_count=int(both.sum()),
        entered_count=int(entered.sum()),
        left_count=int(left.sum()),
        flipped_count=int(flipped.sum()),
        entered=largest(entered),
        left=largest(left),
        flipped=largest(flipped),
        moved=largest(both & ~unchanged),
    )


def _spread(weights: Weights, every: npt.NDArray[np.uint64]) -> npt.NDArray[np.float64]:
    """The weight at each address of `every`, 0 where it is not stored."""
    spread = np.zeros(len(every), np.float64)
    spread[np.searchsorted(every, weights.addresses)] = weights.values
    return spread


def _name(old: Weights, new: Weights, address: np.uint64) -> bytes:
    """The name of a weight, by preference the newer one."""
    for weights in (new, old):
        at = int(np.searchsorted(weights.addresses, address))
        if at < len(weights) and weights.addresses[at] == address and weights.names[at]:
            return weights.names[at]
    return b""
