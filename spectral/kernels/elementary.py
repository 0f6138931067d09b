"""Exponential and logarithm that a compiled loop can apply to many values at once.

The C library's own functions stop the compiler from working on several values
with one instruction. These two are plain arithmetic on the bits of a double. The
fused multiply-add is asked for by name: were the compiler free to fuse, a value's
last bit could depend on its place in a loop.

Source: range reduction by a two-part ln 2 and a short series is textbook method,
W. J. Cody & W. Waite 1980, "Software Manual for the Elementary Functions",
Prentice-Hall, chapters 5 and 6 (from memory); the series are Taylor's.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from llvmlite import ir
from numba import types
from numba.extending import intrinsic, overload

LARGEST_EXPONENT = 700.0
LARGEST_SINGLE_EXPONENT = 87.0
_PER_LN2 = 1.4426950408889634
_LN2_HIGH = 6.93145751953125e-1  # short enough that k times it is exact
_LN2_LOW = 1.42860682030941723212e-6
_SHIFT = 1.5 * 2.0**52 + 1023.0  # leaves k + 1023 in the lowest bits of the sum
_ROOT_HALF_BITS = 0x3FE6A09E667F3BCD
_SINGLE = np.float32
_SINGLE_LN2_HIGH = _SINGLE(355.0 / 512.0)
_SINGLE_LN2_LOW = _SINGLE(-2.1219444005469058e-4)
_SINGLE_SHIFT = _SINGLE(1.5 * 2.0**23 + 127.0)
_SINGLE_ROOT_HALF_BITS = np.int32(0x3F3504F3)


def _cast(argument: Any, result: Any) -> Any:
    """Intrinsic that gives the bits of a number another type of the same length."""

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.bitcast(
            arguments[0], context.get_value_type(signature.return_type)
        )

    def typed(typing_context: Any, value: Any) -> Any:  # noqa: ARG001
        return result(argument), generate

    return intrinsic(typed)


def _multiply_add(typing_context: Any, x: Any, y: Any, z: Any) -> Any:  # noqa: ARG001
    """Return x y + z, rounded once where the processor can."""
    single = x == y == z == types.float32
    real = types.float32 if single else types.float64

    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        kind = context.get_value_type(signature.return_type)
        form = ir.FunctionType(kind, [kind] * 3)
        function = builder.module.declare_intrinsic("llvm.fmuladd", [kind], form)
        return builder.call(function, arguments)

    return real(real, real, real), generate


multiply_add: Any = intrinsic(_multiply_add)
_as_bits, _as_float = (
    _cast(types.float64, types.int64),
    _cast(types.int64, types.float64),
)
_as_short_bits, _as_single = (
    _cast(types.float32, types.int32),
    _cast(types.int32, types.float32),
)


def _exponential(x: float) -> float:
    """exp(x) to 3e-16, x held within +-700 (e^700 is near the largest double)."""
    x = min(max(x, -LARGEST_EXPONENT), LARGEST_EXPONENT)
    shifted: float = multiply_add(x, _PER_LN2, _SHIFT)
    k = shifted - _SHIFT
    r = multiply_add(-k, _LN2_LOW, multiply_add(-k, _LN2_HIGH, x))
    p = 1.6059043836821613e-10  # 1/13!, then 1/12! ... down to 1
    p = multiply_add(p, r, 2.08767569878681e-09)
    p = multiply_add(p, r, 2.505210838544172e-08)
    p = multiply_add(p, r, 2.755731922398589e-07)
    p = multiply_add(p, r, 2.7557319223985893e-06)
    p = multiply_add(p, r, 2.48015873015873e-05)
    p = multiply_add(p, r, 1.984126984126984e-04)
    p = multiply_add(p, r, 1.388888888888889e-03)
    p = multiply_add(p, r, 8.333333333333333e-03)
    p = multiply_add(p, r, 4.1666666666666664e-02)
    p = multiply_add(p, r, 0.16666666666666666)
    p = multiply_add(p, r, 0.5)
    p = multiply_add(p, r, 1.0)
    p = multiply_add(p, r, 1.0)
    power: float = _as_float(_as_bits(shifted) << 52)
    return float(p * power)


def _single_exponential(x: np.float32) -> np.float32:
    """exp(x) to 2e-7, x held within +-87."""
    one = _SINGLE(1.0)
    largest = _SINGLE(LARGEST_SINGLE_EXPONENT)
    x = min(max(x, -largest), largest)
    shifted = multiply_add(x, _SINGLE(_PER_LN2), _SINGLE_SHIFT)
    k = shifted - _SINGLE_SHIFT
    r = multiply_add(-k, _SINGLE_LN2_LOW, multiply_add(-k, _SINGLE_LN2_HIGH, x))
    p = _SINGLE(1.984126984126984e-04)  # 1/7!, then 1/6! ... down to 1
    p = multiply_add(p, r, _SINGLE(1.388888888888889e-03))
    p = multiply_add(p, r, _SINGLE(8.333333333333333e-03))
    p = multiply_add(p, r, _SINGLE(4.1666666666666664e-02))
    p = multiply_add(p, r, _SINGLE(0.16666666666666666))
    p = multiply_add(p, r, _SINGLE(0.5))
    p = multiply_add(p, r, one)
    p = multiply_add(p, r, one)
    power = _as_single(_as_short_bits(shifted) << np.int32(23))
    return _SINGLE(p * power)


def _logarithm(x: float) -> float:
    """ln(x) to 3e-16 of max(1, |ln x|), for normal positive x only."""
    bits: int = _as_bits(x)
    exponent = (bits - _ROOT_HALF_BITS) >> 52
    mantissa: float = _as_float(bits - (exponent << 52))  # within [0.707, 1.414)
    s = (mantissa - 1.0) / (mantissa + 1.0)
    z = s * s
    p = 1.0 / 21.0  # 2 artanh(s) = 2 s (1 + z/3 + z^2/5 + ...)
    p = multiply_add(p, z, 1.0 / 19.0)
    p = multiply_add(p, z, 1.0 / 17.0)
    p = multiply_add(p, z, 1.0 / 15.0)
    p = multiply_add(p, z, 1.0 / 13.0)
    p = multiply_add(p, z, 1.0 / 11.0)
    p = multiply_add(p, z, 1.0 / 9.0)
    p = multiply_add(p, z, 1.0 / 7.0)
    p = multiply_add(p, z, 0.2)
    p = multiply_add(p, z, 1.0 / 3.0)
    k = float(exponent)
    return float(k * _LN2_HIGH + (2.0 * s + (k * _LN2_LOW + 2.0 * s * z * p)))


def _single_logarithm(x: np.float32) -> np.float32:
    """ln(x) to 2e-7 of max(1, |ln x|), for normal positive x only."""
    one = _SINGLE(1.0)
    bits = _as_short_bits(x)
    exponent = (bits - _SINGLE_ROOT_HALF_BITS) >> np.int32(23)
    mantissa = _as_single(bits - (exponent << np.int32(23)))
    s = (mantissa - one) / (mantissa + one)
    z = s * s
    p = _SINGLE(1.0 / 9.0)
    p = multiply_add(p, z, _SINGLE(1.0 / 7.0))
    p = multiply_add(p, z, _SINGLE(0.2))
    p = multiply_add(p, z, _SINGLE(1.0 / 3.0))
    k = _SINGLE(exponent)
    twice = s + s
    rest = k * _SINGLE_LN2_LOW + twice * z * p
    return _SINGLE(k * _SINGLE_LN2_HIGH + (twice + rest))


def exponential(x: float) -> float:
    """exp(x) in the precision of its argument, for compiled loops."""
    return math.exp(x)


def logarithm(x: float) -> float:
    """ln(x) in the precision of its argument, for compiled loops."""
    return math.log(x)


_OPTIONS: Any = {"error_model": "numpy"}


@overload(exponential, strict=False, jit_options=_OPTIONS)
def _pick_exponential(x: Any) -> Any:
    """Exponential for the type of x."""
    if x == types.float32:
        return _single_exponential
    return _exponential


@overload(logarithm, strict=False, jit_options=_OPTIONS)
def _pick_logarithm(x: Any) -> Any:
    """Logarithm for the type of x."""
    if x == types.float32:
        return _single_logarithm
    return _logarithm
