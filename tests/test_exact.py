"""exp, log1p, sigmoid and softplus of the state path against exact decimals, and their bits."""

import math
import random
from decimal import Decimal, localcontext
from itertools import pairwise

import pytest
from hypothesis import example, given
from hypothesis import settings as options
from hypothesis import strategies as st

from stream.exact import exp, log1p, sigmoid, softplus

DIGITS = 50
MOST_ULPS = 3
"""What stream.exact promises."""


def true_exp(x):
    return x.exp()


def true_log1p(x):
    if abs(x) < Decimal("1e-17"):  # 1 + x would lose digits of x; the next term is below 1e-51 of it
        return x - x * x / 2 + x * x * x / 3
    return (1 + x).ln()


def true_sigmoid(x):
    return 1 / (1 + (-x).exp())


def true_softplus(x):
    return true_log1p(x.exp())


def ulps_off(function, true, x):
    """How far `function` is from the true value at x, in units in the last place of the true value."""
    with localcontext() as context:
        context.prec = DIGITS
        wanted = true(Decimal(x))
        return float(abs(Decimal(function(x)) - wanted) / Decimal(math.ulp(float(wanted))))


def spread(low, high, count, seed):
    """Numbers even in value, and even in magnitude on either side of 0, inside the range."""
    chance = random.Random(seed)
    even = [chance.uniform(low, high) for _ in range(count)]
    near = [chance.choice([-1, 1]) * 2.0 ** chance.uniform(-70, 4) for _ in range(count)]
    wide = [chance.choice([-1, 1]) * 2.0 ** chance.uniform(-70, 1023) for _ in range(count)]
    return [x for x in even + near + wide if low <= x <= high]


CASES = [
    (exp, true_exp, -745.0, 709.782712893384),
    (log1p, true_log1p, math.nextafter(-1, 0), 1.7e308),
    (sigmoid, true_sigmoid, -745.0, 800.0),
    (softplus, true_softplus, -745.0, 800.0),
]
BY_NAME = pytest.mark.parametrize(
    ("function", "true", "low", "high"), CASES, ids=["exp", "log1p", "sigmoid", "softplus"]
)


@BY_NAME
def test_values_are_within_three_units_in_the_last_place(function, true, low, high):
    xs = [*spread(low, high, 1200, seed=1), low, high, 0.0, 1.0, -0.5, math.nextafter(low, 0)]
    worst, at = max((ulps_off(function, true, x), x) for x in xs)
    assert worst <= MOST_ULPS, at


@BY_NAME
def test_values_stay_exact_where_the_steps_of_the_reduction_meet(function, true, low, high):
    """Both sides of the odd half multiples of ln 2 (exp) and of the powers of two times sqrt 1/2 (log1p)."""
    if function is log1p:
        seams = [2.0**k * s - 1 for k in range(-50, 60) for s in (math.sqrt(0.5), 1.0)]
    else:
        seams = [(k + 0.5) * math.log(2) for k in range(-80, 80)]
    for seam in seams:
        for x in (math.nextafter(seam, -math.inf), seam, math.nextafter(seam, math.inf)):
            if low < x < high:
                assert ulps_off(function, true, x) <= MOST_ULPS, x


@given(st.floats(-700, 700))
@options(max_examples=200)
def test_chance_of_yes_and_chance_of_no_add_up(margin):
    assert sigmoid(margin) + sigmoid(-margin) == pytest.approx(1, abs=3 * math.ulp(1.0))
    assert softplus(margin) - softplus(-margin) == pytest.approx(margin, rel=1e-14, abs=1e-14)


@pytest.mark.parametrize("function", [exp, log1p, sigmoid, softplus])
def test_values_never_fall_by_more_than_rounding_as_the_argument_grows(function):
    chance = random.Random(3)
    even = [chance.uniform(-0.9, 40) for _ in range(3000)]
    xs = sorted(even + [2.0 ** chance.uniform(-60, 5) for _ in range(3000)])
    for before, after in pairwise([function(x) for x in xs]):
        assert after >= before - MOST_ULPS * math.ulp(before)
    assert all(function(x + 1e-3) > function(x) for x in (-0.9, -0.5, 0.0, 1.0, 5.0, 20.0))


def test_the_ends_of_the_range():
    assert exp(0.0) == 1.0 and exp(-0.0) == 1.0
    assert exp(709.782712893384) < math.inf == exp(709.7827128933841) == exp(1e300) == exp(math.inf)
    assert exp(-745.0) == 5e-324 and exp(-746.0) == exp(-1e300) == exp(-math.inf) == 0.0
    assert log1p(0.0) == 0.0 and log1p(5e-324) == 5e-324 and log1p(-1e-300) == -1e-300
    assert log1p(math.inf) == math.inf and log1p(1.7e308) < 710
    assert sigmoid(0.0) == 0.5 and sigmoid(1e300) == 1.0 and sigmoid(-1e300) == 0.0
    assert softplus(1e300) == 1e300 and softplus(-1e300) == 0.0


@given(st.floats(-1e300, 1e300))
@example(745.1332191019412)
@example(-745.2)
def test_a_finite_margin_always_has_a_chance_and_a_loss(margin):
    assert 0.0 <= sigmoid(margin) <= 1.0
    assert max(margin, 0.0) <= softplus(margin) < math.inf


BITS = [
    (exp, 1.0, "0x1.5bf0a8b14576ap+1"),
    (exp, -0.1, "0x1.cf46d99d52b3ap-1"),
    (exp, 12.345, "0x1.c0d80ffb740c4p+17"),
    (exp, -740.25, "0x0.0000000000042p-1022"),
    (log1p, 1.0, "0x1.62e42fefa39efp-1"),
    (log1p, 1e-9, "0x1.12e0be801f1d9p-30"),
    (log1p, -0.75, "-0x1.62e42fefa39efp+0"),
    (log1p, 123456.789, "0x1.77282daa2d8a9p+3"),
    (sigmoid, 0.3, "0x1.261d545e46a8bp-1"),
    (sigmoid, -7.5, "0x1.21d0b15711bf3p-11"),
    (softplus, 0.3, "0x1.b56e0cf4511b0p-1"),
    (softplus, -7.5, "0x1.21e534d42e269p-11"),
]


@pytest.mark.parametrize(("function", "x", "bits"), BITS)
def test_bits_never_change(function, x, bits):
    """Checkpoints depend on them: another result here is another format of the state."""
    assert function(x).hex() == bits
