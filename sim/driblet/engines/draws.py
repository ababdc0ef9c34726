"""Poisson and binomial numbers from a replicate's own stream.

Small means by inversion of the distribution function, large ones by transformed rejection with squeeze (PTRS: Hoermann,
Insurance: Mathematics and Economics 12:39, 1993; BTRS: Hoermann, J. Stat. Comput. Simul. 46:101, 1993). Logarithms and
exponentials are those of the machine's library: a leap's bits belong to an instruction set and a library, an exact event's
do not.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE, bare
from driblet.engines.random_stream import next_word, selection_uniform, waiting_uniform

INVERTED_BELOW = 10.0  # mean, where rejection becomes the faster


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def uniform(stream, r):  # type: ignore[no-untyped-def]
    """In (0, 1), from the next word of stream r; stream : uint64, (R, 4)."""
    return waiting_uniform(next_word(stream, r))


@bare
def normal(stream, r):  # type: ignore[no-untyped-def]
    """A standard normal number, two words (Box & Muller, Ann. Math. Stat. 29:610, 1958)."""
    radius = math.sqrt(-2.0 * math.log(waiting_uniform(next_word(stream, r))))
    return radius * math.cos(2.0 * math.pi * selection_uniform(next_word(stream, r)))


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def rounded(value, stream, r):  # type: ignore[no-untyped-def]
    """A whole number next to `value` whose mean it is; draws only where `value` is not whole."""
    whole = math.floor(value)
    part = value - whole
    if part > 0.0 and selection_uniform(next_word(stream, r)) < part:
        whole += 1.0
    return whole


@bare
def log_factorial(k):  # type: ignore[no-untyped-def]
    """ln k! for a whole k >= 0: the product for small k, else Stirling's series (error below 1e-12)."""
    if k < 10.0:
        product = 1.0
        for i in range(2, int(k) + 1):
            product *= i
        return math.log(product)
    inverse = 1.0 / k
    square = inverse * inverse
    series = inverse * (1.0 / 12.0 - square * (1.0 / 360.0 - square * (1.0 / 1260.0 - square / 1680.0)))
    return (k + 0.5) * math.log(k) - k + 0.9189385332046727 + series


@bare
def poisson(mean, stream, r):  # type: ignore[no-untyped-def]
    """A Poisson number as a float; 0 for a mean of 0."""
    if not mean > 0.0:
        return 0.0
    if mean < INVERTED_BELOW:
        left = selection_uniform(next_word(stream, r))
        share = math.exp(-mean)
        k = 0.0
        while left >= share and k < 200.0:
            left -= share
            k += 1.0
            share *= mean / k
        return k
    root = math.sqrt(mean)
    b = 0.931 + 2.53 * root
    a = -0.059 + 0.02483 * b
    inverse_alpha = 1.1239 + 1.1328 / (b - 3.4)
    edge = 0.9277 - 3.6224 / (b - 2.0)
    log_mean = math.log(mean)
    while True:
        u = uniform(stream, r) - 0.5
        v = uniform(stream, r)
        us = 0.5 - abs(u)
        k = math.floor((2.0 * a / us + b) * u + mean + 0.43)
        if us >= 0.07 and v <= edge:
            return k
        if k < 0.0 or (us < 0.013 and v > us):
            continue
        if math.log(v * inverse_alpha / (a / (us * us) + b)) <= k * log_mean - mean - log_factorial(k):
            return k


@bare
def binomial(n, p, stream, r):  # type: ignore[no-untyped-def]
    """A binomial number as a float; n : a whole float >= 0, 0 <= p <= 1."""
    if not n > 0.0 or not p > 0.0:
        return 0.0
    if p >= 1.0:
        return n
    if p > 0.5:
        return n - _binomial(n, 1.0 - p, stream, r)
    return _binomial(n, p, stream, r)


@bare
def _binomial(n, p, stream, r):  # type: ignore[no-untyped-def]
    """p <= 1/2."""
    odds = p / (1.0 - p)
    if n * p < INVERTED_BELOW:
        while True:
            left = selection_uniform(next_word(stream, r))
            share = math.exp(n * math.log1p(-p))
            k = 0.0
            while left >= share and k <= n:
                left -= share
                k += 1.0
                share *= odds * (n - k + 1.0) / k
            if k <= n:
                return k
    root = math.sqrt(n * p * (1.0 - p))
    b = 1.15 + 2.53 * root
    a = -0.0873 + 0.0248 * b + 0.01 * p
    c = n * p + 0.5
    edge = 0.92 - 4.2 / b
    alpha = (2.83 + 5.1 / b) * root
    log_odds = math.log(odds)
    mode = math.floor((n + 1.0) * p)
    top = log_factorial(mode) + log_factorial(n - mode)
    while True:
        u = uniform(stream, r) - 0.5
        v = uniform(stream, r)
        us = 0.5 - abs(u)
        k = math.floor((2.0 * a / us + b) * u + c)
        if k < 0.0 or k > n:
            continue
        if us >= 0.07 and v <= edge:
            return k
        v = math.log(v * alpha / (a / (us * us) + b))
        if v <= top - log_factorial(k) - log_factorial(n - k) + (k - mode) * log_odds:
            return k


@bare
def regular(mean, variance, stream, r):  # type: ignore[no-untyped-def]
    """A whole number >= 0 of the given mean and of a variance below it: binomial; Poisson where variance >= mean.

    Of the two whole numbers of trials about mean^2 / (mean - variance) one is drawn so that mean and variance are exact,
    where the variance is not below what whole numbers allow.
    """
    if not mean > 0.0:
        return 0.0
    less = mean - variance
    if less < 1e-3 * mean:
        return poisson(mean, stream, r)
    trials = mean * mean / less
    few = math.floor(trials)
    many = few + 1.0
    if few < mean:  # too few trials for this mean: fewest that will do
        few = math.ceil(mean)
        many = few
    chosen = few
    if many > few:
        # share q of `many` with q / many + (1 - q) / few = 1 / trials
        share = (1.0 / few - 1.0 / trials) / (1.0 / few - 1.0 / many)
        if selection_uniform(next_word(stream, r)) < share:
            chosen = many
    return binomial(chosen, min(1.0, mean / chosen), stream, r)


@bare
def fill(kind, first, second, stream, out):  # type: ignore[no-untyped-def]
    """Fill `out` from stream 0: kind 0 Poisson(first), 1 binomial(first, second), 2 regular(first, second), 3 normal."""
    for i in range(out.size):
        if kind == 0:
            out[i] = poisson(first, stream, np.int64(0))
        elif kind == 1:
            out[i] = binomial(first, second, stream, np.int64(0))
        elif kind == 2:
            out[i] = regular(first, second, stream, np.int64(0))
        else:
            out[i] = normal(stream, np.int64(0))
