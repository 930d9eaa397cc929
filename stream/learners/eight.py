"""Learners in eight lanes at once: numbers at eight places in, eight updated numbers out.

Written in the compiler's own vectors, since it does not find them by itself where arrays may overlap.
IEEE 754 fixes every operation to the bit, so that each lane gets what the plain kernel gives it. Letters: see
`stream.learners.ftrl` and `stream.learners.truncated_gradient`.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from llvmlite import ir
from numba.core import types
from numba.extending import intrinsic

from stream.learners.layout import LIMIT

__all__ = [
    "LANES",
    "draw_eight",
    "learn_eight",
    "learn_eight_zeros",
    "move_eight",
    "on_eight",
    "score_eight",
    "undrawn_eight",
]

LANES = 8
VECTOR = ir.VectorType(ir.DoubleType(), LANES)
_intrinsic: Callable[[Callable[..., Any]], Callable[..., Any]] = (
    intrinsic  # called without its first argument
)


class _Eight:
    """Builds code on vectors of eight float64."""

    def __init__(self, context: Any, builder: Any, signature: Any, args: Any) -> None:
        self.builder = builder
        self._data = {
            i: context.make_array(kind)(context, builder, args[i]).data
            for i, kind in enumerate(signature.args)
            if isinstance(kind, types.Array)
        }
        self._args = args

    def _place(self, array: int, index: int) -> Any:
        place = self.builder.gep(self._data[array], [self._args[index]])
        return self.builder.bitcast(place, VECTOR.as_pointer())

    def load(self, array: int, index: int) -> Any:
        """Eight numbers of the argument `array` from the argument `index` on."""
        found = self.builder.load(self._place(array, index))
        found.align = 8
        return found

    def store(self, value: Any, array: int, index: int) -> None:
        self.builder.store(value, self._place(array, index)).align = 8

    def call(self, name: str, *values: Any) -> Any:
        """sqrt, fabs or copysign."""
        kind = ir.FunctionType(VECTOR, [VECTOR] * len(values))
        function = self.builder.module.declare_intrinsic(f"llvm.{name}.v{LANES}f64", (), kind)
        return self.builder.call(function, values)

    def spread(self, value: Any) -> Any:
        """One number eight times."""
        one = self.builder.insert_element(ir.Constant(VECTOR, ir.Undefined), value, ir.IntType(32)(0))
        mask = ir.Constant(ir.VectorType(ir.IntType(32), LANES), [0] * LANES)
        return self.builder.shuffle_vector(one, ir.Constant(VECTOR, ir.Undefined), mask)

    def constant(self, value: float) -> Any:
        return ir.Constant(VECTOR, [value] * LANES)

    def bits(self, flags: Any) -> Any:
        """Eight flags as the lowest bits of an int64."""
        return self.builder.zext(self.builder.bitcast(flags, ir.IntType(LANES)), ir.IntType(64))

    def refused(self, fine: Any) -> Any:
        """The lanes whose update was not fine, as the lowest bits of an int64."""
        return self.bits(self.builder.not_(fine))


@_intrinsic
def on_eight(typing: Any, lanes: Any, z_at: Any, bounds: Any, at: Any) -> Any:
    """In which of eight lanes |z| > strength, as the lowest bits of an int64."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        eight = _Eight(context, builder, signature, args)
        size = eight.call("fabs", eight.load(0, 1))
        return eight.bits(builder.fcmp_ordered(">", size, eight.load(2, 3)))

    return types.int64(lanes, z_at, bounds, at), generate


@_intrinsic
def undrawn_eight(typing: Any, lanes: Any, w_at: Any, since_at: Any, strength: Any, at: Any, eta: Any) -> Any:
    """In which of eight lanes |w| > eta * (strength - since), as the lowest bits of an int64."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        eight = _Eight(context, builder, signature, args)
        a = builder.fmul(eight.load(5, 4), builder.fsub(eight.load(3, 4), eight.load(0, 2)))
        size = eight.call("fabs", eight.load(0, 1))
        return eight.bits(builder.fcmp_ordered(">", size, a))

    return types.int64(lanes, w_at, since_at, strength, at, eta), generate


@_intrinsic
def score_eight(
    typing: Any, lanes: Any, z_at: Any, n_at: Any, bounds: Any, at: Any, beta: Any, per_alpha: Any,
    lambda_2: Any, value: Any, ws: Any, roots: Any, kept_at: Any, into: Any, into_at: Any,
) -> Any:  # fmt: skip
    """ws, roots = weights and roots of n; into += w * value."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        eight = _Eight(context, builder, signature, args)
        z, root = eight.load(0, 1), eight.call("sqrt", eight.load(0, 2))
        beyond = builder.fsub(eight.call("fabs", z), eight.load(3, 4))
        zero = eight.constant(0.0)
        beyond = builder.select(builder.fcmp_ordered(">", beyond, zero), beyond, zero)
        steep = builder.fmul(builder.fadd(eight.load(5, 4), root), eight.load(6, 4))
        steep = builder.fadd(steep, eight.load(7, 4))
        w = builder.fdiv(eight.call("copysign", beyond, builder.fneg(z)), steep)
        eight.store(w, 9, 11)
        eight.store(root, 10, 11)
        term = builder.fmul(w, eight.spread(args[8]))
        eight.store(builder.fadd(eight.load(12, 13), term), 12, 13)
        return context.get_dummy_value()

    return types.void(
        lanes, z_at, n_at, bounds, at, beta, per_alpha, lambda_2, value, ws, roots, kept_at, into, into_at
    ), generate


