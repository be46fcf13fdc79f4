"""Sixteen float32 numbers worked on at once, for loops that numba alone does not turn into vector instructions.

`Lanes` is LLVM's <16 x float> as a numba type; each function below is one or two instructions on machines with 512-bit
vectors, and as many times more as vectors are shorter on others. They can be called from jitted code only.
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

_VECTOR = ir.VectorType(ir.FloatType(), WIDTH)
_INDEX = ir.IntType(32)
_emitted: Any = intrinsic  # numba's own type for these counts the first argument, which callers do not give


class Lanes(types.Type):
    """The numba type of sixteen float32."""

    def __init__(self) -> None:
        super().__init__(name="Lanes")


lanes = Lanes()


@register_model(Lanes)
class _LanesModel(models.PrimitiveModel):
    def __init__(self, manager: Any, kind: Any) -> None:
        super().__init__(manager, kind, _VECTOR)


def _shuffle(builder: ir.IRBuilder, a: ir.Value, b: ir.Value, places: Sequence[int]) -> ir.Value:
    """Lanes picked from a (places 0 to 15) and b (16 to 31)."""
    mask = ir.Constant(ir.VectorType(_INDEX, len(places)), [ir.Constant(_INDEX, place) for place in places])
    return builder.shuffle_vector(a, b, mask)


def _spread(builder: ir.IRBuilder, value: ir.Value) -> ir.Value:
    first = builder.insert_element(ir.Constant(_VECTOR, ir.Undefined), value, _INDEX(0))
    return _shuffle(builder, first, first, [0] * WIDTH)


def _place(context: Any, builder: ir.IRBuilder, kind: Any, array: ir.Value, index: ir.Value) -> ir.Value:
    pointer = builder.gep(context.make_array(kind)(context, builder, array).data, [index])
    return builder.bitcast(pointer, _VECTOR.as_pointer())


def _of_two(emit: Callable[[ir.IRBuilder, ir.Value, ir.Value], ir.Value], meaning: str) -> Any:
    """An operation on two Lanes that gives Lanes."""

    def operation(typingctx, a, b):
        def code(context, builder, sig, args):
            return emit(builder, *args)

        return lanes(lanes, lanes), code

    operation.__doc__ = meaning
    return _emitted(operation)


@_emitted
def load(typingctx, array, index):
    """Elements index to index + 15 of a one-dimensional, contiguous float32 array; bounds are not checked."""

    def code(context, builder, sig, args):
        return builder.load(_place(context, builder, sig.args[0], args[0], args[1]), align=4)

    return lanes(array, types.intp), code


@_emitted
def store(typingctx, array, index, value):
    """Write sixteen elements from index on; bounds are not checked."""

    def code(context, builder, sig, args):
        builder.store(args[2], _place(context, builder, sig.args[0], args[0], args[1]), align=4)
        return context.get_dummy_value()

    return types.void(array, types.intp, lanes), code


@_emitted
def add_lower(typingctx, array, index, value):
    """Add the lower half to eight elements of a float64 array from index on; bounds are not checked."""

    def code(context, builder, sig, args):
        double = ir.VectorType(ir.DoubleType(), HALF)
        place = builder.gep(context.make_array(sig.args[0])(context, builder, args[0]).data, [args[1]])
        place = builder.bitcast(place, double.as_pointer())
        lower = builder.fpext(_shuffle(builder, args[2], args[2], range(HALF)), double)
        builder.store(builder.fadd(builder.load(place, align=8), lower), place, align=8)
        return context.get_dummy_value()

    return types.void(array, types.intp, lanes), code


@_emitted
def spread(typingctx, value):
    """One number in every lane."""

    def code(context, builder, sig, args):
        return _spread(builder, args[0])

    return lanes(types.float32), code


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
        kind = ir.FunctionType(_VECTOR, [_VECTOR] * 3)
        return builder.call(
            cgutils.get_or_insert_function(builder.module, kind, f"llvm.fmuladd.v{WIDTH}f32"), args
        )  # fmt: skip

    return lanes(lanes, lanes, lanes), code


def _pick(order: str) -> Callable[[ir.IRBuilder, ir.Value, ir.Value], ir.Value]:
    return lambda builder, a, b: builder.select(builder.fcmp_ordered(order, a, b, flags=("fast",)), a, b)


times = _of_two(lambda builder, a, b: builder.fmul(a, b), "a b")
minus = _of_two(lambda builder, a, b: builder.fsub(a, b), "a - b")
least = _of_two(_pick("<"), "The smaller of each pair.")
most = _of_two(_pick(">"), "The larger of each pair.")
follow = _of_two(
    lambda builder, a, b: _shuffle(builder, a, b, range(1, WIDTH + 1)), "a moved down by one lane, then b's first."
)
halves = _of_two(
    lambda builder, a, b: _shuffle(builder, a, b, [*range(HALF), *range(WIDTH + HALF, 2 * WIDTH)]),
    "The lower half of a and the upper half of b.",
)
turn = _of_two(
    lambda builder, a, b: _shuffle(builder, a, b, [*range(HALF, WIDTH), *range(WIDTH, WIDTH + HALF)]),
    "The upper half of a, then the lower half of b.",
)
