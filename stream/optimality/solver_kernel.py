"""The columns of a log and weights in, steps towards the batch optimum out, by coordinate descent.

Source: Yuan, Ho, Lin, "An improved GLMNET for L1-regularized logistic regression", JMLR 13:1999-2030, 2012
(from memory): a second-order model of the loss at the present weights, minimised with the penalty by
coordinate descent over the columns that may move, then a step along that direction. Columns lie one after the
other (CSC).
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from stream.kernel import kernel

__all__ = ["add_columns", "column_sums", "curvatures", "descend"]

Floats = npt.NDArray[np.float64]
Int64s = npt.NDArray[np.int64]
Int32s = npt.NDArray[np.int32]
Float32s = npt.NDArray[np.float32]


@kernel
def column_sums(starts: Int64s, rows: Int32s, values: Float32s, numbers: Floats, out: Floats) -> None:
    """out[j] = sum over the entries of column j of value * numbers[row]."""
    for j in range(len(out)):
        total = 0.0
        for e in range(starts[j], starts[j + 1]):
            total += values[e] * numbers[rows[e]]
        out[j] = total


@kernel
def add_columns(
    starts: Int64s, rows: Int32s, values: Float32s, columns: Int64s, factors: Floats, out: Floats
) -> None:
    """out[row] += value * factors[i], over the entries of columns[i]."""
    for i in range(len(columns)):
        if factors[i] != 0.0:
            for e in range(starts[columns[i]], starts[columns[i] + 1]):
                out[rows[e]] += values[e] * factors[i]


@kernel
def curvatures(
    starts: Int64s, rows: Int32s, values: Float32s, columns: Int64s, curve: Floats, out: Floats
) -> None:
    """out[i] = sum over the entries of columns[i] of value^2 * curve[row]."""
    for i in range(len(columns)):
        total = 0.0
        for e in range(starts[columns[i]], starts[columns[i] + 1]):
            x = np.float64(values[e])
            total += x * x * curve[rows[e]]
        out[i] = total


@kernel
def descend(
    starts: Int64s,
    rows: Int32s,
    values: Float32s,
    columns: Int64s,
    weights: Floats,
    gradient: Floats,
    curvature: Floats,
    extra: Floats,
    curve: Floats,
    pull: float,
    strength: float,
    step: Floats,
    moved: Floats,
    rounds: int,
    tolerance: float,
) -> float:
    """Minimises the model over the chosen columns and the intercept; returns the intercept's step.

    `columns` int64[k], with `weights`, `gradient` and `curvature` float64[k] of each, and the part `extra` of
    its curvature that comes from no example; `curve` float64[m] of each example; `pull` the gradient in the
    intercept; all of sums over examples. `step` float64[k] and `moved` float64[m], zeros, are filled: the
    change of weights, and of margins. Ends after `rounds` passes, or when the largest gain of a pass is under
    `tolerance` of the first's.
    """
    total_curve = curve.sum()
    shift, first = 0.0, 0.0
    for turn in range(rounds):
        most = 0.0
        change = pull
        for i in range(len(curve)):
            change += curve[i] * moved[i]
        change = -change / total_curve
        shift += change
        most = max(most, change * change * total_curve)
        for i in range(len(curve)):
            moved[i] += change
        for c in range(len(columns)):
            j = columns[c]
            slope = gradient[c] + extra[c] * step[c]
            for e in range(starts[j], starts[j + 1]):
                slope += values[e] * curve[rows[e]] * moved[rows[e]]
            here = weights[c] + step[c]
            wanted = here - slope / curvature[c]
            wanted = np.sign(wanted) * max(abs(wanted) - strength / curvature[c], 0.0)
            change = wanted - here
            if change != 0.0:
                step[c] += change
                most = max(most, change * change * curvature[c])
                for e in range(starts[j], starts[j + 1]):
                    moved[rows[e]] += values[e] * change
        if turn == 0:
            first = most
        if most <= tolerance * first:
            break
    return shift
