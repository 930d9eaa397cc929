"""exp and log1p for the state path: float64 in, the same float64 out on every x86-64 machine.

The C library's versions differ between releases; these use only +, -, *, / and exact scaling, which
IEEE 754 fixes to the bit. Errors stay within 3 units in the last place (tests hold them to exact decimals).
Reduction and series are textbook; ln 2 stands in two parts.
"""

from __future__ import annotations

import math

from stream.kernel import small

__all__ = ["exp", "log1p", "sigmoid", "softplus"]

LN2_HIGH = 6.93147180369123816490e-01  # upper 33 bits of ln 2, so that k * LN2_HIGH is exact
LN2_LOW = 1.90821492927058770002e-10
INV_LN2 = 1.4426950408889634


@small
def exp(x: float) -> float:
    """e**x for finite x; 0 below -745, infinity above 709.78."""
    if x > 709.782712893384:
        return math.inf
    if x < -745.0:
        return 0.0
    k = math.floor(x * INV_LN2 + 0.5)
    r = (x - k * LN2_HIGH) - k * LN2_LOW
    # Taylor to r**13 / 13!, |r| <= 0.347: remainder below 1e-17
    p = 1.0 / 6227020800.0
    p = p * r + 1.0 / 479001600.0
    p = p * r + 1.0 / 39916800.0
    p = p * r + 1.0 / 3628800.0
    p = p * r + 1.0 / 362880.0
    p = p * r + 1.0 / 40320.0
    p = p * r + 1.0 / 5040.0
    p = p * r + 1.0 / 720.0
    p = p * r + 1.0 / 120.0
    p = p * r + 1.0 / 24.0
    p = p * r + 1.0 / 6.0
    p = p * r + 0.5
    return math.ldexp(1.0 + (r + r * r * p), int(k))


@small
def log1p(x: float) -> float:
    """ln(1 + x) for x > -1."""
    u = 1.0 + x
    if u == 1.0:
        return x
    if math.isinf(u):
        return u
    m, k = math.frexp(u)
    c = (x - (u - 1.0)) / u if u < 9007199254740992.0 else 0.0  # what rounding 1 + x lost
    if m < 0.7071067811865476:
        m = m * 2.0
        k -= 1
    # ln m = 2 artanh(s), s = (m - 1) / (m + 1), |s| <= 0.1716
    s = (m - 1.0) / (m + 1.0)
    q = s * s
    p = 1.0 / 23.0
    p = p * q + 1.0 / 21.0
    p = p * q + 1.0 / 19.0
    p = p * q + 1.0 / 17.0
    p = p * q + 1.0 / 15.0
    p = p * q + 1.0 / 13.0
    p = p * q + 1.0 / 11.0
    p = p * q + 1.0 / 9.0
    p = p * q + 1.0 / 7.0
    p = p * q + 1.0 / 5.0
    p = p * q + 1.0 / 3.0
    return k * LN2_HIGH + (2.0 * s + (2.0 * s * q * p + (k * LN2_LOW + c)))


@small
def sigmoid(margin: float) -> float:
    """1 / (1 + e**-margin)."""
    if margin >= 0.0:
        return 1.0 / (1.0 + exp(-margin))
    e = exp(margin)
    return e / (1.0 + e)


@small
def softplus(margin: float) -> float:
    """ln(1 + e**margin), the logistic loss of a negative example; of a positive one at -margin."""
    if margin > 0.0:
        return margin + log1p(exp(-margin))
    return log1p(exp(margin))
