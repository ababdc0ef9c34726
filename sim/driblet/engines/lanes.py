"""The direct method for many replicates in lockstep: one replicate a lane, and every inner loop runs over lanes.

A generic kernel of this form keeps up with the vector units of the processor, where a kernel for one replicate waits for
each result in turn. A step fires one event in every lane. Quantities lie as (thing, lane), so that a loop over lanes reads
and writes memory in order. When a replicate ends, its lane takes the next one; when there is none, the last lane moves in
and the pack narrows, so that no lane idles. A replicate's bits are those of scalar.py.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from driblet.engines.compile_cache import CACHE
from driblet.engines.contract import (
    COUNT_OVERFLOW,
    NOTHING_CAN_FIRE,
    OVERFLOW_GUARD,
    RUNNING,
    STOP_CONDITION,
    TIME_REACHED,
    EnsembleState,
    NetworkArrays,
    Recorders,
)
from driblet.engines.factors import factored_channels, integrate_pace, most_nodes, sum_with_factors
from driblet.engines.judging import all_decided, no_requirements
from driblet.engines.lane_judging import (
    CHANGED,
    SCRATCH,
    cross_lane_edges,
    enter_judgement,
    integrate_judged,
    judge_lanes,
    lane_code,
    leave_judgement,
    look_closer,
)
from driblet.engines.random_stream import minus_log, output, selection_uniform, step, waiting_uniform
from driblet.engines.recording import (
    close_windows,
    cut_windows,
    hold_samples,
    look_at_conditions,
    next_mark,
    sample_until,
    settle_histograms,
)
from driblet.engines.sums import FAN, JUST_BELOW_ONE, STRIDE, SumRows
from driblet.engines.vector_hints import separate_arrays_wide_vectors

LANES = 64  # fills eight 512-bit vectors; fewer pay too much for each loop's start, more leave the first cache
VECTOR = 8
_CACHE_LINE = 64
U = np.uint64
_ONE, _FAN, _STRIDE, _SHIFT = U(1), U(FAN), U(STRIDE), U(3)


class LaneTable(NamedTuple):
    """What a channel multiplies and changes, laid out for lanes.

    factors : int64, (M,), how many of its three factors are needed: 1, 2 or 3
    changes : int, K, changed species a channel at most; channels with fewer change a row that is never read
    species : int64, (M + 1, K); place : uint64, (M + 1, K), the same times the lanes; amount : float64, (M + 1, K)
    Row M changes nothing: it is what a lane fires that must not fire.
    """

    factors: NDArray[np.int64]
    changes: int
    species: NDArray[np.int64]
    place: NDArray[np.uint64]
    amount: NDArray[np.float64]


class Lanes(NamedTuple):
    """The working memory of W lanes; (.., W) arrays. See contract.py for what each holds of its replicate.

    counts : N + 2 rows, the dummy of count 1 and one that is never read; common_rate : (M + 2 T,), used when all lanes
    share them; pace, scratch : see factors.py; chosen : the channel, as a double; since : time up to which everything is
    recorded; mark : the next time with something to record; pending : (C, W), 1 where a condition is not met yet; row : the
    replicate.
    """

    counts: NDArray[np.float64]
    rate: NDArray[np.float64]
    common_rate: NDArray[np.float64]
    sums: NDArray[np.float64]
    firings: NDArray[np.int64]
    stream: NDArray[np.uint64]
    pace: NDArray[np.float64]
    scratch: NDArray[np.float64]
    running: NDArray[np.float64]
    weight: NDArray[np.float64]
    pending: NDArray[np.float64]
    judged: NDArray[np.float64]
    leaf_sum: NDArray[np.float64]
    integrated_to: NDArray[np.float64]
    code: NDArray[np.int64]
    clock: NDArray[np.float64]
    since: NDArray[np.float64]
    mark: NDArray[np.float64]
    uniform: NDArray[np.float64]
    target: NDArray[np.float64]
    chosen: NDArray[np.float64]
    row: NDArray[np.int64]
    sample: NDArray[np.int64]


def lane_table(network: NetworkArrays, species: int, lanes: int = LANES) -> LaneTable:
    """Lay out a network of `species` free species."""
    channels = len(network.reactant)
    needed = np.ones(channels, dtype=np.int64)
    for slot in (1, 2):
        needed[network.reactant[:, slot] != species] = slot + 1
    number = np.diff(network.change_start)
    changes = int(number.max(initial=1))
    index = np.full((channels + 1, changes), species + 1, dtype=np.int64)
    amount = np.zeros((channels + 1, changes))
    filled = np.arange(changes) < np.append(number, 0)[:, None]
    index[filled], amount[filled] = network.change_species, network.change_amount
    return LaneTable(needed, changes, index, (index * lanes).astype(np.uint64), amount)


def new_lanes(
    network: NetworkArrays, state: EnsembleState, rows: SumRows, recorders: Recorders, lanes: int = LANES
) -> Lanes:
    """Working memory; aligned, so that no vector straddles two cache lines."""

    def aligned(kind: type, *shape: int) -> NDArray[Any]:
        size = 8 * int(np.prod(shape))
        memory = np.zeros(size + _CACHE_LINE, dtype=np.uint8)
        start = -memory.ctypes.data % _CACHE_LINE
        return memory[start : start + size].view(kind).reshape(shape)

    channels = state.firings.shape[1]
    judging = recorders.requirements or no_requirements(len(state.reason), channels)
    leaves, terms = len(judging.leaf), judging.coefficient.shape[1]
    constants = channels + 2 * len(network.node_parent)
    return Lanes(
        counts=aligned(np.float64, state.counts.shape[1] + 1, lanes),
        rate=aligned(np.float64, constants, lanes),
        common_rate=aligned(np.float64, constants),
        sums=aligned(np.float64, rows.end, lanes),
        firings=aligned(np.int64, channels + 1, lanes),
        stream=aligned(np.uint64, 4, lanes),
        pace=aligned(np.float64, len(factored_channels(network)), lanes),
        scratch=aligned(np.float64, most_nodes(network) + 3, lanes),
        running=aligned(np.float64, len(recorders.averages.factor), lanes),
        weight=aligned(np.float64, len(recorders.conditions.factor), lanes),
        pending=aligned(np.float64, len(recorders.conditions.stops), lanes),
        judged=aligned(np.float64, SCRATCH + terms + leaves, lanes),
        leaf_sum=aligned(np.float64, leaves, lanes),
        integrated_to=aligned(np.float64, lanes),
        code=lane_code(judging.leaf, judging.term_start, judging.factor_start, judging.factor_species),
        clock=aligned(np.float64, lanes),
        since=aligned(np.float64, lanes),
        mark=aligned(np.float64, lanes),
        uniform=aligned(np.float64, lanes),
        target=aligned(np.float64, lanes),
        chosen=aligned(np.float64, lanes),
        row=aligned(np.int64, lanes),
        sample=aligned(np.int64, lanes),
    )


@njit(nogil=True, cache=CACHE, error_model="numpy")
def enter(lanes, lane, r, rates, state, running, weight, first_met, mark):  # type: ignore[no-untyped-def]
    """Put replicate r into a lane; it fires nothing in the step that is under way."""
    counts = state.counts
    for i in range(counts.shape[1]):
        lanes.counts[i, lane] = counts[r, i]
    lanes.counts[counts.shape[1], lane] = 0.0
    for j in range(rates.shape[1]):
        lanes.rate[j, lane] = rates[r, j]
    for j in range(state.firings.shape[1]):
        lanes.firings[j, lane] = state.firings[r, j]
    for k in range(4):
        lanes.stream[k, lane] = state.stream[r, k]
    for q in range(lanes.running.shape[0]):
        lanes.running[q, lane] = running[r, q]
    for t in range(lanes.weight.shape[0]):
        lanes.weight[t, lane] = weight[r, t]
    for c in range(lanes.pending.shape[0]):
        lanes.pending[c, lane] = 1.0 if first_met[r, c] == np.inf else 0.0
    lanes.clock[lane] = state.clock[r]
    lanes.since[lane] = state.clock[r]
    lanes.row[lane] = r
    lanes.sample[lane] = state.next_sample[r]
    lanes.mark[lane] = mark
    lanes.chosen[lane] = np.float64(state.firings.shape[1])


@njit(nogil=True, cache=CACHE, error_model="numpy")
def leave(lanes, lane, reason, state, running):  # type: ignore[no-untyped-def]
    """Put a lane's replicate back into its row."""
    r = lanes.row[lane]
    for i in range(state.counts.shape[1] - 1):
        state.counts[r, i] = lanes.counts[i, lane]
        if lanes.counts[i, lane] > OVERFLOW_GUARD:
            reason = COUNT_OVERFLOW
    for j in range(state.firings.shape[1]):
        state.firings[r, j] = lanes.firings[j, lane]
    for k in range(4):
        state.stream[r, k] = lanes.stream[k, lane]
    for q in range(lanes.running.shape[0]):
        running[r, q] = lanes.running[q, lane]
    state.clock[r] = lanes.clock[lane]
    state.next_sample[r] = lanes.sample[lane]
    state.reason[r] = reason


