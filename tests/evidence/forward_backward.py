"""Rows, labels and a strength in, what a pass of adaptive forward-backward splitting keeps and predicts out.

The rival of McMahan, AISTATS 2011, Table 2: descent with a rate for each coordinate, alpha / (1 + sqrt(n)), n
its sum of squared gradients, and after every example each weight drawn towards zero by its own rate times the
strength. For a weight that is not touched that is put off until it is: its rate stands still meanwhile. With
no strength it is FTRL-Proximal without a penalty. The intercept is free.
"""

from math import exp, sqrt

import numpy as np
from numba import njit

__all__ = ["forward_backward"]


@njit
def forward_backward(row_ptr, columns, values, labels, count, alpha, strength):
    """Margins before each update, float64[m]; which weights are not zero in the end, bool[count]."""
    w, n, rate = np.zeros(count), np.zeros(count), np.zeros(count)
    until = np.zeros(count, np.int64)
    margins = np.empty(len(labels))
    intercept, squared = 0.0, 0.0
    for i in range(len(labels)):
        margin = intercept
        for e in range(row_ptr[i], row_ptr[i + 1]):
            j = columns[e]
            w[j] = drawn(w[j], rate[j] * strength * (i - until[j]))
            margin += w[j] * values[e]
        margins[i] = margin
        pull = 1 / (1 + exp(-margin)) - labels[i]
        for e in range(row_ptr[i], row_ptr[i + 1]):
            j = columns[e]
            g = pull * values[e]
            n[j] += g * g
            rate[j] = alpha / (1 + sqrt(n[j]))
            w[j] = drawn(w[j] - rate[j] * g, rate[j] * strength)
            until[j] = i + 1
        squared += pull * pull
        intercept -= alpha / (1 + sqrt(squared)) * pull
    kept = np.empty(count, np.bool_)
    for j in range(count):
        kept[j] = drawn(w[j], rate[j] * strength * (len(labels) - until[j])) != 0.0
    return margins, kept


@njit
def drawn(w, a):
    """Towards zero by a, never across it."""
    return np.sign(w) * max(abs(w) - a, 0.0)
