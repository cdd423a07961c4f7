"""Sixteen float32 in the lanes of a vector, as a numba type.

Loops over channels step through memory too irregularly for a compiler to vectorise them by itself, so the march says
what it wants: one value of this type holds the same quantity of sixteen rays. LLVM maps it to one 512-bit register,
two of 256 bits, or four of 128. Scalars mix in and are spread over the lanes. Multiplications and additions written
with `fma` are fused where the processor can.
"""

from __future__ import annotations

import operator
import platform
from collections.abc import Callable
from typing import Any

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic, models, overload, register_model

LANES = 16
"""Rays in a vector."""

_FLOAT = ir.FloatType()
_INT = ir.IntType(32)
_VECTOR = ir.VectorType(_FLOAT, LANES)
_INTS = ir.VectorType(_INT, LANES)
_ROUND = 12582912.0
"""1.5 * 2**23: adding it to a small float32 leaves the nearest integer in the low bits of the mantissa."""
_LEAST = -126.0
"""Smallest exponent of a normal float32."""

# (2^f - 1) / f on -1/2..1/2, a Chebyshev fit of degree 5: 8e-8 in float32.
_EXP2 = (0.6931471824645996, 0.24022650718688965, 0.055503569543361664, 0.009618056938052177,
         0.0013390866806730628, 0.00015461447765119374)  # fmt: skip


class VectorType(types.Type):  # type: ignore[misc]
    """numba's name for sixteen float32."""

    def __init__(self) -> None:
        super().__init__(name="float32x16")


vector = VectorType()


@register_model(VectorType)
class _VectorModel(models.PrimitiveModel):  # type: ignore[misc]
    def __init__(self, manager: Any, kind: Any) -> None:
        super().__init__(manager, kind, _VECTOR)


def _constant(value: float) -> Any:
    return ir.Constant(_VECTOR, [ir.Constant(_FLOAT, value)] * LANES)


def _integers(value: int) -> Any:
    return ir.Constant(_INTS, [ir.Constant(_INT, value)] * LANES)


def _spread(builder: Any, value: Any, kind: Any) -> Any:
    """A vector as it is, a scalar in all lanes."""
    if isinstance(kind, VectorType):
        return value
    if isinstance(kind, types.Integer):
        value = builder.sitofp(value, _FLOAT)
    elif kind.bitwidth == 64:
        value = builder.fptrunc(value, _FLOAT)
    empty = ir.Constant(_VECTOR, ir.Undefined)
    first = builder.insert_element(empty, value, ir.Constant(_INT, 0))
    return builder.shuffle_vector(first, empty, _integers(0))


def _call(builder: Any, name: str, result: Any, arguments: list[Any], **how: Any) -> Any:
    function = builder.module.globals.get(name)
    if function is None:
        function = ir.Function(builder.module, ir.FunctionType(result, [a.type for a in arguments]), name)
    return builder.call(function, arguments, **how)


def _fma(builder: Any, x: Any, y: Any, z: Any) -> Any:
    return _call(builder, f"llvm.fmuladd.v{LANES}f32", _VECTOR, [x, y, z])


def _larger(builder: Any, x: Any, y: Any) -> Any:
    return builder.select(builder.fcmp_ordered(">", x, y), x, y)


def _smaller(builder: Any, x: Any, y: Any) -> Any:
    return builder.select(builder.fcmp_ordered("<", x, y), x, y)