@njit(nogil=True, cache=CACHE, error_model="numpy")
def move(lanes, source, lane):  # type: ignore[no-untyped-def]
    """Move a lane to another place in the middle of a step, and leave its old place empty: nothing can fire there."""
    for matrix in (
        lanes.counts,
        lanes.rate,
        lanes.pace,
        lanes.running,
        lanes.weight,
        lanes.pending,
        lanes.judged,
        lanes.leaf_sum,
    ):
        for i in range(matrix.shape[0]):
            matrix[i, lane] = matrix[i, source]
            matrix[i, source] = 0.0
    for j in range(lanes.firings.shape[0]):
        lanes.firings[j, lane] = lanes.firings[j, source]
    for k in range(4):
        lanes.stream[k, lane] = lanes.stream[k, source]
    for vector in (lanes.clock, lanes.since, lanes.mark, lanes.chosen, lanes.integrated_to):
        vector[lane] = vector[source]
    lanes.row[lane] = lanes.row[source]
    lanes.sample[lane] = lanes.sample[source]
    empty(lanes, source)


@njit(nogil=True, cache=CACHE, error_model="numpy")
def empty(lanes, lane):  # type: ignore[no-untyped-def]
    """Leave a lane without molecules."""
    for i in range(lanes.counts.shape[0]):
        lanes.counts[i, lane] = 0.0
    for j in range(lanes.rate.shape[0]):
        lanes.rate[j, lane] = 0.0
    lanes.mark[lane] = np.inf
    lanes.clock[lane] = 0.0
    lanes.since[lane] = 0.0
    lanes.chosen[lane] = np.float64(lanes.firings.shape[0] - 1)


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
def conditions_met(conditions, lanes, width):  # type: ignore[no-untyped-def]
    """How many pending conditions the standing counts meet. Uses `uniform`, which is spent, for the sums of terms."""
    counts, value, clock, since = lanes.counts, lanes.uniform, lanes.clock, lanes.since
    met = 0
    for k in range(conditions.stops.size):
        begin, end = conditions.span[k, 0], conditions.span[k, 1]
        for lane in range(width):
            value[lane] = 0.0
        for t in range(conditions.term_start[k], conditions.term_start[k + 1]):
            a, b, c = U(conditions.factor[t, 0]), U(conditions.factor[t, 1]), U(conditions.factor[t, 2])
            m, o, p = conditions.offset[t, 0], conditions.offset[t, 1], conditions.offset[t, 2]
            for lane in range(width):
                term = (counts[a, lane] - m) * (counts[b, lane] - o) * (counts[c, lane] - p)
                value[lane] += lanes.weight[t, lane] * term
        for lane in range(width):
            standing = lanes.pending[k, lane] if clock[lane] > begin else 0.0
            standing = standing if since[lane] <= end else 0.0
            met += 1 if value[lane] * standing > 0.0 else 0
    return met


