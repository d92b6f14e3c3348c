"""Lanes: a short vector of doubles as a numba type, so that eight loops are solved at once.

Compilers vectorise loops over arrays only when they can prove that the arrays do not overlap, which
fails for a kernel with a dozen of them. A vector type leaves nothing to prove: every operation is
one operation on `WIDTH` doubles, on any processor (split where registers are narrower).

Arithmetic between lanes, and between lanes and a float, works with the usual operators inside
``numba.njit``. Rows of a C-contiguous float64 array of shape (n, `WIDTH`) are read and written with
`load` and `store`.
"""

from __future__ import annotations

import operator
from collections.abc import Callable
from typing import Any

from llvmlite import ir
from numba import types
from numba.extending import intrinsic, models, overload, register_model

WIDTH = 8
"""Doubles in one lanes value: two registers of 256 bits, one of 512."""


class LanesType(types.Type):
    """The numba type of a lanes value."""

    def __init__(self) -> None:
        super().__init__(name=f"Lanes({WIDTH})")


lanes_type = LanesType()
_VECTOR = ir.VectorType(ir.DoubleType(), WIDTH)
_INDEX = ir.IntType(32)


@register_model(LanesType)
class _LanesModel(models.PrimitiveModel):
    def __init__(self, manager: Any, frontend_type: Any) -> None:
        super().__init__(manager, frontend_type, _VECTOR)


def _row_pointer(context: Any, builder: Any, array_type: Any, array: Any, row: Any) -> Any:
    data = context.make_array(array_type)(context, builder, array).data
    start = builder.mul(row, ir.Constant(row.type, WIDTH))
    return builder.bitcast(builder.gep(data, [start]), _VECTOR.as_pointer())


@intrinsic
def load(_typing: Any, array: Any, row: Any) -> Any:
    """Row ``row`` of an array of shape (n, `WIDTH`) as lanes."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        pointer = _row_pointer(context, builder, signature.args[0], *args)
        return builder.load(pointer, align=8)

    return lanes_type(array, types.intp), generate


@intrinsic
def store(_typing: Any, array: Any, row: Any, value: Any) -> Any:
    """Write lanes into row ``row`` of an array of shape (n, `WIDTH`)."""

    def generate(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        pointer = _row_pointer(context, builder, signature.args[0], args[0], args[1])
        builder.store(args[2], pointer, align=8)
        return context.get_dummy_value()

    return types.void(array, types.intp, lanes_type), generate


@intrinsic
def spread(_typing: Any, value: Any) -> Any:
    """The same float in every lane."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        empty = ir.Constant(_VECTOR, ir.Undefined)
        single = builder.insert_element(empty, args[0], ir.Constant(_INDEX, 0))
        first = ir.Constant(ir.VectorType(_INDEX, WIDTH), [0] * WIDTH)
        return builder.shuffle_vector(single, empty, first)

    return lanes_type(types.float64), generate


def _binary(instruction: str) -> Any:
    @intrinsic
    def operate(_typing: Any, left: Any, right: Any) -> Any:
        def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
            # contraction: a product may be fused into a sum, which rounds once less
            return getattr(builder, instruction)(*args, flags=("contract",))

        return lanes_type(lanes_type, lanes_type), generate

    return operate


def _with_floats(operate: Any) -> Callable[[Any, Any], Any]:
    # numba compares this signature with that of the lambdas: no annotations
    def choose(left, right):  # type: ignore[no-untyped-def]  # noqa: ANN001, ANN202
        left_lanes, right_lanes = isinstance(left, LanesType), isinstance(right, LanesType)
        if left_lanes and right_lanes:
            return lambda left, right: operate(left, right)  # noqa: PLW0108
        if left_lanes and isinstance(right, types.Float):
            return lambda left, right: operate(left, spread(right))
        if right_lanes and isinstance(left, types.Float):
            return lambda left, right: operate(spread(left), right)
        return None

    return choose


for _operator, _instruction in (
    (operator.add, "fadd"),
    (operator.sub, "fsub"),
    (operator.mul, "fmul"),
    (operator.truediv, "fdiv"),
):
    overload(_operator)(_with_floats(_binary(_instruction)))


@intrinsic
def square_root(_typing: Any, value: Any) -> Any:
    """Square root of each lane."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        name = f"llvm.sqrt.v{WIDTH}f64"
        function = builder.module.globals.get(name)
        if function is None:
            function = ir.Function(builder.module, ir.FunctionType(_VECTOR, [_VECTOR]), name)
        return builder.call(function, args)

    return lanes_type(lanes_type), generate


_BITS = ir.VectorType(ir.IntType(64), WIDTH)
_MANTISSA_BITS = 52
# bits of sqrt(1/2): subtracting them moves the carry into the exponent to where x >= sqrt(1/2)
_ROOT_HALF = 0x3FE6A09E667F3BCD


def _bits(value: int) -> Any:
    return ir.Constant(_BITS, [value] * WIDTH)


def _exponent_bits(builder: Any, value: Any) -> Any:
    above = builder.sub(builder.bitcast(value, _BITS), _bits(_ROOT_HALF))
    return builder.ashr(above, _bits(_MANTISSA_BITS))


@intrinsic
def exponent(_typing: Any, value: Any) -> Any:
    """The power of 2 that leaves each positive, normal lane in [sqrt(1/2), sqrt(2)), as a float."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.sitofp(_exponent_bits(builder, args[0]), _VECTOR)

    return lanes_type(lanes_type), generate


@intrinsic
def mantissa(_typing: Any, value: Any) -> Any:
    """Each positive, normal lane over 2 to its `exponent`: in [sqrt(1/2), sqrt(2))."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        shift = builder.shl(_exponent_bits(builder, args[0]), _bits(_MANTISSA_BITS))
        return builder.bitcast(builder.sub(builder.bitcast(args[0], _BITS), shift), _VECTOR)

    return lanes_type(lanes_type), generate


@intrinsic
def where_greater(_typing: Any, left: Any, right: Any, chosen: Any, other: Any) -> Any:
    """``chosen`` in the lanes where left > right, ``other`` elsewhere (and where one is NaN)."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        return builder.select(builder.fcmp_ordered(">", args[0], args[1]), args[2], args[3])

    return lanes_type(lanes_type, lanes_type, lanes_type, lanes_type), generate


@intrinsic
def all_at_most(_typing: Any, left: Any, right: Any) -> Any:
    """Whether left <= right in every lane; ``False`` if a lane is NaN."""

    def generate(_context: Any, builder: Any, _signature: Any, args: Any) -> Any:
        mask = builder.fcmp_ordered("<=", args[0], args[1])
        bits = ir.IntType(WIDTH)
        return builder.icmp_unsigned("==", builder.bitcast(mask, bits), ir.Constant(bits, -1))

    return types.boolean(lanes_type, lanes_type), generate
