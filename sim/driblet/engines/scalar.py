"""The direct method (Gillespie, J. Phys. Chem. 81:2340, 1977) for one replicate after the other, at any size of network.

A firing recomputes the propensities that depend on it and rebuilds the sums that these make stale (sums.py).
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE, inner
from driblet.engines.contract import (
    BUFFER_FULL,
    COUNT_OVERFLOW,
    NOTHING_CAN_FIRE,
    OVERFLOW_GUARD,
    RUNNING,
    STOP_CONDITION,
    TIME_REACHED,
)
from driblet.engines.factors import factor_value, renew_factors
from driblet.engines.judging import all_decided, cross_edges, leaf_change, part, take_value, turn
from driblet.engines.random_stream import minus_log, next_word, selection_uniform, waiting_uniform
from driblet.engines.recording import (
    close_windows,
    cut_windows,
    hold_samples,
    next_mark,
    occupy,
    sample_until,
    settle_histograms,
)
from driblet.engines.requirement_arrays import END_LEAF, FIRST_LEAF
from driblet.engines.sums import FAN, STRIDE, select, within
from driblet.engines.vector_hints import seldom_called

_ONE = np.uint64(1)
_FAN = np.uint64(FAN)
_STRIDE = np.uint64(STRIDE)


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def propensity(network, constant, counts, channel):  # type: ignore[no-untyped-def]
    """constant times the falling factorials of the channel's reactants; counts : (N + 1,)."""
    a, b, c = network.reactant[channel, 0], network.reactant[channel, 1], network.reactant[channel, 2]
    value = constant * counts[np.uint64(a)]
    value *= counts[np.uint64(b)] - network.offset[channel, 1]
    return value * (counts[np.uint64(c)] - network.offset[channel, 2])


@njit(nogil=True, cache=CACHE, error_model="numpy")
def sum_all(network, rows, constants, counts, value, cumulative):  # type: ignore[no-untyped-def]
    """Every propensity of mass action and every sum; value, cumulative : (P,)."""
    seldom_called()
    for row in range(rows.end):
        value[row] = 0.0
        cumulative[row] = 0.0
    for j in range(rows.leaf.size):
        value[rows.leaf[j]] = propensity(network, constants[j], counts, j)
    sum_up(rows, value, cumulative)


@inner
def sum_up(rows, value, cumulative):  # type: ignore[no-untyped-def]
    """Every sum of the propensities that stand in the leaves."""
    seldom_called()
    for j in range(rows.leaf.size):
        row = rows.leaf[j]
        cumulative[row] = cumulative[row - 1] + value[row]
    for k in range(rows.upper.size):
        row = rows.upper[k]
        value[row] = cumulative[rows.source[k]]
        cumulative[row] = cumulative[row - 1] + value[row]


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def refresh_sums(rows, refresh, channel, value, cumulative):  # type: ignore[no-untyped-def]
    """Rebuild the sums that a firing of `channel` made stale."""
    for k in range(np.uint64(refresh.start[channel]), np.uint64(refresh.start[channel + _ONE])):
        first = np.uint64(refresh.row[k])
        group = first // _STRIDE
        total = cumulative[first - _ONE]
        for row in range(first, np.uint64(refresh.group_end[group])):
            total += value[row]
            cumulative[row] = total
        value[np.uint64(refresh.group_parent[group])] = total
    first = np.uint64(refresh.top[channel])
    total = cumulative[first - _ONE]
    for row in range(first, np.uint64(rows.end)):
        total += value[row]
        cumulative[row] = total


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def find_channel(rows, cumulative, target):  # type: ignore[no-untyped-def]
    """The channel whose share of the total propensity holds `target`."""
    zero_row = np.uint64(rows.top)
    member = select(cumulative[rows.top + 1 :], target)
    index = member
    for level in range(rows.base.size):
        before = cumulative[zero_row + member]
        zero_row = np.uint64(rows.base[level]) + index * _STRIDE
        target = within(target, before, cumulative[zero_row + _FAN])
        member = select(cumulative[zero_row + _ONE :], target)
        index = index * _FAN + member
    return index


@inner
def integrate_row(factor, offset, dummy, counts, running, span):  # type: ignore[no-untyped-def]
    """recording.integrate for a row of counts, without the factors that are 1."""
    for q in range(np.uint64(factor.shape[0])):
        value = counts[np.uint64(factor[q, 0])] - offset[q, 0]
        if factor[q, 1] != dummy or offset[q, 1] != 0.0:
            value *= counts[np.uint64(factor[q, 1])] - offset[q, 1]
        if factor[q, 2] != dummy or offset[q, 2] != 0.0:
            value *= counts[np.uint64(factor[q, 2])] - offset[q, 2]
        running[q] += value * span


@inner
def settle_row(settle, first, last, factor, offset, pace_row, counts, running, settled, pace, until):  # type: ignore[no-untyped-def]
    """Integrate the monomials that a firing is about to change, settle[first:last], up to the time of the firing."""
    for k in range(first, last):
        q = np.uint64(settle[k])
        value = counts[np.uint64(factor[q, 0])] - offset[q, 0]
        value *= counts[np.uint64(factor[q, 1])] - offset[q, 1]
        value *= counts[np.uint64(factor[q, 2])] - offset[q, 2]
        if pace_row[q] >= 0:
            value = pace[np.uint64(pace_row[q])]
        running[q] += value * (until - settled[q])
        settled[q] = until