@njit(nogil=True, cache=CACHE, error_model="numpy")
def degrees(factor, offset, dummy):  # type: ignore[no-untyped-def]
    """How many factors of each monomial are more than 1; 3 where an offset asks for the full form."""
    degree = np.empty(factor.shape[0], dtype=np.int64)
    for q in range(factor.shape[0]):
        degree[q] = 1 if factor[q, 1] == dummy else (2 if factor[q, 2] == dummy else 3)
        if offset[q, 0] != 0.0 or (degree[q] < 2 and offset[q, 1] != 0.0) or (degree[q] < 3 and offset[q, 2] != 0.0):
            degree[q] = 3
    return degree


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def integrate_lanes(factor, offset, degree, counts, running, clock, since, span, width):  # type: ignore[no-untyped-def]
    """Add the time since the last record to every running integral; `span` takes that time.

    Four monomials of degree 1 in a row share a pass, which then costs little more than reading and writing them.
    """
    for lane in range(width):
        span[lane] = clock[lane] - since[lane]
    q, end = U(0), U(degree.size)
    while q < end:
        a, b, c = U(factor[q, 0]), U(factor[q, 1]), U(factor[q, 2])
        m, o, p = offset[q, 0], offset[q, 1], offset[q, 2]
        if q + U(4) <= end and degree[q] + degree[q + U(1)] + degree[q + U(2)] + degree[q + U(3)] == 4:
            q1, q2, q3 = q + U(1), q + U(2), q + U(3)
            a1, a2, a3 = U(factor[q1, 0]), U(factor[q2, 0]), U(factor[q3, 0])
            for lane in range(width):
                time = span[lane]
                running[q, lane] += counts[a, lane] * time
                running[q1, lane] += counts[a1, lane] * time
                running[q2, lane] += counts[a2, lane] * time
                running[q3, lane] += counts[a3, lane] * time
            q += U(3)
        elif degree[q] == 1:
            for lane in range(width):
                running[q, lane] += counts[a, lane] * span[lane]
        elif degree[q] == 2:
            for lane in range(width):
                running[q, lane] += counts[a, lane] * (counts[b, lane] - o) * span[lane]
        else:
            for lane in range(width):
                value = (counts[a, lane] - m) * (counts[b, lane] - o) * (counts[c, lane] - p)
                running[q, lane] += value * span[lane]
        q += U(1)


