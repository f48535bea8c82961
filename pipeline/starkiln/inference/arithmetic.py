"""exp, log, sine and cosine in plain arithmetic: the same bits on every x86-64, and free to run in vector lanes.

The C library's versions differ between CPUs by an ulp or more, which would make a catalogue depend on the machine.
These use only IEEE add, multiply, divide and bit moves, which do not. log Phi, for upper limits, still calls the C
library.
"""

from __future__ import annotations

from math import erfc, sqrt
from typing import Any

import numpy as np
from llvmlite import ir
from numba import types
from numba.extending import intrinsic
from numpy.typing import NDArray

from starkiln.inference.compile import inlined, kernel

_ROUND = 6755399441055744.0  # 1.5 * 2**52: adding it rounds to an integer held in the low bits
_LOG2_E = 1.4426950408889634
_LN2_HIGH = 6.93147180369123816490e-01
_LN2_LOW = 1.90821492927058770002e-10
_MANTISSA = np.int64(0x000FFFFFFFFFFFFF)
_ONE_BITS = np.int64(0x3FF0000000000000)
_TWO_52_BITS = np.int64(0x4330000000000000)
_SQRT2 = 1.4142135623730951
HALF_LN_2PI = 0.9189385332046727


def _float_bits(typing_context: Any, value: Any) -> Any:
    """Return the bits of a float64 as int64."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.bitcast(args[0], ir.IntType(64))

    return types.int64(types.float64), codegen


def _bits_float(typing_context: Any, value: Any) -> Any:
    """Return the float64 whose bits are an int64."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.bitcast(args[0], ir.DoubleType())

    return types.float64(types.int64), codegen


float_bits: Any = intrinsic(_float_bits)
bits_float: Any = intrinsic(_bits_float)


@inlined
def exp(x):
    """exp(x), relative error below 3e-16; x is clamped to [-700, 700]."""
    x = min(max(x, -700.0), 700.0)
    shifted = x * _LOG2_E + _ROUND
    k = shifted - _ROUND
    r = (x - k * _LN2_HIGH) - k * _LN2_LOW
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
    p = p * r * r + r + 1.0
    return p * bits_float(((float_bits(shifted) + np.int64(1023)) & np.int64(0x7FF)) << np.int64(52))


@inlined
def log(x):
    """log(x) of a positive normal number, relative error below 4e-16."""
    bits = float_bits(x)
    mantissa = bits_float((bits & _MANTISSA) | _ONE_BITS)
    exponent = bits_float((bits >> np.int64(52)) | _TWO_52_BITS) - 4503599627371519.0
    high = mantissa > _SQRT2
    mantissa = mantissa * 0.5 if high else mantissa
    exponent = exponent + 1.0 if high else exponent
    s = (mantissa - 1.0) / (mantissa + 1.0)
    z = s * s
    p = 2.0 / 21.0
    p = p * z + 2.0 / 19.0
    p = p * z + 2.0 / 17.0
    p = p * z + 2.0 / 15.0
    p = p * z + 2.0 / 13.0
    p = p * z + 2.0 / 11.0
    p = p * z + 2.0 / 9.0
    p = p * z + 2.0 / 7.0
    p = p * z + 2.0 / 5.0
    p = p * z + 2.0 / 3.0
    return exponent * _LN2_HIGH + (2.0 * s + (s * z * p + exponent * _LN2_LOW))


@inlined
def sine_cosine_turns(u):
    """Sin and cos of 2 pi u for u between 0 and 1, error below 4e-16: Taylor series of half the angle."""
    x = 3.141592653589793 * (u - 0.5)
    z = x * x
    s = -1.0 / 51090942171709440000.0
    s = s * z + 1.0 / 121645100408832000.0
    s = s * z - 1.0 / 355687428096000.0
    s = s * z + 1.0 / 1307674368000.0
    s = s * z - 1.0 / 6227020800.0
    s = s * z + 1.0 / 39916800.0
    s = s * z - 1.0 / 362880.0
    s = s * z + 1.0 / 5040.0
    s = s * z - 1.0 / 120.0
    s = s * z + 1.0 / 6.0
    s = x - x * z * s
    c = 1.0 / 2432902008176640000.0
    c = c * z - 1.0 / 6402373705728000.0
    c = c * z + 1.0 / 20922789888000.0
    c = c * z - 1.0 / 87178291200.0
    c = c * z + 1.0 / 479001600.0
    c = c * z - 1.0 / 3628800.0
    c = c * z + 1.0 / 40320.0
    c = c * z - 1.0 / 720.0
    c = c * z + 1.0 / 24.0
    c = c * z - 0.5
    c = c * z + 1.0
    return -2.0 * s * c, 2.0 * s * s - 1.0


@kernel
def _exp_flat(x, out):
    for i in range(x.size):
        out[i] = exp(x[i])


@kernel
def _log_flat(x, out):
    for i in range(x.size):
        out[i] = log(x[i])


def exp_array(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return exp of every element; NaN stays NaN."""
    out = np.empty(x.shape)
    _exp_flat(x.flatten(), out.ravel())  # a copy: read-only input would be compiled for again
    return np.where(np.isnan(x), np.nan, out)


def log_array(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return log of every element, all positive."""
    out = np.empty(x.shape)
    _log_flat(x.flatten(), out.ravel())
    return out


@kernel
def put(values, out):
    """Copy values; the first assignment of an array to a slice takes more than a second to compile."""
    for i in range(out.size):
        out[i] = values[i]


@kernel
def log_normal_cdf(x):
    """Return the logarithm of the standard normal distribution function, at any x.

    Below -6 the asymptotic series of Mills' ratio, Abramowitz & Stegun 26.2.12 (formula from memory).
    """
    if x > -6.0:
        return np.log(0.5 * erfc(-x / sqrt(2.0)))
    z = 1.0 / (x * x)
    series = 1.0 - z * (1.0 - 3.0 * z * (1.0 - 5.0 * z * (1.0 - 7.0 * z * (1.0 - 9.0 * z))))
    return -0.5 * x * x - HALF_LN_2PI - np.log(-x) + np.log(series)
