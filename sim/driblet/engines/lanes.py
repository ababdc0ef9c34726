"""The direct method for many replicates in lockstep: one replicate a lane, and every inner loop runs over lanes.

A generic kernel of this form keeps up with the vector units of the processor, where a kernel for one replicate waits for
each result in turn. A step fires one event in every lane. Quantities lie as (thing, lane), so that a loop over lanes reads
and writes memory in order. When a replicate ends, its lane takes the next one; when there is none, the last lane moves in
and the pack narrows, so that no lane idles. A replicate's bits are those of scalar.py.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE
from driblet.engines.contract import NOTHING_CAN_FIRE, RUNNING, STOP_CONDITION, TIME_REACHED
from driblet.engines.factors import integrate_pace, sum_with_factors
from driblet.engines.judging import all_decided
from driblet.engines.lane_judging import (
    CHANGED,
    cross_lane_edges,
    enter_judgement,
    integrate_judged,
    judge_lanes,
    leave_judgement,
    look_closer,
)
from driblet.engines.lane_memory import empty, enter, leave, move, next_running
from driblet.engines.lane_recording import follow, integrate_lanes, settle_lanes
from driblet.engines.lane_steps import advance_clocks, draw, find_channels, fire, sum_propensities
from driblet.engines.recording import (
    close_windows,
    cut_windows,
    hold_samples,
    next_mark,
    sample_until,
    settle_histograms,
)
from driblet.engines.vector_hints import separate_arrays_wide_vectors

VECTOR = 8
U = np.uint64


@njit(nogil=True, cache=CACHE, error_model="numpy")
def advance_lanes(  # type: ignore[no-untyped-def]
    network, table, rows, factor_row, lanes, shared, fewest, rates, state, samples, budget, recorders, judging
):
    """See contract.py. shared : whether all rates are `lanes.common_rate`; fewest : returns when fewer replicates than
    this are left, since they are better off one after the other. Event logs are not kept here.
    """
    separate_arrays_wide_vectors()
    averages, occupancy = recorders.averages, recorders.occupancy
    averaging, settling = averages.edge.size > 0, averages.settle_start.size > 0
    following = occupancy.species.size > 0
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
        judged, code = lanes.judged, lanes.code
    clock, since, mark, chosen = lanes.clock, lanes.since, lanes.mark, lanes.chosen
    lane_row, lane_sample, sums = lanes.row, lanes.sample, lanes.sums
    every = 1 if budget > 0 else 2  # no literal: views of no particular layout, see recording.py
    counts, firings = lanes.counts[::every], lanes.firings[::every]
    running, settled = lanes.running[::every], lanes.settled[::every]
    if judging is not None:
        leaf_sums = lanes.leaf_sum[::every]
    pace = lanes.pace[::every]
    sampled_counts, sampled_firings = samples.counts, samples.firings
    per_width, span, standing_since, seconds = 1.0 / occupancy.width, occupancy.span, occupancy.since, occupancy.seconds
    flat_slot = occupancy.slot[table.species.reshape(table.species.size)]
    time, edge, next_edge = samples.time, averages.edge, averages.next_edge
    factor, offset = averages.factor, averages.offset
    degree, pace_row = lanes.degree, averages.pace_row
    lane_counts, lane_running, spent = lanes.counts, lanes.running, lanes.uniform
    stride = U(lanes.counts.shape[1])
    flat_sums = lanes.sums.reshape(lanes.sums.size)
    flat_counts = lanes.counts.reshape(lanes.counts.size)
    flat_firings = lanes.firings.reshape(lanes.firings.size)
    flat_place = table.place.reshape(table.place.size)
    flat_amount = table.amount.reshape(table.amount.size)
    nothing = np.float64(state.firings.shape[1])
    replicates = state.reason.size
    active = np.int64(0)
    upcoming = next_running(state.reason, active)
    while upcoming < replicates and active < lanes.row.size:
        first = next_mark(time, edge, next_edge, upcoming, state.next_sample[upcoming])
        enter(lanes, active, upcoming, rates, state, averages.running, averages.settled, first)
        if judging is not None:
            enter_judgement(
                coefficient, leaf_truth, leaf_value, leaf_sum, moment_leaves, integrated_to, judged_edge, halt, lanes,
                active, upcoming,
            )  # fmt: skip
        active += 1
        upcoming = next_running(state.reason, upcoming + 1)
    for lane in range(active, lanes.row.size):
        empty(lanes, lane)
    fired = 0
    while active >= fewest and fired < budget:
        width = -(-active // VECTOR) * VECTOR
        draw(lanes, width)
        if factor_row is not None:
            sum_with_factors(
                rows.leaf, rows.upper, rows.source, factor_row, network.factor_start, network.node_parent,
                network.node_species, network.node_offset, network.reactant, network.offset, lanes.rate, lanes.counts,
                lanes.sums, lanes.pace, lanes.scratch, width,
            )  # fmt: skip
        else:
            sum_propensities(network, table, rows, lanes, shared, width)
        passed = advance_clocks(rows, lanes, width)
        find_channels(rows, lanes, flat_sums, stride, width)
        for lane in range(active, width):
            chosen[lane] = nothing
        fired += active
        if passed > 0:
            lane = np.int64(0)  # not a literal, for which callees would be compiled once more
            while True:
                while lane < active and clock[lane] <= mark[lane]:
                    lane += 1
                if lane >= active:
                    break
                later = clock[lane]
                r = lane_row[lane]
                reason = np.int64(RUNNING)
                if judging is not None:
                    if judging_averages and not later <= judged_edge[r]:
                        cross_lane_edges(
                            moments, moment_leaves, plan, spans, leaves, program, leaf_value, leaf_truth, record,
                            integrated_to, judged_edge, leaf_sums, lanes, lane, r, min(later, time[time.size - 1]),
                        )  # fmt: skip
                    if halting:
                        if halt[r] == np.inf and not later <= mark[lane]:
                            here = max(mark[lane], lanes.integrated_to[lane])
                            if here < time[time.size - 1] and all_decided(moments, plan, spans, record, r, here):
                                halt[r] = here
                        if halt[r] < np.inf and halt[r] <= later:
                            later = halt[r]
                            reason = np.int64(STOP_CONDITION)
                if averaging:
                    since[lane] = close_windows(
                        averages, r, since[lane], later, counts, firings, running, settled, pace, lane
                    )
                sample = sample_until(
                    time, sampled_counts, sampled_firings, r, lane_sample[lane], later, counts, firings, lane
                )
                lane_sample[lane] = sample
                mark[lane] = next_mark(time, edge, next_edge, r, sample)
                if judging is not None:
                    mark[lane] = min(mark[lane], judged_edge[r])
                if sample == time.size:
                    later = time[sample - 1]
                    reason = np.int64(TIME_REACHED if sums[rows.end - 1, lane] > 0.0 else NOTHING_CAN_FIRE)
                if reason == RUNNING:
                    lane += 1
                    continue
                clock[lane] = later
                if following:
                    settle_histograms(occupancy, r, counts, lane, later)
                if reason == STOP_CONDITION:
                    if averaging:
                        cut_windows(averages, r, since[lane], later, counts, firings, running, settled, pace, lane)
                    lane_sample[lane] = hold_samples(
                        time, sampled_counts, sampled_firings, r, sample, counts, firings, lane
                    )
                fired -= 1
                if judging is not None:
                    leave_judgement(leaf_value, leaf_sum, integrated_to, moment_leaves, lanes, lane, r)
                leave(lanes, lane, reason, state, averages.running, averages.settled)
                if upcoming < replicates:
                    sample = state.next_sample[upcoming]
                    first = next_mark(time, edge, next_edge, upcoming, sample)
                    enter(lanes, lane, upcoming, rates, state, averages.running, averages.settled, first)
                    if judging is not None:
                        enter_judgement(
                            coefficient, leaf_truth, leaf_value, leaf_sum, moment_leaves, integrated_to, judged_edge, halt,
                            lanes, lane, upcoming,
                        )  # fmt: skip
                    upcoming = next_running(state.reason, upcoming + 1)
                    lane += 1
                else:
                    active -= 1
                    if lane < active:
                        sums[rows.end - 1, lane] = sums[rows.end - 1, active]
                        move(lanes, active, lane)
                    else:
                        empty(lanes, lane)
        if following:
            follow(
                chosen, clock, lane_row, flat_counts, flat_slot, flat_place, U(table.changes),
                per_width, span, standing_since, seconds, active,
            )  # fmt: skip
        if settling:
            settle_lanes(
                averages.settle_start, averages.settle, factor, offset, pace_row, chosen, clock, lane_counts, lane_running,
                lanes.settled, lanes.pace, active,
            )  # fmt: skip
        elif averaging:
            integrate_lanes(factor, offset, degree, lane_counts, lane_running, clock, since, spent, width)
            if factor_row is not None:
                integrate_pace(averages.paced, lanes.pace, lane_running, spent, width)
            for lane in range(width):
                since[lane] = clock[lane]
        if judging is not None and judging_averages:
            integrate_judged(judged, lanes.leaf_sum, clock, lanes.integrated_to, moment_leaves, width)
        fire(table, lanes, flat_counts, flat_firings, flat_place, flat_amount, stride, width)
        if judging is not None:
            news = judge_lanes(code, factor_offset, lanes.counts, judged, moment_leaves, leaves.shape[0], active, width)
            if news > 0:
                for lane in range(active):
                    if judged[CHANGED, lane] > 0.0:
                        look_closer(
                            moments, halting, plan, spans, leaves, program, term_start, factor_start, factor_species,
                            factor_offset, coefficient, leaf_truth, record, halt, counts, lanes, lane, lane_row[lane],
                        )  # fmt: skip
    for lane in range(active):
        if judging is not None:
            leave_judgement(leaf_value, leaf_sum, integrated_to, moment_leaves, lanes, lane, lane_row[lane])
        leave(lanes, lane, np.int64(RUNNING), state, averages.running, averages.settled)
    return fired