@njit(nogil=True, cache=CACHE, error_model="numpy")
def follow(chosen, clock, row, flat_counts, flat_slot, flat_place, changes, per_width, span, since, seconds, active):  # type: ignore[no-untyped-def]
    """Credit the species that are about to change with the time they stood; see recording.occupy.

    flat_slot : int64, by channel and change, the row of the changed species in `seconds` or -1; per_width : 1 / width.
    Half a count more than there is keeps the quotient off the whole numbers.
    """
    separate_arrays_wide_vectors()
    begin, end, last = span[0], span[1], seconds.shape[2] - 1
    for lane in range(active):
        j = U(np.int64(chosen[lane]))
        r, until = U(row[lane]), clock[lane]
        for k in range(j * changes, j * changes + changes):
            if flat_slot[k] >= 0:
                s = U(flat_slot[k])
                low, high = max(since[r, s], begin), min(until, end)
                if high > low:
                    b = min(np.int64((flat_counts[flat_place[k] + U(lane)] + 0.5) * per_width[s]), last)
                    seconds[r, s, U(b)] += high - low
                since[r, s] = until


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


@njit(nogil=True, cache=CACHE, error_model="numpy")
def next_running(reason, after):  # type: ignore[no-untyped-def]
    """The first replicate from `after` on that is to be advanced, or the number of replicates."""
    r = after
    while r < reason.size and reason[r] != RUNNING:
        r += 1
    return r


