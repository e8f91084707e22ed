"""Powers of two and logarithms to base two in float32, written so that they run several abreast.

The functions of the C library are called one value at a time and keep a loop from being vectorised.
These are a handful of multiply-adds each, without a branch. They are made for the fleet kernel: its
temperatures and loads, not any number a float32 can hold.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic
from numpy.typing import NDArray

#: Fused multiply-adds are welcome; nothing that would assume away NaN, which marks a gap.
FAST_MATH = {"contract", "nsz"}


def _coefficients(
    function: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    degree: int,
    low: float,
    high: float,
) -> tuple[np.float32, ...]:
    """Return the polynomial through the Chebyshev points, lowest power first."""
    near_best = np.polynomial.Chebyshev.interpolate(function, degree, domain=[low, high])
    plain = near_best.convert(kind=np.polynomial.Polynomial, domain=[-1, 1], window=[-1, 1])
    return tuple(np.float32(c) for c in plain.coef)


def _exp2_slope(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return (2^x - 1)/x, which has no pole at 0."""
    return np.where(x == 0.0, math.log(2.0), np.expm1(x * math.log(2.0)) / np.where(x, x, 1.0))


def _log2_slope(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return log2(1 + x)/x, which has no pole at 0."""
    return np.where(x == 0.0, 1.0, np.log1p(x) / np.where(x, x, 1.0)) / math.log(2.0)


E0, E1, E2, E3, E4, E5 = _coefficients(_exp2_slope, 5, -0.5, 0.5)
L0, L1, L2, L3, L4, L5, L6, L7, L8 = _coefficients(_log2_slope, 8, -1.0 / 3.0, 1.0 / 3.0)

ONE = np.float32(1.0)
#: Adding 1.5 × 2^23 to a float32 rounds it to a whole number, found in its lowest bits.
ROUNDER = np.float32(1.5 * 2.0**23)
LOWEST_EXPONENT = np.float32(-126.0)
MANTISSA_BITS = np.int32(23)
#: Bits of 2/3: subtracting them first puts the mantissa between 2/3 and 4/3, around 1.
BITS_OF_TWO_THIRDS = np.float32(2.0 / 3.0).view(np.int32)
BITS_OF_ONE = np.float32(1.0).view(np.int32)


def _choose(_typing: Any, _condition: Any, _if_true: Any, _if_false: Any) -> Any:
    """Return one of two float32 by a condition, as one instruction: `a if c else b` is a branch."""

    def generate(_context: Any, builder: Any, _signature: Any, arguments: Any) -> Any:
        return builder.select(*arguments)

    return types.float32(types.boolean, types.float32, types.float32), generate


choose: Any = intrinsic(_choose)


def _larger(_typing: Any, _a: Any, _b: Any) -> Any:
    """Return the larger of two float32; of a number and NaN the number."""

    def generate(_context: Any, builder: Any, _signature: Any, arguments: Any) -> Any:
        number = arguments[0].type
        maximum = builder.module.declare_intrinsic(
            "llvm.maxnum", [number], ir.FunctionType(number, [number, number])
        )
        return builder.call(maximum, arguments)

    return types.float32(types.float32, types.float32), generate


larger: Any = intrinsic(_larger)


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _whole_and_rest(x):  # type: ignore[no-untyped-def]
    """Return 2^k and 2^x - 2^k of a float32 below 127, where k is the whole number next to x."""
    x = choose(x > LOWEST_EXPONENT, x, LOWEST_EXPONENT)
    rounded = np.float32(x + ROUNDER)
    f = x - (rounded - ROUNDER)
    f2 = f * f
    slope = (E0 + E1 * f) + f2 * ((E2 + E3 * f) + f2 * (E4 + E5 * f))
    power_bits = np.int32((rounded.view(np.int32) << MANTISSA_BITS) + BITS_OF_ONE)
    power = power_bits.view(np.float32)
    return power, power * (f * slope)


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def exp2(x):  # type: ignore[no-untyped-def]
    """Return 2^x of a float32 below 127; next to nothing below -126."""
    power, rest = _whole_and_rest(x)
    return rest + power


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def exp2_less_1(x):  # type: ignore[no-untyped-def]
    """Return 2^x - 1 of a float32 below 127, without the cancellation near 0."""
    power, rest = _whole_and_rest(x)
    return rest + (power - ONE)


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def log2(x):  # type: ignore[no-untyped-def]
    """Return log2 of a float32 above 0; of 0 some number near -127, whose 2^ is next to nothing."""
    bits = np.float32(x).view(np.int32)
    exponent = np.int32(np.int32(bits - BITS_OF_TWO_THIRDS) >> MANTISSA_BITS)
    f = np.int32(bits - (exponent << MANTISSA_BITS)).view(np.float32) - ONE
    f2 = f * f
    f4 = f2 * f2
    slope = ((L0 + L1 * f) + f2 * (L2 + L3 * f)) + f4 * (
        ((L4 + L5 * f) + f2 * (L6 + L7 * f)) + f4 * L8
    )
    return f * slope + np.float32(exponent)