def _learn(eight: _Eight, value: Any, sigma_w: Callable[[Any], Any] | None) -> Any:
    """The update; which lanes refused it."""
    builder = eight.builder
    g = builder.fmul(eight.load(3, 4), eight.spread(value))
    z, n = eight.load(0, 1), eight.load(0, 2)
    grown = builder.fadd(n, builder.fmul(g, g))
    moved = builder.fadd(z, g)
    if sigma_w is not None:
        moved = builder.fsub(moved, sigma_w(grown))
    size = eight.call("fabs", moved)
    fine = builder.fcmp_ordered("<", builder.fadd(size, grown), eight.constant(LIMIT))
    eight.store(builder.select(fine, moved, z), 0, 1)
    eight.store(builder.select(fine, grown, n), 0, 2)
    return eight.refused(fine)


@_intrinsic
def learn_eight(
    typing: Any, lanes: Any, z_at: Any, n_at: Any, gradients: Any, at: Any, value: Any, per_alpha: Any,
    ws: Any, roots: Any, kept_at: Any,
) -> Any:  # fmt: skip
    """z, n learn the gradients times `value`, with what `score_eight` kept. Tells which refused."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        eight = _Eight(context, builder, signature, args)

        def sigma_w(grown: Any) -> Any:
            rise = builder.fsub(eight.call("sqrt", grown), eight.load(8, 9))
            return builder.fmul(builder.fmul(rise, eight.load(6, 4)), eight.load(7, 9))

        return _learn(eight, args[5], sigma_w)

    return types.int64(lanes, z_at, n_at, gradients, at, value, per_alpha, ws, roots, kept_at), generate


@_intrinsic
def learn_eight_zeros(
    typing: Any, lanes: Any, z_at: Any, n_at: Any, gradients: Any, at: Any, value: Any
) -> Any:
    """`learn_eight` where all eight weights were zero: sigma * w is zero too, so that no root is needed."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return _learn(_Eight(context, builder, signature, args), args[5], None)

    return types.int64(lanes, z_at, n_at, gradients, at, value), generate


@_intrinsic
def draw_eight(
    typing: Any, lanes: Any, w_at: Any, since_at: Any, strength: Any, at: Any, eta: Any, value: Any, ws: Any,
    kept_at: Any, into: Any,
) -> Any:  # fmt: skip
    """ws = weights truncated up to now; into += w * value: of truncated gradient."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        eight = _Eight(context, builder, signature, args)
        w, zero = eight.load(0, 1), eight.constant(0.0)
        a = builder.fmul(eight.load(5, 4), builder.fsub(eight.load(3, 4), eight.load(0, 2)))
        below = builder.fcmp_ordered("<", w, builder.fneg(a))
        drawn = builder.select(below, builder.fadd(w, a), zero)
        drawn = builder.select(builder.fcmp_ordered(">", w, a), builder.fsub(w, a), drawn)
        eight.store(drawn, 7, 8)
        term = builder.fmul(drawn, eight.spread(args[6]))
        eight.store(builder.fadd(eight.load(9, 4), term), 9, 4)
        return context.get_dummy_value()

    return types.void(lanes, w_at, since_at, strength, at, eta, value, ws, kept_at, into), generate


@_intrinsic
def move_eight(
    typing: Any, lanes: Any, w_at: Any, since_at: Any, strength: Any, at: Any, steps: Any, value: Any,
    ws: Any, kept_at: Any, limit: Any,
) -> Any:  # fmt: skip
    """w = ws - steps * value, truncated up to `strength`. Tells which refused."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        eight = _Eight(context, builder, signature, args)
        step = builder.fmul(eight.load(5, 4), eight.spread(args[6]))
        w = builder.fsub(eight.load(7, 8), step)
        size = eight.call("fabs", w)
        fine = builder.fcmp_ordered("<", size, eight.spread(args[9]))
        eight.store(builder.select(fine, w, eight.load(0, 1)), 0, 1)
        eight.store(builder.select(fine, eight.load(3, 4), eight.load(0, 2)), 0, 2)
        return eight.refused(fine)

    return types.int64(lanes, w_at, since_at, strength, at, steps, value, ws, kept_at, limit), generate
