"""Tau-leaping on net extents of reversible pairs, one replicate after the other; exact events where leaping does not pay.

A leap draws the firings of every pair, those of lumped enzymes with the covariance of their turnovers, and moves by

    k = drawn + tau/2 (net rate at the end - net rate at the start)

(the trapezoidal rule: Cao & Petzold, Proc. FOSBE, 2005; Rathinam, Petzold, Cao & Gillespie, J. Chem. Phys. 119:12784, 2003,
for the implicit one), solved for the end by Newton's method and rounded so that means are kept. Channels about to exhaust a
reactant fire one at a time (Cao, Gillespie & Petzold, J. Chem. Phys. 123:054104, 2005). A leap that would leave a count below
zero is thrown away and halved. Steps never cross a point of the grid, an edge of a window or of a requirement's average, so that
what is recorded there is a state, and the net firings at any moment are exact; integrals take each leap's end states in equal
parts, as do gross firings; what fires alone does so at the end.
"""

from __future__ import annotations

import numpy as np

from driblet.engines.compile_cache import bare
from driblet.engines.contract import (
    COUNT_OVERFLOW,
    NOTHING_CAN_FIRE,
    OVERFLOW_GUARD,
    RUNNING,
    STOP_CONDITION,
    TIME_REACHED,
)
from driblet.engines.draws import rounded
from driblet.engines.judging import all_decided, judge_all
from driblet.engines.leap_arrays import (
    CRITICAL_EVENTS,
    EVENTS,
    IMPLICIT,
    LEAPS,
    LONGEST,
    REJECTED,
    STIFFEST,
    UNCORRECTED,
)
from driblet.engines.leap_draws import SOME, draw_independent, draw_turnovers, one_way
from driblet.engines.leap_steps import (
    EXPLICIT_BELOW,
    FEW,
    MOST_SOLVED,
    all_propensities,
    all_slopes,
    correct,
    integrate_row,
    jacobian,
    leap_length,
    mark_critical,
    one_pace,
)
from driblet.engines.random_stream import minus_log, next_word, selection_uniform, waiting_uniform
from driblet.engines.recording import occupy, settle_histograms

U = np.uint64
BURST = 100  # exact events before leaping is thought of again
PAYS = 10.0  # events in a leap from which it is worth its cost
LEAP_COST = 40  # of the budget, in events


@bare
def pass_marks(samples, averages, r, sample, clock, counts, firings, running):  # type: ignore[no-untyped-def]
    """Record the grid points and window edges up to `clock` with the present state; returns the next grid point.

    counts, firings, running : rows of replicate r.
    """
    while sample < samples.time.size and samples.time[sample] <= clock:
        for i in range(samples.counts.shape[2]):
            samples.counts[r, sample, i] = np.int64(counts[i])
        for j in range(samples.firings.shape[2]):
            samples.firings[r, sample, j] = firings[j]
        sample += 1
    edge = averages.next_edge[r]
    while edge < averages.edge.size and averages.edge[edge] <= clock:
        for q in range(running.size):
            if edge > 0:
                averages.integral[r, edge - 1, q] = running[q]
            running[q] = 0.0
        for j in range(averages.firings.shape[2]):
            averages.firings[r, edge, j] = firings[j]
        edge += 1
    averages.next_edge[r] = edge
    return sample


@bare
def hold(samples, averages, r, sample, counts, firings, running):  # type: ignore[no-untyped-def]
    """A replicate stops early: its state stands on the rest of the grid, its window ends."""
    while sample < samples.time.size:
        for i in range(samples.counts.shape[2]):
            samples.counts[r, sample, i] = np.int64(counts[i])
        for j in range(samples.firings.shape[2]):
            samples.firings[r, sample, j] = firings[j]
        sample += 1
    edge = averages.next_edge[r]
    if 0 < edge < averages.edge.size:
        for q in range(running.size):
            averages.integral[r, edge - 1, q] = running[q]
    for e in range(edge, averages.edge.size):
        for j in range(averages.firings.shape[2]):
            averages.firings[r, e, j] = firings[j]
    return sample