def _binary(emit: Callable[[Any, Any, Any], Any], *operators: Any) -> Any:
    """A function of two vectors, or a vector and a scalar."""

    @intrinsic
    def function(typing_context: Any, x: Any, y: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            spread = [_spread(builder, a, kind) for a, kind in zip(arguments, signature.args, strict=True)]
            return emit(builder, *spread)

        return vector(x, y), generate

    def typed(x, y):  # type: ignore[no-untyped-def]  # numba compares it with the lambda below
        if isinstance(x, VectorType) or isinstance(y, VectorType):
            return lambda x, y: function(x, y)
        return None

    for symbol in operators:
        overload(symbol)(typed)
    return function


_binary(lambda builder, x, y: builder.fadd(x, y), operator.add)
_binary(lambda builder, x, y: builder.fsub(x, y), operator.sub)
_binary(lambda builder, x, y: builder.fmul(x, y), operator.mul)
_binary(lambda builder, x, y: builder.fdiv(x, y), operator.truediv)
larger = _binary(_larger)
smaller = _binary(_smaller)


@intrinsic
def fma(typing_context: Any, x: Any, y: Any, z: Any) -> Any:
    """x * y + z."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        spread = [_spread(builder, a, kind) for a, kind in zip(arguments, signature.args, strict=True)]
        return _fma(builder, *spread)

    return vector(x, y, z), generate


@intrinsic
def spread(typing_context: Any, x: Any) -> Any:
    """A scalar in all lanes."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return _spread(builder, arguments[0], signature.args[0])

    return vector(x), generate


def _place(context: Any, builder: Any, kind: Any, array: Any, index: Any) -> Any:
    data = context.make_array(kind)(context, builder, array).data
    return builder.bitcast(builder.gep(data, [index]), _VECTOR.as_pointer())


@intrinsic
def load(typing_context: Any, array: Any, index: Any) -> Any:
    """Sixteen neighbours of a contiguous float32 array, from `index` on; nothing is checked."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        value = builder.load(_place(context, builder, signature.args[0], *arguments))
        value.align = 4
        return value

    return vector(array, index), generate


@intrinsic
def store(typing_context: Any, array: Any, index: Any, value: Any) -> Any:
    """Put a vector into a contiguous float32 array, from `index` on; nothing is checked."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        put = builder.store(arguments[2], _place(context, builder, signature.args[0], *arguments[:2]))
        put.align = 4
        return context.get_dummy_value()

    return types.void(array, index, value), generate


def _split_exponent(builder: Any, y: Any) -> tuple[Any, Any]:
    """2^y = scale + scale * rest for -126 <= y <= 127: the power of two nearest, and what is left."""
    shifted = builder.fadd(y, _constant(_ROUND))
    f = builder.fsub(y, builder.fsub(shifted, _constant(_ROUND)))
    p = _constant(_EXP2[-1])
    for coefficient in _EXP2[-2::-1]:
        p = _fma(builder, p, f, _constant(coefficient))
    bits = builder.shl(builder.bitcast(shifted, _INTS), _integers(23))
    scale = builder.bitcast(builder.add(bits, _integers(127 << 23)), _VECTOR)
    return scale, builder.fmul(f, p)


@intrinsic
def exp2_minus(typing_context: Any, x: Any) -> Any:
    """2^-x for x >= -127; 2^-126 at most beyond 126, so that no denormal comes of it."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        y = _larger(builder, builder.fsub(_constant(-0.0), arguments[0]), _constant(_LEAST))
        scale, rest = _split_exponent(builder, y)
        return _fma(builder, scale, rest, scale)

    return vector(x), generate


@intrinsic
def one_minus_exp2(typing_context: Any, x: Any) -> Any:
    """1 - 2^-x for x >= -127, without cancellation near 0."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        y = _larger(builder, builder.fsub(_constant(-0.0), arguments[0]), _constant(_LEAST))
        scale, rest = _split_exponent(builder, y)
        minus = builder.fsub(_constant(-0.0), scale)
        return _fma(builder, minus, rest, builder.fsub(_constant(1.0), scale))

    return vector(x), generate


@intrinsic
def where_zero(typing_context: Any, test: Any, x: Any, y: Any) -> Any:
    """Lane by lane: x where `test` is 0, else y."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        zero = builder.fcmp_ordered("==", arguments[0], _constant(0.0))
        spread = [_spread(builder, a, k) for a, k in zip(arguments[1:], signature.args[1:], strict=True)]
        return builder.select(zero, *spread)

    return vector(test, x, y), generate


def _reduction(name: str) -> Any:
    @intrinsic
    def function(typing_context: Any, x: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            how = {"fastmath": ("nnan", "ninf", "nsz")}
            return _call(builder, f"llvm.vector.reduce.{name}.v{LANES}f32", _FLOAT, [arguments[0]], **how)

        return types.float32(x), generate

    return function


least = _reduction("fmin")
greatest = _reduction("fmax")


_X86 = platform.machine().lower() in ("x86_64", "amd64", "i386", "i686")
_FLUSH = 0x8040
"""Bits of the x86 control register by which denormal results and operands become zero."""


def _control(builder: Any, name: str, place: Any) -> None:
    pointer = ir.IntType(8).as_pointer()
    function = builder.module.globals.get(name)
    if function is None:
        function = ir.Function(builder.module, ir.FunctionType(ir.VoidType(), [pointer]), name)
    builder.call(function, [builder.bitcast(place, pointer)])


@intrinsic
def flush_denormals(typing_context: Any) -> Any:
    """Treat denormals as zeros in this thread from here on; returns what `restore_denormals` takes.

    Each denormal costs tens of ordinary operations on x86. Elsewhere this does nothing.
    """

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        place = cgutils.alloca_once_value(builder, ir.Constant(_INT, 0))
        if not _X86:
            return builder.load(place)
        _control(builder, "llvm.x86.sse.stmxcsr", place)
        before = builder.load(place)
        builder.store(builder.or_(before, ir.Constant(_INT, _FLUSH)), place)
        _control(builder, "llvm.x86.sse.ldmxcsr", place)
        return before

    return types.int32(), generate


@intrinsic
def restore_denormals(typing_context: Any, before: Any) -> Any:
    """Undo `flush_denormals`."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        if _X86:
            _control(builder, "llvm.x86.sse.ldmxcsr", cgutils.alloca_once_value(builder, arguments[0]))
        return context.get_dummy_value()

    return types.void(types.int32), generate
