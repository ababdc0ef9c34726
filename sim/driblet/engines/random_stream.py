"""The random stream of one replicate, as compiled functions: xoshiro256++ and our own logarithm.

xoshiro256++ 1.0 (Blackman & Vigna, "Scrambled linear pseudorandom number generators", ACM Trans. Math. Softw. 47:36,
2021). The logarithm uses only + - * / on doubles, so that every IEEE machine gives the same bits; the libm of one
system need not agree with that of another.
"""

from __future__ import annotations

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.core import config
from numba.extending import intrinsic

_LN2 = 0.6931471805599453
_SQRT_HALF = 0x3FE6A09E667F3BCD  # the bits of 1/sqrt2
_TWO_POW_MINUS_52 = 1.0 / 4503599627370496.0
_ROT23, _ROT41, _ROT45, _ROT19, _SHIFT17, _DROP12 = (np.uint64(k) for k in (23, 41, 45, 19, 17, 12))


@intrinsic
def _bits_of_double(typingctx, x):  # type: ignore[no-untyped-def]
    def codegen(context, builder, signature, args):  # type: ignore[no-untyped-def]
        return builder.bitcast(args[0], ir.IntType(64))

    return types.int64(types.float64), codegen


@intrinsic
def _double_of_bits(typingctx, x):  # type: ignore[no-untyped-def]
    def codegen(context, builder, signature, args):  # type: ignore[no-untyped-def]
        return builder.bitcast(args[0], ir.DoubleType())

    return types.float64(types.int64), codegen


if config.DISABLE_JIT:  # type: ignore[attr-defined]  # an intrinsic exists in compiled code only

    def _bits_of_double(x):  # type: ignore[no-untyped-def, misc]
        return np.float64(x).view(np.int64)

    def _double_of_bits(x):  # type: ignore[no-untyped-def, misc]
        return np.int64(x).view(np.float64)


@njit(inline="always")
def next_word(state, lane):  # type: ignore[no-untyped-def]
    """Next 64 random bits of stream `lane`; state : uint64, shape=(lanes, 4), changed in place."""
    s0, s1, s2, s3 = state[lane, 0], state[lane, 1], state[lane, 2], state[lane, 3]
    y = s0 + s3
    word = ((y << _ROT23) | (y >> _ROT41)) + s0
    shifted = s1 << _SHIFT17
    s2 ^= s0
    s3 ^= s1
    s1 ^= s2
    s0 ^= s3
    s2 ^= shifted
    s3 = (s3 << _ROT45) | (s3 >> _ROT19)
    state[lane, 0], state[lane, 1], state[lane, 2], state[lane, 3] = s0, s1, s2, s3
    return word


@njit(inline="always")
def selection_uniform(word):  # type: ignore[no-untyped-def]
    """A double in [0, 1): at most 1 - 2^-52, so that its product with a total stays below the total."""
    return np.float64(word >> _DROP12) * _TWO_POW_MINUS_52


@njit(inline="always")
def waiting_uniform(word):  # type: ignore[no-untyped-def]
    """A double in (0, 1), never 0 and never 1."""
    return (np.float64(word >> _DROP12) + 0.5) * _TWO_POW_MINUS_52


@njit(inline="always")
def minus_log(u):  # type: ignore[no-untyped-def]
    """-ln u for a normal double u > 0; relative error below 4e-15, for u close to 1 as well.

    u = 2^e m with m in [1/sqrt2, sqrt2); ln m = 2 artanh z with z = (m - 1)/(m + 1), |z| < 0.172.
    """
    bits = _bits_of_double(u)
    exponent = (bits - _SQRT_HALF) >> 52
    m = _double_of_bits(bits - (exponent << 52))
    z = (m - 1.0) / (m + 1.0)
    w = z * z
    series = 1.0 / 17.0
    series = series * w + 1.0 / 15.0
    series = series * w + 1.0 / 13.0
    series = series * w + 1.0 / 11.0
    series = series * w + 1.0 / 9.0
    series = series * w + 1.0 / 7.0
    series = series * w + 1.0 / 5.0
    series = series * w + 1.0 / 3.0
    series = series * w + 1.0
    return -(np.float64(exponent) * _LN2 + 2.0 * z * series)
