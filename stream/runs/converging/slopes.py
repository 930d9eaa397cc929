"""Figures at ever more messages in; the power of the messages that they fall with out."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

__all__ = ["Slope", "slope_of"]


@dataclass(frozen=True, slots=True)
class Slope:
    """value = factor * messages**exponent, by least squares of the logarithms; `error`: standard error of the
    exponent, from how the `points` scatter about the line (they are not independent: a rough guide)."""

    exponent: float
    error: float
    factor: float
    points: int


def slope_of(messages: Sequence[int], values: Sequence[float | None]) -> Slope | None:
    """None where fewer than three values are positive."""
    known = [(math.log(m), math.log(v)) for m, v in zip(messages, values, strict=True) if v and v > 0]
    if len(known) < 3:
        return None
    x, y = np.array(known).T
    around = x - x.mean()
    spread = float(around @ around)
    exponent = float(around @ y) / spread
    rest = y - y.mean() - exponent * around
    error = math.sqrt(float(rest @ rest) / (len(known) - 2) / spread)
    return Slope(exponent, error, math.exp(float(y.mean() - exponent * x.mean())), len(known))
