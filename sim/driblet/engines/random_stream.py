"""The random stream of one replicate, as compiled functions: xoshiro256++ and our own logarithm.

xoshiro256++ 1.0 (Blackman & Vigna, "Scrambled linear pseudorandom number generators", ACM Trans. Math. Softw. 47:36,
2021). The logarithm uses only + - * / on doubles, so that every IEEE machine gives the same bits; the libm of one
system need not agree with that of another. Doubles are made from bits and taken apart as bits, never converted from
64-bit integers, which only the newest processors do on several lanes at once.
"""

from __future__ import annotations

import numpy as np
from numba import njit

_LN2 = 0.6931471805599453
_MANTISSA = np.uint64(0x000FFFFFFFFFFFFF)
_ONE = np.uint64(0x3FF0000000000000)  # the bits of 1.0
_ROOT_HALF = np.uint64(0x3FE6A09E667F3BCD)  # the bits of sqrt(1/2)
_ONE_ABOVE_ROOT_HALF = _ONE - _ROOT_HALF
_TWO_POW_52 = np.uint64(0x4330000000000000)  # the bits of 2^52, whose last place is 1
_EXPONENT_BIAS = 4503599627370496.0 + 1023.0
_TWO_POW_MINUS_53 = 1.1102230246251565e-16
_ROT23, _ROT41, _ROT45, _ROT19, _SHIFT17, _DROP12, _SHIFT52 = (np.uint64(k) for k in (23, 41, 45, 19, 17, 12, 52))


@njit(inline="always")
def output(s0, s3):  # type: ignore[no-untyped-def]
    """The 64 random bits that a state gives; uint64 in, uint64 out."""
    y = s0 + s3
    return ((y << _ROT23) | (y >> _ROT41)) + s0


@njit(inline="always")
def step(s0, s1, s2, s3):  # type: ignore[no-untyped-def]
    """The state after this one, as four uint64."""
    shifted = s1 << _SHIFT17
    s2 = s2 ^ s0
    s3 = s3 ^ s1
    s1 = s1 ^ s2
    s0 = s0 ^ s3
    s2 = s2 ^ shifted
    s3 = (s3 << _ROT45) | (s3 >> _ROT19)
    return s0, s1, s2, s3


@njit(inline="always")
def next_word(state, lane):  # type: ignore[no-untyped-def]
    """Next 64 random bits of stream `lane`; state : uint64, shape=(lanes, 4), changed in place."""
    s0, s1, s2, s3 = state[lane, 0], state[lane, 1], state[lane, 2], state[lane, 3]
    word = output(s0, s3)
    s0, s1, s2, s3 = step(s0, s1, s2, s3)
    state[lane, 0], state[lane, 1], state[lane, 2], state[lane, 3] = s0, s1, s2, s3
    return word


@njit(inline="always")
def selection_uniform(word):  # type: ignore[no-untyped-def]
    """k 2^-52 in [0, 1), k the upper 52 bits: at most 1 - 2^-52, so its product with a total stays below the total."""
    return np.uint64((word >> _DROP12) | _ONE).view(np.float64) - 1.0


@njit(inline="always")
def waiting_uniform(word):  # type: ignore[no-untyped-def]
    """(k + 1/2) 2^-52 in (0, 1), k the upper 52 bits: never 0 and never 1."""
    return (np.uint64((word >> _DROP12) | _ONE).view(np.float64) - 1.0) + _TWO_POW_MINUS_53


@njit(inline="always")
def minus_log(u):  # type: ignore[no-untyped-def]
    """-ln u for a normal double 0 < u < 1; relative error below 4e-15, also where u is just under 1.

    u = 2^e m with m in [sqrt(1/2), sqrt 2); ln m = 2 artanh z with z = (m - 1)/(m + 1), |z| < 0.172, as a power series.
    """
    bits = np.uint64(np.float64(u).view(np.uint64)) + _ONE_ABOVE_ROOT_HALF
    exponent = np.uint64((bits >> _SHIFT52) | _TWO_POW_52).view(np.float64) - _EXPONENT_BIAS
    m = np.uint64((bits & _MANTISSA) + _ROOT_HALF).view(np.float64)
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
    return -(exponent * _LN2 + 2.0 * z * series)
