"""Rows learned under old settings in; rows that have the same weights under new settings out.

FTRL-Proximal keeps z and n, and a weight follows from them, from settings and from the strength in force
(letters as in `stream.learners.ftrl`):

    w = -sgn(z) (|z| - lambda_1) / D  where |z| > lambda_1, else 0;   D = (beta + sqrt n) / alpha + lambda_2

so a row keeps a weight w that is not zero with z' = -sgn(w) (|w| D' + lambda_1'). A row of weight zero says
by |z| / lambda_1 how near it is to a weight; it keeps that share: z' = z lambda_1' / lambda_1, and 0 where
there was no penalty. n and the accumulated strength are sums over what was learned, and stay.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from stream.errors import BadSettings
from stream.learners.layout import INTERCEPT_FIRST, INTERCEPT_SECOND, LIMIT, STRENGTH
from stream.settings.models import Learner as LearnerSettings

__all__ = ["Rows", "rebuild"]

PIECE = 1 << 16
"""Rows worked on at once, so that no copy of all rows but the result is made."""

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Rows:
    """FIRST and SECOND of k rows, float64[k] each, and `sums` as in `stream.learners.layout`."""

    first: Floats
    second: Floats
    sums: Floats


def rebuild(rows: Rows, old: LearnerSettings, new: LearnerSettings) -> Rows:
    """New arrays whose weights under `new` are those of `rows` under `old`, to the rounding of z.

    A weight that is zero stays zero, and one that is not stays so. Raises BadSettings for another method,
    and where a row would leave the range of what is learned.
    """
    if old.method != new.method:
        raise BadSettings(
            f'learner.method: the rows are of "{old.method}", and "{new.method}" cannot go on from them; '
            "set it back, or learn again in another state.folder"
        )
    return _ftrl(rows, old, new) if new.method == "ftrl" else _truncated_gradient(rows, old)


def _ftrl(rows: Rows, old: LearnerSettings, new: LearnerSettings) -> Rows:
    first, sums = rows.first.copy(), rows.sums.copy()
    if all(getattr(old, key) == getattr(new, key) for key in ("learning_rate", "damping", "l1", "l2")):
        return Rows(first, rows.second, sums)  # what else there is acts from now on only
    for begin in range(0, len(first), PIECE):
        here = slice(begin, begin + PIECE)
        first[here] = _same_weights(first[here], rows.second[here], float(sums[STRENGTH]), old, new)
    root = math.sqrt(sums[INTERCEPT_SECOND])
    intercept = sums[INTERCEPT_FIRST] * (old.learning_rate / (old.damping + root))
    sums[INTERCEPT_FIRST] = intercept * ((new.damping + root) / new.learning_rate)
    return Rows(first, rows.second, sums)


def _same_weights(
    z: Floats, n: Floats, strength: float, old: LearnerSettings, new: LearnerSettings
) -> Floats:
    before, now = old.l1 + strength, new.l1 + strength
    root, size = np.sqrt(n), np.abs(z)
    weight = (size - before) / ((old.damping + root) * (1.0 / old.learning_rate) + old.l2)
    beyond = weight * ((new.damping + root) * (1.0 / new.learning_rate) + new.l2)
    held = np.maximum(now + beyond, np.nextafter(now, np.inf))
    lapsed = np.minimum(size / before * now, now) if before > 0 else np.zeros_like(z)
    rebuilt = np.where(weight > 0, held, lapsed)
    if not np.all(rebuilt + n < LIMIT):
        raise BadSettings(
            f"under the new [learner] a weight of the model would need a sum beyond {LIMIT:g}: raise "
            "learner.learning_rate, or lower learner.damping or learner.l2"
        )
    return np.copysign(rebuilt, z)


def _truncated_gradient(rows: Rows, old: LearnerSettings) -> Rows:
    """Every weight truncated up to now at the old rate; from here on the new settings count."""
    strength = rows.sums[STRENGTH]
    first = np.empty_like(rows.first)
    for begin in range(0, len(first), PIECE):
        here = slice(begin, begin + PIECE)
        left = np.abs(rows.first[here]) - old.learning_rate * (strength - rows.second[here])
        first[here] = np.where(left > 0, np.copysign(left, rows.first[here]), 0.0)
    return Rows(first, np.full_like(rows.second, strength), rows.sums.copy())
