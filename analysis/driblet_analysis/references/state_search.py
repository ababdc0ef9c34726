"""Compiled searches through the states of a network; state_space.py says what for, and loads this where it pays."""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE

_MIX = np.uint64(0x9E3779B97F4A7C15)
_HALF, _ONE = np.uint64(32), np.uint64(1)


@njit(nogil=True, cache=CACHE)
def _hash(row):  # type: ignore[no-untyped-def]
    value = np.uint64(0)
    for i in range(row.size):
        value = (value ^ np.uint64(row[i])) * _MIX
        value ^= value >> _HALF
    return value


@njit(nogil=True, cache=CACHE)
def _slot(table, states, row):  # type: ignore[no-untyped-def]
    """Where in the hash table (open addressing, size a power of two) `row` is or belongs."""
    mask = np.uint64(table.size) - _ONE
    slot = _hash(row) & mask
    while table[slot] >= 0:
        known = states[table[slot]]
        same = True
        for i in range(row.size):
            if known[i] != row[i]:
                same = False
                break
        if same:
            break
        slot = (slot + _ONE) & mask
    return slot


@njit(nogil=True, cache=CACHE)
def _table(states, count, size):  # type: ignore[no-untyped-def]
    table = np.full(size, -1, dtype=np.int32)
    for k in range(count):
        table[_slot(table, states, states[k])] = k
    return table


@njit(nogil=True, cache=CACHE)
def _enabled(state, need, channel):  # type: ignore[no-untyped-def]
    enabled = True
    for i in range(state.size):
        enabled = enabled and state[i] >= need[channel, i]
    return enabled


@njit(nogil=True, cache=CACHE)
def _copy(row, into):  # type: ignore[no-untyped-def]
    for i in range(row.size):  # an assignment of whole rows takes numba seconds more to compile
        into[i] = row[i]


@njit(nogil=True, cache=CACHE)
def _log_weight(row, ln_mean):  # type: ignore[no-untyped-def]
    value = 0.0
    for i in range(row.size):
        value += row[i] * ln_mean[i] - math.lgamma(row[i] + 1.0)
    return value


@njit(nogil=True, cache=CACHE)
def explore(start, need, change, caps, ln_mean, depth, slack, limit):  # type: ignore[no-untyped-def]
    """Breadth first. States below exp(-depth) of the start's weight are kept only for `slack` steps in a row."""
    channels, species = need.shape
    states = np.empty((64, species), dtype=np.int64)
    below = np.zeros(64, dtype=np.int64)
    _copy(start, states[0])
    table = _table(states, 1, 256)
    threshold = _log_weight(start, ln_mean) - depth
    row = np.empty(species, dtype=np.int64)
    count, k = 1, 0
    while k < count:
        for j in range(channels):
            if not _enabled(states[k], need, j):
                continue
            inside = True
            for i in range(species):
                row[i] = states[k, i] + change[j, i]
                if row[i] > caps[i]:
                    inside = False
            if not inside:
                continue
            slot = _slot(table, states, row)
            if table[slot] >= 0:
                continue
            steps = 0
            if depth < np.inf and _log_weight(row, ln_mean) < threshold:
                steps = below[k] + 1
                if steps > slack:
                    continue
            if count == limit:
                return states, 0
            if count == states.shape[0]:
                more, more_below = np.empty((2 * count, species), dtype=np.int64), np.zeros(2 * count, dtype=np.int64)
                for known in range(count):
                    _copy(states[known], more[known])
                    more_below[known] = below[known]
                states, below = more, more_below
                table = _table(states, count, 8 * count)
                slot = _slot(table, states, row)
            _copy(row, states[count])
            below[count] = steps
            table[slot] = count
            count += 1
        k += 1
    return states, count


@njit(nogil=True, cache=CACHE)
def _rise(state, need, change, ln_mean, channel, strides):  # type: ignore[no-untyped-def]
    """By how much the last of `strides` firings of a channel in a row raises ln weight; -inf when it cannot fire."""
    value = 0.0
    for i in range(state.size):
        d = change[channel, i]
        n = state[i] + (strides - 1) * d
        if n < need[channel, i]:
            return -np.inf
        value += d * ln_mean[i]
        for step in range(abs(d)):
            value += math.log(float(n - step)) if d < 0 else -math.log(n + 1.0 + step)
    return value


@njit(nogil=True, cache=CACHE)
def climb(start, need, change, ln_mean):  # type: ignore[no-untyped-def]
    """Fire whichever channel raises the weight most, as often as it does, until none does.

    Along repeated firings ln weight is concave: if the last one raises it, so did all before.
    """
    state = start.copy()
    for _ in range(100_000):
        best, gain = -1, 1e-12
        for j in range(need.shape[0]):
            rise = _rise(state, need, change, ln_mean, j, 1)
            if rise > gain:
                best, gain = j, rise
        if best < 0:
            break
        strides = 1
        while strides < 1 << 40 and _rise(state, need, change, ln_mean, best, 2 * strides) > 1e-12:
            strides *= 2
        for i in range(state.size):
            state[i] += strides * change[best, i]
    return state


@njit(nogil=True, cache=CACHE)
def find_neighbours(states, need, change):  # type: ignore[no-untyped-def]
    count, species = states.shape
    channels = need.shape[0]
    size = 4
    while size < 4 * count:
        size *= 2
    table = _table(states, count, size)
    out = np.empty((count, channels), dtype=np.int64)
    row = np.empty(species, dtype=np.int64)
    for k in range(count):
        for j in range(channels):
            if not _enabled(states[k], need, j):
                out[k, j] = -1
                continue
            for i in range(species):
                row[i] = states[k, i] + change[j, i]
            found = table[_slot(table, states, row)]
            out[k, j] = found if found >= 0 else -2
    return out
