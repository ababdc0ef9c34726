"""One step of a pack of lanes: draws, propensities and their sums, clocks, channels, firings. See lanes.py.

Each is inlined into the one kernel, whose loops over lanes they are.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE
from driblet.engines.random_stream import minus_log, output, selection_uniform, step, waiting_uniform
from driblet.engines.sums import FAN, JUST_BELOW_ONE, STRIDE

U = np.uint64
_ONE, _FAN, _STRIDE, _SHIFT = U(1), U(FAN), U(STRIDE), U(3)


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def draw(lanes, width):  # type: ignore[no-untyped-def]
    """Two words of every stream: for the waiting time and for the channel."""
    stream, uniform, target = lanes.stream, lanes.uniform, lanes.target
    for lane in range(width):
        s0, s1, s2, s3 = stream[0, lane], stream[1, lane], stream[2, lane], stream[3, lane]
        uniform[lane] = waiting_uniform(output(s0, s3))
        s0, s1, s2, s3 = step(s0, s1, s2, s3)
        target[lane] = selection_uniform(output(s0, s3))
        s0, s1, s2, s3 = step(s0, s1, s2, s3)
        stream[0, lane], stream[1, lane], stream[2, lane], stream[3, lane] = s0, s1, s2, s3


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def sum_propensities(network, table, rows, lanes, shared, width):  # type: ignore[no-untyped-def]
    """Every propensity and every sum of every lane."""
    sums, counts, rate = lanes.sums, lanes.counts, lanes.rate
    for j in range(table.factors.size):
        row = U(rows.leaf[j])
        before = row - _ONE
        a, b, c = U(network.reactant[j, 0]), U(network.reactant[j, 1]), U(network.reactant[j, 2])
        o, p = network.offset[j, 1], network.offset[j, 2]
        constant = lanes.common_rate[j]
        if table.factors[j] == 1:
            if shared:
                for lane in range(width):
                    sums[row, lane] = sums[before, lane] + constant * counts[a, lane]
            else:
                for lane in range(width):
                    sums[row, lane] = sums[before, lane] + rate[j, lane] * counts[a, lane]
        elif table.factors[j] == 2:
            if shared:
                for lane in range(width):
                    sums[row, lane] = sums[before, lane] + constant * counts[a, lane] * (counts[b, lane] - o)
            else:
                for lane in range(width):
                    sums[row, lane] = sums[before, lane] + rate[j, lane] * counts[a, lane] * (counts[b, lane] - o)
        else:
            for lane in range(width):
                two = rate[j, lane] * counts[a, lane] * (counts[b, lane] - o)
                sums[row, lane] = sums[before, lane] + two * (counts[c, lane] - p)
    for k in range(rows.upper.size):
        row, source = U(rows.upper[k]), U(rows.source[k])
        before = row - _ONE
        for lane in range(width):
            sums[row, lane] = sums[before, lane] + sums[source, lane]


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def advance_clocks(rows, lanes, width):  # type: ignore[no-untyped-def]
    """Move every clock to its next event and aim at a channel; returns how many clocks passed their mark."""
    sums, clock, mark, uniform, target = lanes.sums, lanes.clock, lanes.mark, lanes.uniform, lanes.target
    last = U(rows.end - 1)
    passed = 0
    for lane in range(width):
        total = sums[last, lane]
        later = clock[lane] + minus_log(uniform[lane]) / total
        clock[lane] = later
        passed += 0 if later <= mark[lane] else 1
        target[lane] *= total
    return passed


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def find_channels(rows, lanes, flat_sums, stride, width):  # type: ignore[no-untyped-def]
    """The channel of every lane: at each level, count the sums that do not exceed the target."""
    sums, target, chosen = lanes.sums, lanes.target, lanes.chosen
    for lane in range(width):
        chosen[lane] = 0.0
    row, last = U(rows.top + 1), U(rows.end - 1)
    while row + U(8) <= last:  # eight rows a pass spare seven of eight loads and stores of the count
        for lane in range(width):
            t = target[lane]
            one = (1.0 if sums[row, lane] <= t else 0.0) + (1.0 if sums[row + U(1), lane] <= t else 0.0)
            two = (1.0 if sums[row + U(2), lane] <= t else 0.0) + (1.0 if sums[row + U(3), lane] <= t else 0.0)
            three = (1.0 if sums[row + U(4), lane] <= t else 0.0) + (1.0 if sums[row + U(5), lane] <= t else 0.0)
            four = (1.0 if sums[row + U(6), lane] <= t else 0.0) + (1.0 if sums[row + U(7), lane] <= t else 0.0)
            chosen[lane] += (one + two) + (three + four)
        row += U(8)
    while row < last:
        for lane in range(width):
            chosen[lane] += 1.0 if sums[row, lane] <= target[lane] else 0.0
        row += _ONE
    above = U(rows.top)
    groups = U(0)  # zero rows between the members of a level: none at the top
    for level in range(rows.base.size):
        base = U(rows.base[level])
        for lane in range(width):
            index = U(np.int64(chosen[lane]))
            before = above + index + (index >> _SHIFT) * groups
            zero_row = base + index * _STRIDE
            inside = target[lane] - flat_sums[before * stride + U(lane)]
            most = flat_sums[(zero_row + _FAN) * stride + U(lane)] * JUST_BELOW_ONE
            inside = inside if inside < most else most
            target[lane] = inside
            member = 0.0
            for k in range(1, FAN):
                member += 1.0 if flat_sums[(zero_row + U(k)) * stride + U(lane)] <= inside else 0.0
            chosen[lane] = chosen[lane] * np.float64(FAN) + member
        above = base
        groups = _ONE


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def fire(table, lanes, flat_counts, flat_firings, flat_place, flat_amount, stride, width):  # type: ignore[no-untyped-def]
    """Change the counts of every lane by its channel."""
    changes = U(table.changes)
    chosen = lanes.chosen
    for lane in range(width):
        j = U(np.int64(chosen[lane]))
        first = j * changes
        for k in range(first, first + changes):
            place = flat_place[k] + U(lane)
            flat_counts[place] += flat_amount[k]
        flat_firings[j * stride + U(lane)] += 1