@njit(nogil=True, cache=CACHE, error_model="numpy")
def advance_lanes(  # type: ignore[no-untyped-def]
    network, table, rows, factor_row, lanes, shared, fewest, rates, state, samples, budget, recorders, judging
):
    """See contract.py. shared : whether all rates are `lanes.common_rate`; fewest : returns when fewer replicates than
    this are left, since they are better off one after the other. Event logs are not kept here.
    """
    separate_arrays_wide_vectors()
    averages, occupancy, conditions = recorders.averages, recorders.occupancy, recorders.conditions
    averaging, watching = averages.edge.size > 0, conditions.stops.size > 0
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
    timed = averaging or watching
    clock, since, mark, chosen = lanes.clock, lanes.since, lanes.mark, lanes.chosen
    lane_row, lane_sample, pending, sums = lanes.row, lanes.sample, lanes.pending, lanes.sums
    every = 1 if budget > 0 else 2  # no literal: views of no particular layout, see recording.py
    counts, firings, running = lanes.counts[::every], lanes.firings[::every], lanes.running[::every]
    if judging is not None:
        leaf_sums = lanes.leaf_sum[::every]
    pace = lanes.pace[::every]
    sampled_counts, sampled_firings = samples.counts, samples.firings
    per_width, span, standing_since, seconds = 1.0 / occupancy.width, occupancy.span, occupancy.since, occupancy.seconds
    flat_slot = occupancy.slot[table.species.reshape(table.species.size)]
    time, edge, next_edge = samples.time, averages.edge, averages.next_edge
    factor, offset = averages.factor, averages.offset
    degree = degrees(factor, offset, lanes.counts.shape[0] - 2)
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
        enter(lanes, active, upcoming, rates, state, averages.running, conditions.weight, conditions.first_met, first)
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
        met = conditions_met(conditions, lanes, width) if watching else 0
        if passed + met > 0:
            lane = np.int64(0)  # not a literal, for which callees would be compiled once more
            while True:
                while met == 0 and lane < active and clock[lane] <= mark[lane]:
                    lane += 1
                if lane >= active:
                    break
                later = clock[lane]
                r = lane_row[lane]
                reason = np.int64(RUNNING)
                if watching:
                    stop = look_at_conditions(conditions, r, since[lane], later, counts, lane)
                    for c in range(pending.shape[0]):
                        pending[c, lane] = 1.0 if conditions.first_met[r, c] == np.inf else 0.0
                    if stop < np.inf:
                        later = stop
                        reason = np.int64(STOP_CONDITION)
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
                    since[lane] = close_windows(averages, r, since[lane], later, counts, firings, running, pace, lane)
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
                        cut_windows(averages, r, since[lane], later, counts, firings, running, pace, lane)
                    lane_sample[lane] = hold_samples(
                        time, sampled_counts, sampled_firings, r, sample, counts, firings, lane
                    )
                fired -= 1
                if judging is not None:
                    leave_judgement(leaf_value, leaf_sum, integrated_to, moment_leaves, lanes, lane, r)
                leave(lanes, lane, reason, state, averages.running)
                if upcoming < replicates:
                    sample = state.next_sample[upcoming]
                    first = next_mark(time, edge, next_edge, upcoming, sample)
                    weight, first_met = conditions.weight, conditions.first_met
                    enter(lanes, lane, upcoming, rates, state, averages.running, weight, first_met, first)
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
        if timed:
            if averaging:
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
        leave(lanes, lane, np.int64(RUNNING), state, averages.running)
    return fired
