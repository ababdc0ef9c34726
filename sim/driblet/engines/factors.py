"""Rational factors of propensities: lumped and saturable rate laws, evaluated only for channels that have one.

Node by node in order: q = q_parent * max(n - offset, 0), numerator and denominator += coefficient * q. The factor is
numerator / denominator, 1 / denominator where the numerator is 1, and 0 where the denominator is not above zero. A propensity is
constant * pace, pace = a * (b - o) * (c - p) * factor. Lanes do the same operations, so that bits agree. Functions take arrays
and no tuples, whose many reference counts would cost more than the work.

`pace` is (channels with a factor, column), one replicate a column as in recording.py: the integrals take it from there.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from driblet.engines.compile_cache import CACHE, inner
from driblet.engines.contract import NetworkArrays
from driblet.engines.vector_hints import separate_arrays_wide_vectors

U = np.uint64
_ONE = U(1)


def factored_channels(network: NetworkArrays) -> NDArray[np.int64]:
    """The channels that have a factor, in the order of their rows in `pace`."""
    return np.flatnonzero(network.factor_start[:, 2] > network.factor_start[:, 0]).astype(np.int64)


def factor_rows(network: NetworkArrays) -> NDArray[np.int64]:
    """For each channel its row in `pace`, -1 for channels without a factor."""
    rows = np.full(len(network.reactant), -1, dtype=np.int64)
    channels = factored_channels(network)
    rows[channels] = np.arange(len(channels))
    return rows


def most_nodes(network: NetworkArrays) -> int:
    """Nodes of the largest factor."""
    return int((network.factor_start[:, 2] - network.factor_start[:, 0]).max(initial=0))


@njit(nogil=True, cache=CACHE, error_model="numpy")
def factor_value(first, top, end, parent, species, offset, constants, below_at, above_at, counts, scratch):  # type: ignore[no-untyped-def]
    """The factor of the channel whose nodes lie from `first` to `end`, those of its numerator before `top`, one replicate.

    parent, species, offset : node_* of the network; constants : a row of `rates`, where coefficients of denominators begin at
    `below_at` and of numerators at `above_at`; counts : (N + 1,); scratch : (most nodes + 1,), the first 1.
    """
    above, below = 0.0, 0.0
    for t in range(first, end):
        x = counts[U(species[t])] - offset[t]
        q = scratch[U(parent[t])] * (x if x > 0.0 else 0.0)
        scratch[t - first + _ONE] = q
        below += constants[below_at + t] * q
        if t < top:
            above += constants[above_at + t] * q
    if not below > 0.0:
        return 0.0
    return above / below if top > first else 1.0 / below


@inner
def renew_factors(  # type: ignore[no-untyped-def]
    rows, leaf, start, parent, species, offset, reactant, shift, constants, counts, scratch, value, pace
):
    """Propensities of all channels that have a factor, one replicate.

    rows : as factor_rows; leaf : where in `value` a propensity stands; start : factor_start; reactant, shift : of the
    network; pace : (rows,).
    """
    below_at = U(leaf.size)
    above_at = below_at + U(parent.size)
    for j in range(leaf.size):
        if rows[j] < 0:
            continue
        own = counts[reactant[j, 0]] * (counts[reactant[j, 1]] - shift[j, 1])
        own *= counts[reactant[j, 2]] - shift[j, 2]
        if own > 0.0:
            first, top, end = U(start[j, 0]), U(start[j, 1]), U(start[j, 2])
            own *= factor_value(
                first, top, end, parent, species, offset, constants, below_at, above_at, counts, scratch
            )
        pace[rows[j]] = own
        value[leaf[j]] = constants[j] * own


@inner
def sum_with_factors(  # type: ignore[no-untyped-def]
    leaf, upper, source, rows, start, parent, species, offset, reactant, shift, rate, counts, sums, pace, scratch, width
):
    """Every propensity and every sum of every lane; arguments as above, arrays (thing, lane). scratch : its last two rows
    take the denominator and the numerator."""
    separate_arrays_wide_vectors()
    below_at = U(leaf.size)
    above_at = below_at + U(parent.size)
    below, above = U(scratch.shape[0] - 2), U(scratch.shape[0] - 1)
    for lane in range(width):
        scratch[U(0), lane] = 1.0
    for j in range(leaf.size):
        row = U(leaf[j])
        before = row - _ONE
        a, b, c = U(reactant[j, 0]), U(reactant[j, 1]), U(reactant[j, 2])
        o, p = shift[j, 1], shift[j, 2]
        if rows[j] < 0:
            for lane in range(width):
                two = rate[j, lane] * counts[a, lane] * (counts[b, lane] - o)
                sums[row, lane] = sums[before, lane] + two * (counts[c, lane] - p)
            continue
        first, top = U(start[j, 0]), U(start[j, 1])
        for lane in range(width):
            scratch[below, lane] = 0.0
            scratch[above, lane] = 0.0 if top > first else 1.0
        for t in range(first, U(start[j, 2])):
            i, q, own, constant = U(species[t]), U(parent[t]), t - first + _ONE, below_at + t
            less = offset[t]
            for lane in range(width):
                x = counts[i, lane] - less
                value = scratch[q, lane] * (x if x > 0.0 else 0.0)
                scratch[own, lane] = value
                scratch[below, lane] += rate[constant, lane] * value
            if t < top:
                constant = above_at + t
                for lane in range(width):
                    scratch[above, lane] += rate[constant, lane] * scratch[own, lane]
        f = U(rows[j])
        for lane in range(width):
            own_lane = counts[a, lane] * (counts[b, lane] - o) * (counts[c, lane] - p)
            ratio = scratch[above, lane] / scratch[below, lane]
            own_lane *= ratio if scratch[below, lane] > 0.0 else 0.0
            pace[f, lane] = own_lane
            sums[row, lane] = sums[before, lane] + rate[j, lane] * own_lane
    for k in range(upper.size):
        row, total = U(upper[k]), U(source[k])
        before = row - _ONE
        for lane in range(width):
            sums[row, lane] = sums[before, lane] + sums[total, lane]


@inner
def integrate_pace(paced, pace, running, span, width):  # type: ignore[no-untyped-def]
    """Add a time span in every lane to the integrals of propensities with a factor; paced : of contract.Averages."""
    separate_arrays_wide_vectors()
    for k in range(paced.shape[0]):
        q, f = U(paced[k, 0]), U(paced[k, 1])
        for lane in range(width):
            running[q, lane] += pace[f, lane] * span[lane]