@njit(nogil=True, cache=CACHE, error_model="numpy")
def advance_scalar(  # type: ignore[no-untyped-def]
    network, rows, refresh, factor_row, nodes, rates, state, samples, budget, recorders, judging
):
    """See contract.py. rates : float64, (R, M + 2 T), 1/s per product of falling factorials; judging : requirements, or
    None, for which their part of the kernel is not compiled.
    """
    averages, occupancy, log = recorders.averages, recorders.occupancy, recorders.log
    replicates = rates.shape[0]
    species = state.counts.shape[1] - 1
    grid_size = samples.time.size
    averaging, settling = averages.edge.size > 0, averages.settle_start.size > 0
    settle_start, settle, pace_row = averages.settle_start, averages.settle, averages.pace_row
    following, logging = occupancy.species.size > 0, log.time.shape[1] > 0
    seconds, standing_since, span = occupancy.seconds, occupancy.since, occupancy.span
    slot, bin_width = occupancy.slot, occupancy.width
    value = np.empty(rows.end)
    cumulative = np.empty(rows.end)
    left = budget
    every = 1 if budget > 0 else 2  # no literal: views of no particular layout, see recording.py
    columns, firing_columns = state.counts.T[::every], state.firings.T[::every]
    running, settled = averages.running.T[::every], averages.settled.T[::every]
    if judging is not None:
        moments, moment_leaves, halting = judging.moments, judging.moment_leaves, judging.stops
        judging_averages = judging.table.shape[0] > moments
        plan, spans, leaves, program, record = (
            judging.table,
            judging.span,
            judging.leaf,
            judging.program,
            judging.record,
        )
        term_start, factor_start, factor_species = judging.term_start, judging.factor_start, judging.factor_species
        factor_offset, coefficient = judging.factor_offset, judging.coefficient
        leaf_truth, leaf_value, leaf_sum = judging.leaf_truth, judging.leaf_value, judging.leaf_sum
        integrated_to, judged_edge, halt = judging.integrated_to, judging.next_edge, judging.halt
        sums, affected_start, affected = leaf_sum.T[::every], judging.affected_start, judging.affected
    time, edge, next_edge = samples.time, averages.edge, averages.next_edge
    factor, offset, dummy = averages.factor, averages.offset, species
    leaf, scratch = rows.leaf, np.ones(nodes + 1)
    below_at = np.uint64(leaf.size)
    above_at = below_at + np.uint64(network.node_parent.size)
    start, parent, node, less = network.factor_start, network.node_parent, network.node_species, network.node_offset
    reactant, shift, depend = network.reactant, network.offset, network.depend_channel
    paces = np.zeros((replicates, rows.leaf.size if nodes > 0 else 0))
    pace_columns = paces.T[::every]
    for r in range(replicates):
        if state.reason[r] != RUNNING:
            continue
        if left <= 0:
            break
        counts, constants, firings = state.counts[r], rates[r], state.firings[r]
        running_row, settled_row, pace = averages.running[r], averages.settled[r], paces[r]
        sum_all(network, rows, constants, counts, value, cumulative)
        if factor_row is not None:
            renew_factors(
                factor_row, leaf, start, parent, node, less, reactant, shift, constants, counts, scratch, value, pace
            )
            sum_up(rows, value, cumulative)
        clock = state.clock[r]
        sample = state.next_sample[r]
        mark = next_mark(time, edge, next_edge, r, sample)
        if judging is not None:
            mark = min(mark, judged_edge[r])
        while left > 0:
            if logging and log.used[r] == log.time.shape[1]:
                state.reason[r] = BUFFER_FULL
                break
            total = cumulative[rows.end - 1]
            wait = minus_log(waiting_uniform(next_word(state.stream, r))) / total
            target = selection_uniform(next_word(state.stream, r)) * total
            later = clock + wait  # inf when nothing can fire, so that the grid below ends the replicate
            since = clock
            stop = np.inf
            if judging is not None:
                if judging_averages and not later <= judged_edge[r]:
                    until = min(later, time[grid_size - 1])
                    cross_edges(
                        moments, moment_leaves, plan, spans, leaves, program, leaf_value, leaf_truth, record, integrated_to,
                        judged_edge, sums, r, r, until,
                    )  # fmt: skip
                if halting:
                    if halt[r] == np.inf and not later <= mark:
                        here = max(mark, integrated_to[r])
                        if here < time[grid_size - 1] and all_decided(moments, plan, spans, record, r, here):
                            halt[r] = here
                    stop = halt[r]
                    later = min(later, stop)
            if not later <= mark:
                if averaging:
                    since = close_windows(
                        averages, r, since, later, columns, firing_columns, running, settled, pace_columns, r
                    )
                sample = sample_until(
                    time, samples.counts, samples.firings, r, sample, later, columns, firing_columns, r
                )
                mark = next_mark(time, edge, next_edge, r, sample)
                if judging is not None:
                    mark = min(mark, judged_edge[r])
            if sample == grid_size or stop < np.inf:
                clock = time[grid_size - 1] if sample == grid_size else stop
                state.reason[r] = TIME_REACHED if total > 0.0 else NOTHING_CAN_FIRE
                settle_histograms(occupancy, r, columns, r, clock)
                if judging is not None:
                    for k in range(moment_leaves, leaves.shape[0]):
                        sums[np.uint64(k), r] += part(leaf_value[r, k], clock - integrated_to[r])
                    integrated_to[r] = max(integrated_to[r], clock)
                if sample < grid_size:
                    state.reason[r] = STOP_CONDITION
                    if averaging:
                        cut_windows(
                            averages, r, since, clock, columns, firing_columns, running, settled, pace_columns, r
                        )
                    sample = hold_samples(time, samples.counts, samples.firings, r, sample, columns, firing_columns, r)
                break
            if averaging and not settling:
                integrate_row(factor, offset, dummy, counts, running_row, later - since)
                if factor_row is not None:
                    for k in range(averages.paced.shape[0]):
                        running_row[averages.paced[k, 0]] += pace[averages.paced[k, 1]] * (later - since)
            if judging is not None and judging_averages:
                for k in range(np.uint64(moment_leaves), np.uint64(leaves.shape[0])):
                    sums[k, r] += part(leaf_value[r, k], later - integrated_to[r])
                integrated_to[r] = later
            clock = later
            j = find_channel(rows, cumulative, target)
            if settling:
                settle_row(
                    settle, np.uint64(settle_start[j]), np.uint64(settle_start[j + _ONE]), factor, offset, pace_row, counts,
                    running_row, settled_row, pace, clock,
                )  # fmt: skip
            for k in range(np.uint64(network.change_start[j]), np.uint64(network.change_start[j + _ONE])):
                i = np.uint64(network.change_species[k])
                if following and slot[i] >= 0:
                    occupy(seconds, standing_since, span, bin_width, r, slot[i], counts[i], clock)
                counts[i] += network.change_amount[k]
            for k in range(np.uint64(network.depend_start[j]), np.uint64(network.depend_start[j + _ONE])):
                d = np.uint64(network.depend_channel[k])
                value[np.uint64(rows.leaf[d])] = propensity(network, constants[d], counts, d)
            if factor_row is not None:
                for k in range(np.uint64(network.depend_start[j]), np.uint64(network.depend_start[j + _ONE])):
                    d = np.uint64(depend[k])
                    f = factor_row[d]
                    if f >= 0:
                        own = counts[np.uint64(reactant[d, 0])] * (counts[np.uint64(reactant[d, 1])] - shift[d, 1])
                        own *= counts[np.uint64(reactant[d, 2])] - shift[d, 2]
                        if own > 0.0:
                            own *= factor_value(
                                np.uint64(start[d, 0]), np.uint64(start[d, 1]), np.uint64(start[d, 2]), parent, node, less,
                                constants, below_at, above_at, counts, scratch,
                            )  # fmt: skip
                        pace[f] = own
                        value[np.uint64(leaf[d])] = constants[d] * own
            refresh_sums(rows, refresh, j, value, cumulative)
            firings[j] += 1
            if judging is not None:
                news = False
                for a in range(np.uint64(affected_start[j]), np.uint64(affected_start[j + _ONE])):
                    q = affected[a]
                    first, last = np.uint64(plan[q, FIRST_LEAF]), np.uint64(plan[q, END_LEAF])
                    if q >= moments:
                        for k in range(first, last):
                            leaf_value[r, k] = take_value(
                                leaves, term_start, factor_start, factor_species, factor_offset, coefficient, r, np.int64(k),
                                columns, r,
                            )  # fmt: skip
                        continue
                    changed = 0
                    for k in range(first, last):
                        changed += leaf_change(
                            leaves, term_start, factor_start, factor_species, factor_offset, coefficient, leaf_truth, r, k,
                            columns, r,
                        )  # fmt: skip
                    if changed > 0:
                        news |= turn(plan, spans, program, leaf_truth, record, r, q, clock)
                if halting and news and all_decided(moments, plan, spans, record, r, clock):
                    halt[r] = clock
            if logging:
                log.time[r, log.used[r]] = clock
                log.channel[r, log.used[r]] = j
                log.used[r] += 1
            left -= 1
        state.clock[r] = clock
        state.next_sample[r] = sample
        for i in range(species):
            if counts[i] > OVERFLOW_GUARD:
                state.reason[r] = COUNT_OVERFLOW
    return budget - left


def needs_compiler() -> bool:
    """Whether a first call of advance_scalar is likely to wait for the compiler."""
    signatures = getattr(advance_scalar, "signatures", ["plain Python"])
    if signatures or not CACHE:
        return not signatures
    return not any(Path(advance_scalar.stats.cache_path or ".").glob("scalar.advance_scalar-*.nbi"))
