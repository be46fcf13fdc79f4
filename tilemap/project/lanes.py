"""Sixteen or eight float32 numbers worked on at once, for loops that numba alone does not turn into vector instructions.

`Lanes` is LLVM's <16 x float> or <8 x float> as a numba type; each function below is one or two instructions on machines
with 512-bit vectors, and as many times more as vectors are shorter on others. They can be called from jitted code only.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic, models, register_model

WIDTH = 16
HALF = WIDTH // 2

_INDEX = ir.IntType(32)
_emitted: Any = intrinsic  # numba's own type for these counts the first argument, which callers do not give


class Lanes(types.Type):
    """The numba type of that many float32."""

    def __init__(self, width: int) -> None:
        self.width = width
        super().__init__(name=f"Lanes({width})")


@register_model(Lanes)
class _LanesModel(models.PrimitiveModel):
    def __init__(self, manager: Any, kind: Any) -> None:
        super().__init__(manager, kind, ir.VectorType(ir.FloatType(), kind.width))


lanes, half_lanes = Lanes(WIDTH), Lanes(HALF)
_VECTOR = ir.VectorType(ir.FloatType(), WIDTH)


def _shuffle(builder: ir.IRBuilder, a: ir.Value, b: ir.Value, places: Sequence[int]) -> ir.Value:
    """Lanes picked from a (places 0 to 15) and b (16 to 31)."""
    mask = ir.Constant(ir.VectorType(_INDEX, len(places)), [ir.Constant(_INDEX, place) for place in places])
    return builder.shuffle_vector(a, b, mask)


def _spread(builder: ir.IRBuilder, value: ir.Value, width: int = WIDTH) -> ir.Value:
    first = builder.insert_element(ir.Constant(ir.VectorType(ir.FloatType(), width), ir.Undefined), value, _INDEX(0))
    return _shuffle(builder, first, first, [0] * width)


def _place(context: Any, builder: ir.IRBuilder, kind: Any, array: ir.Value, index: ir.Value, vector: Any) -> ir.Value:
    pointer = builder.gep(context.make_array(kind)(context, builder, array).data, [index])
    return builder.bitcast(pointer, vector.as_pointer())


def _of_two(emit: Callable[[ir.IRBuilder, ir.Value, ir.Value], ir.Value], meaning: str) -> Any:
    """An operation on two Lanes of one width that gives Lanes of that width."""

    def operation(typingctx, a, b):
        def code(context, builder, sig, args):
            return emit(builder, *args)

        return a(a, a), code

    operation.__doc__ = meaning
    return _emitted(operation)


@_emitted
def store(typingctx, array, index, value):
    """Write all lanes from index on; bounds are not checked."""

    def code(context, builder, sig, args):
        builder.store(args[2], _place(context, builder, sig.args[0], args[0], args[1], args[2].type), align=4)
        return context.get_dummy_value()

    return types.void(array, types.intp, value), code


@_emitted
def add_product(typingctx, array, index, factor, value):
    """Add a number times all lanes to elements of a float32 or float64 array from index on; bounds are not checked."""

    def code(context, builder, sig, args):
        width, kind = sig.args[3].width, context.get_value_type(sig.args[0].dtype)
        factors = _spread(builder, args[2], width)
        place = _place(context, builder, sig.args[0], args[0], args[1], ir.VectorType(kind, width))
        if kind == ir.FloatType():
            before = builder.load(place, align=4)
            builder.store(_fma(builder, factors, args[3], before), place, align=4)
        else:
            products = builder.fpext(builder.fmul(factors, args[3]), ir.VectorType(kind, width))
            builder.store(builder.fadd(builder.load(place, align=8), products), place, align=8)
        return context.get_dummy_value()

    return types.void(array, types.intp, types.float32, value), code


@_emitted
def spread(typingctx, value):
    """One number in sixteen lanes."""

    def code(context, builder, sig, args):
        return _spread(builder, args[0])

    return lanes(types.float32), code


@_emitted
def spread_like(typingctx, value, like):
    """One number in as many lanes as `like` has."""

    def code(context, builder, sig, args):
        return _spread(builder, args[0], sig.args[1].width)

    return like(types.float32, like), code


@_emitted
def lower(typingctx, a):
    """The lower eight of sixteen lanes."""

    def code(context, builder, sig, args):
        return _shuffle(builder, args[0], args[0], range(HALF))

    return half_lanes(lanes), code


@_emitted
def ramp(typingctx, start):
    """start, start + 1, ... start + 15."""

    def code(context, builder, sig, args):
        return builder.fadd(_spread(builder, args[0]), ir.Constant(_VECTOR, [float(k) for k in range(WIDTH)]))

    return lanes(types.float32), code


@_emitted
def fma(typingctx, a, b, c):
    """a b + c, rounded once where the machine can."""

    def code(context, builder, sig, args):
        return _fma(builder, *args)

    return a(a, a, a), code


def _fma(builder: ir.IRBuilder, a: ir.Value, b: ir.Value, c: ir.Value) -> ir.Value:
    kind = ir.FunctionType(a.type, [a.type] * 3)
    return builder.call(
        cgutils.get_or_insert_function(builder.module, kind, f"llvm.fmuladd.v{a.type.count}f32"), [a, b, c]
    )


def _pick(order: str) -> Callable[[ir.IRBuilder, ir.Value, ir.Value], ir.Value]:
    return lambda builder, a, b: builder.select(builder.fcmp_ordered(order, a, b, flags=("fast",)), a, b)


times = _of_two(lambda builder, a, b: builder.fmul(a, b), "a b")
minus = _of_two(lambda builder, a, b: builder.fsub(a, b), "a - b")
least = _of_two(_pick("<"), "The smaller of each pair.")
most = _of_two(_pick(">"), "The larger of each pair.")
follow = _of_two(
    lambda builder, a, b: _shuffle(builder, a, b, range(1, WIDTH + 1)), "a moved down by one lane, then b's first."
)
follow_each = _of_two(
    lambda builder, a, b: _shuffle(builder, a, b, [*range(1, HALF), WIDTH, *range(HALF + 1, WIDTH + 1)]),
    "Each half of a moved down by one lane, then b's first.",
)
halves = _of_two(
    lambda builder, a, b: _shuffle(builder, a, b, [*range(HALF), *range(WIDTH + HALF, 2 * WIDTH)]),
    "The lower half of a and the upper half of b.",
)
turn = _of_two(
    lambda builder, a, b: _shuffle(builder, a, b, [*range(HALF, WIDTH), *range(WIDTH, WIDTH + HALF)]),
    "The upper half of a, then the lower half of b.",
)
