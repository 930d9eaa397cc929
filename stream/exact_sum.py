"""Float64 terms in, their exactly rounded sum out: the same double in whatever order they come.

J. R. Shewchuk, "Adaptive precision floating-point arithmetic and fast robust geometric predicates",
Discrete & Computational Geometry 18 (1997): the sum so far stands as partials that do not overlap,
from the smallest to the largest. The last rounding looks one partial further so that ties go to even,
as `math.fsum` does; the tests hold the two together bit for bit.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.kernel import small

__all__ = ["PARTIALS", "add_term", "exact_sum"]

PARTIALS = 2100
"""Places that partials may need: no two share a bit, float64 has 2,098, and the last one may be zero."""


@small
def add_term(partials: npt.NDArray[np.float64], count: int, term: float) -> int:
    """Adds a finite `term` to the `count` partials in place (float64[PARTIALS]); gives the new count."""
    kept = 0
    high = term
    for place in range(count):
        other = partials[place]
        if abs(high) < abs(other):
            high, other = other, high
        total = high + other
        low = other - (total - high)
        if low != 0.0:
            partials[kept] = low
            kept += 1
        high = total
    partials[kept] = high
    return kept + 1


@small
def exact_sum(partials: npt.NDArray[np.float64], count: int) -> float:
    """What `count` partials amount to, rounded once; 0 for none. Leaves them as they are."""
    if count == 0:
        return 0.0
    place = count - 1
    high = float(partials[place])
    low = 0.0
    while place > 0:
        place -= 1
        before = high
        other = float(partials[place])
        high = before + other
        low = other - (high - before)
        if low != 0.0:
            break
    if place > 0 and ((low < 0.0 and partials[place - 1] < 0.0) or (low > 0.0 and partials[place - 1] > 0.0)):
        doubled = low * 2.0
        further = high + doubled
        if doubled == further - high:
            high = further
    return high