@bare
def advance_leaps(  # type: ignore[no-untyped-def]
    network, pairs, turnover, touch_start, touch_pair, touch_amount, factor_row, nodes, rates, noise_at, tolerance, stiffness,
    state, samples, budget, recorders, judging, work, room,
):  # fmt: skip
    """See contract.py and leap_arrays.py. room : scratch.

    touch_start, touch_pair, touch_amount : CSR over species, which pairs change it, and by how much; noise_at : where the
    coefficients of `turnover` begin in a row of `rates`; tolerance, stiffness : the greatest share a gross propensity is
    expected to change by, and the longest leap in relaxation times; work : (R, WORK), what was done.
    """
    averages, occupancy = recorders.averages, recorders.occupancy
    averaging, following = averages.edge.size > 0, occupancy.species.size > 0
    seconds, standing, span = occupancy.seconds, occupancy.since, occupancy.span
    slot, bin_width = occupancy.slot, occupancy.width
    monomial, shift, paced = averages.factor, averages.offset, averages.paced
    every = 1 if budget > 0 else 2  # no literal: views of no particular layout, see recording.py
    columns = state.counts.T[::every]
    time, stream = samples.time, state.stream
    reactant, offset, start = network.reactant, network.offset, network.factor_start
    parent, node, less = network.node_parent, network.node_species, network.node_offset
    M, K, N = pairs.pair.size, pairs.forward.size, state.counts.shape[1] - 1
    forward, backward, sense, pair = pairs.forward, pairs.backward, pairs.sense, pairs.pair
    change_start, change_species, change_amount = pairs.change_start, pairs.change_species, pairs.change_amount
    depend_start, depend_species = pairs.depend_start, pairs.depend_species
    below, above = U(M), U(M + parent.size)
    E = turnover.copies.size
    copy_species, activity_count, unit = turnover.copies, turnover.activities, turnover.unit
    law_start, law_pair, law_turns = turnover.law_start, turnover.law_pair, turnover.law_turns
    monomial_start, variable_start = turnover.monomial_start, turnover.variable_start
    ligand, held, row_start, coefficient_start = (
        turnover.species,
        turnover.held,
        turnover.row_start,
        turnover.coefficient_start,
    )
    w, end_w, slope, pace, end_pace = room.w, room.end_w, room.slope, room.pace, room.end_pace
    scratch, critical = room.scratch, room.critical
    adjoint, gradient = room.adjoint, room.gradient
    bound, drift, spread, pull, end = room.bound, room.drift, room.spread, room.pull, room.end
    matrix, lu, pivot = room.matrix, room.lu, room.pivot
    there, back, more, fewer = room.there, room.back, room.more, room.fewer
    fix, rest, extent, drawn = room.fix, room.rest, room.extent, room.drawn
    J, C, value, lower, turned, big, one = room.J, room.C, room.value, room.lower, room.turned, room.big, room.one
    left, fired = budget, 0
    for r in range(state.reason.size):
        if state.reason[r] != RUNNING:
            continue
        if left <= 0:
            break
        counts, constants, firings, running = state.counts[r], rates[r], state.firings[r], averages.running[r]
        one[0] = r
        clock, sample = state.clock[r], state.next_sample[r]
        sample = pass_marks(samples, averages, r, sample, clock, counts, firings, running)
        all_propensities(reactant, offset, factor_row, start, parent, node, less, constants, counts, scratch, w, pace)
        burst = 0
        stopped = False
        while (left > 0 or burst > 0) and sample < time.size and not stopped:  # a burst is never cut
            mark = time[sample]
            if averages.next_edge[r] < averages.edge.size:
                mark = min(mark, averages.edge[averages.next_edge[r]])
            if judging is not None and judging.next_edge[r] > clock:
                mark = min(mark, judging.next_edge[r])
            total = 0.0
            for j in range(M):
                total += w[j]
            tau = 0.0
            leaping = False
            if total > 0.0 and burst == 0:
                a0 = mark_critical(w, counts, pairs.taken_start, pairs.taken_species, pairs.taken_amount, critical)
                all_slopes(
                    reactant, offset, factor_row, start, parent, node, less, constants, counts, scratch, adjoint, gradient,
                    depend_start, depend_species, slope,
                )  # fmt: skip
                fastest = jacobian(
                    pair, sense, depend_start, depend_species, slope, critical, touch_start, touch_pair, touch_amount, matrix,
                    pull,
                )  # fmt: skip
                tau = leap_length(
                    w, critical, forward, backward, pair, pairs.order, change_start, change_species, change_amount,
                    depend_start, depend_species, slope, pull, tolerance, bound, drift, spread,
                )  # fmt: skip
                longest = stiffness if K <= MOST_SOLVED else EXPLICIT_BELOW
                if fastest > 0.0:
                    tau = min(tau, longest / fastest)
                reach = min(tau, mark - clock)
                if a0 > 0.0:
                    reach = min(reach, 1.0 / a0)  # a leap ends where a critical channel fires
                leaping = reach * total >= PAYS
                if not leaping:
                    burst = BURST
            if not leaping:
                # one exact event, or none before the mark
                left -= 1
                until, j = mark, M
                if total > 0.0:
                    wait = minus_log(waiting_uniform(next_word(stream, r))) / total
                    target = selection_uniform(next_word(stream, r)) * total
                    if clock + wait < mark:
                        until, j = clock + wait, 0
                        share = w[0]
                        while share <= target and j < M - 1:
                            j += 1
                            share += w[j]
                        while w[j] == 0.0:  # rounding must not let a channel fire that cannot
                            j -= 1
                if averaging:
                    integrate_row(monomial, shift, paced, counts, running, pace, until - clock)
                clock = until
                if j < M:
                    burst -= 1
                    fired += 1
                    work[r, EVENTS] += 1.0
                    firings[j] += 1
                    k = pair[j]
                    for c in range(change_start[k], change_start[k + 1]):
                        i = U(change_species[c])
                        if following and slot[i] >= 0:
                            occupy(seconds, standing, span, bin_width, r, slot[i], counts[i], clock)
                        counts[i] += sense[j] * change_amount[c]
                    for d in range(network.depend_start[j], network.depend_start[j + 1]):
                        m = network.depend_channel[d]
                        f = factor_row[m]
                        own = one_pace(
                            m, reactant, offset, f >= 0, U(start[m, 0]), U(start[m, 1]), U(start[m, 2]), parent, node, less,
                            constants, below, above, counts, scratch,
                        )  # fmt: skip
                        if f >= 0:
                            pace[f] = own
                        w[m] = constants[m] * own
                    if judging is not None:
                        judge_all(judging, one, columns, clock, False)
                else:
                    burst = 0
            while leaping:
                left -= LEAP_COST
                step = min(tau, mark - clock)
                arrives = tau >= mark - clock
                alone = -1
                if a0 > 0.0:
                    wait = minus_log(waiting_uniform(next_word(stream, r))) / a0
                    if wait < step:
                        step, arrives = wait, False
                        target = selection_uniform(next_word(stream, r)) * a0
                        share = 0.0
                        for j in range(M):
                            if critical[j] and w[j] > 0.0:
                                share += w[j]
                                alone = j
                                if share > target:
                                    break
                for k in range(K):
                    f, b = forward[k], backward[k]
                    there[k] = w[f] * step if f >= 0 and not critical[f] else 0.0
                    back[k] = w[b] * step if b >= 0 and not critical[b] else 0.0
                    drawn[k] = 0
                uncorrected = 0.0
                for e in range(E):
                    copies = counts[U(copy_species[e])]
                    if copies > 0.0:
                        uncorrected += draw_turnovers(
                            e, copies, step, activity_count[e], law_start, law_pair, law_turns, unit[e], monomial_start,
                            variable_start, ligand, held, row_start, noise_at + coefficient_start[e], constants, counts,
                            forward, backward, critical, there, back, stream, r, J, value, C, lower, turned, big, more, fewer,
                            drawn,
                        )  # fmt: skip
                for k in range(K):
                    if drawn[k] == 0:
                        draw_independent(there[k], back[k], 0.0, stream, r, k, more, fewer)
                stiff = step * fastest
                implicit = stiff > EXPLICIT_BELOW and K <= MOST_SOLVED
                newton = implicit or K <= FEW
                # by how much an iteration shrinks what is left
                shrinks = 2.0 * tolerance if newton else 0.5 * stiff
                correct(
                    newton, shrinks, step, reactant, offset, factor_row, start, parent, node, less, constants, counts, scratch,
                    forward, backward, critical, change_start, change_species, change_amount, there, back, more, fewer, matrix,
                    lu, pivot, end, end_w, end_pace, rest, fix,
                )  # fmt: skip
                for i in range(N):
                    end[i] = counts[i]
                for k in range(K):
                    drawn[k] = 0  # from here on: whether both directions are what they will be
                    if backward[k] < 0:
                        extent[k] = one_way(more[k], there[k], fix[k], stream, r)
                    elif forward[k] < 0:
                        extent[k] = -one_way(fewer[k], back[k], -fix[k], stream, r)
                    elif (
                        there[k] < SOME and back[k] < SOME
                    ):  # each direction for itself, so that neither ends below zero
                        drawn[k] = 1
                        f, b = forward[k], backward[k]
                        up = 0.0 if critical[f] else 0.5 * (end_w[f] * step - there[k])
                        down = 0.0 if critical[b] else 0.5 * (end_w[b] * step - back[k])
                        left_over = fix[k] - (up - down)  # of what was solved by iteration
                        if not critical[f]:
                            up += left_over
                        elif not critical[b]:
                            down -= left_over
                        more[k] = one_way(more[k], there[k], up, stream, r)
                        fewer[k] = one_way(fewer[k], back[k], down, stream, r)
                        extent[k] = more[k] - fewer[k]
                    else:
                        extent[k] = more[k] - fewer[k] + rounded(fix[k], stream, r)
                    for c in range(change_start[k], change_start[k + 1]):
                        end[U(change_species[c])] += change_amount[c] * extent[k]
                fits = True
                for i in range(N):
                    if end[i] < 0.0:
                        fits = False
                if alone >= 0:  # what fires alone does so at the end of the leap
                    k = pair[alone]
                    for c in range(change_start[k], change_start[k + 1]):
                        if end[U(change_species[c])] + sense[alone] * change_amount[c] < 0.0:
                            fits = False
                if not fits:
                    work[r, REJECTED] += 1.0
                    tau = 0.5 * step
                    if tau * total < PAYS:
                        leaping, burst = False, BURST
                    continue
                leaping = False
                work[r, LEAPS] += 1.0
                work[r, IMPLICIT] += 1.0 if implicit else 0.0
                work[r, UNCORRECTED] += uncorrected
                work[r, LONGEST] = max(work[r, LONGEST], step)
                work[r, STIFFEST] = max(work[r, STIFFEST], stiff)
                for k in range(K):
                    # gross firings: what was drawn, moved by half the change of the rate; the rarer direction is estimated, so
                    # that one which hardly fires does not take up what rounding adds to the other; the difference is exact
                    f, b = forward[k], backward[k]
                    forth, back_k = more[k], fewer[k]
                    if b < 0:
                        forth, back_k = extent[k], 0.0
                    elif f < 0:
                        forth, back_k = 0.0, -extent[k]
                    elif drawn[k]:
                        pass
                    elif there[k] + end_w[f] * step > back[k] + end_w[b] * step:
                        if not critical[b]:
                            back_k += rounded(0.5 * (end_w[b] * step - back[k]), stream, r)
                        back_k = max(back_k, -extent[k], 0.0)
                        forth = back_k + extent[k]
                    else:
                        if not critical[f]:
                            forth += rounded(0.5 * (end_w[f] * step - there[k]), stream, r)
                        forth = max(forth, extent[k], 0.0)
                        back_k = forth - extent[k]
                    if f >= 0:
                        firings[f] += np.int64(forth)
                    if b >= 0:
                        firings[b] += np.int64(back_k)
                    fired += np.int64(forth + back_k)
                if alone >= 0:
                    firings[alone] += 1
                    fired += 1
                    work[r, CRITICAL_EVENTS] += 1.0
                half = 0.5 * step
                if averaging:
                    integrate_row(monomial, shift, paced, counts, running, pace, half)
                for i in range(N):
                    if following and slot[i] >= 0 and end[i] != counts[i]:
                        occupy(seconds, standing, span, bin_width, r, slot[i], counts[i], clock + half)
                    counts[i] = end[i]
                all_propensities(
                    reactant, offset, factor_row, start, parent, node, less, constants, counts, scratch, w, pace
                )
                if averaging:
                    integrate_row(monomial, shift, paced, counts, running, pace, half)
                if judging is not None:
                    judge_all(judging, one, columns, clock + half, False)
                clock = mark if arrives else clock + step
                if alone >= 0:
                    k = pair[alone]
                    for c in range(change_start[k], change_start[k + 1]):
                        i = U(change_species[c])
                        if following and slot[i] >= 0:
                            occupy(seconds, standing, span, bin_width, r, slot[i], counts[i], clock)
                        counts[i] += sense[alone] * change_amount[c]
                    all_propensities(
                        reactant, offset, factor_row, start, parent, node, less, constants, counts, scratch, w, pace
                    )
                    if judging is not None:
                        judge_all(judging, one, columns, clock, False)
            if clock >= mark:
                sample = pass_marks(samples, averages, r, sample, clock, counts, firings, running)
            if judging is not None:
                if judging.next_edge[r] <= clock:
                    judge_all(judging, one, columns, np.nextafter(clock, np.inf), False)
                if judging.stops and sample < time.size:
                    stopped = all_decided(judging.moments, judging.table, judging.span, judging.record, r, clock)
        if stopped or sample == time.size:
            total = 0.0
            for j in range(M):
                total += w[j]
            state.reason[r] = STOP_CONDITION if stopped else TIME_REACHED if total > 0.0 else NOTHING_CAN_FIRE
            settle_histograms(occupancy, r, columns, r, clock)
            if stopped:
                if judging is not None:
                    judging.halt[r] = clock
                sample = hold(samples, averages, r, sample, counts, firings, running)
        state.clock[r] = clock
        state.next_sample[r] = sample
        for i in range(N):
            if counts[i] > OVERFLOW_GUARD:
                state.reason[r] = COUNT_OVERFLOW
    return fired
