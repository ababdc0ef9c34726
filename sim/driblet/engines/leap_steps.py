"""The parts of one leap: propensities and slopes at real counts, how far to leap, the implicit correction.

Functions take arrays and no tuples, whose many reference counts would cost more than the work; arrays are of one replicate.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE, bare
from driblet.engines.factors import factor_value

U = np.uint64
ONE = U(1)
CRITICAL = 10.0  # firings that would exhaust a reactant: fewer, and a channel fires one at a time
EXPLICIT_BELOW = 0.2  # of tau * lambda: there the implicit equation is solved by iterating it
MOST_SOLVED = 96  # pairs up to which it is solved by Newton's method
FEW = 8  # pairs up to which Newton's method is the quickest way at any length
ITERATIONS = 12
CONVERGED = 0.05  # firings


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def clipped(x):  # type: ignore[no-untyped-def]
    """x, 0 below zero."""
    return x if x > 0.0 else 0.0


@bare
def one_pace(  # type: ignore[no-untyped-def]
    j, reactant, offset, factored, first, top, end, parent, node, less, constants, below, above, counts, scratch
):
    """Propensity of channel j over its constant, also at counts that are not whole; never negative."""
    own = clipped(counts[U(reactant[j, 0])])
    own *= clipped(counts[U(reactant[j, 1])] - offset[j, 1])
    own *= clipped(counts[U(reactant[j, 2])] - offset[j, 2])
    if factored and own > 0.0:
        own *= factor_value(first, top, end, parent, node, less, constants, below, above, counts, scratch)
    return own


@bare
def all_propensities(reactant, offset, rows, start, parent, node, less, constants, counts, scratch, w, pace):  # type: ignore[no-untyped-def]
    """w : (M,), propensities; pace : (channels with a factor,), as in factors.py.

    The factor is factors.factor_value, written out: a call for each channel makes a leap a tenth slower.
    """
    below_at = U(w.size)
    above_at = below_at + U(parent.size)
    for j in range(w.size):
        own = clipped(counts[U(reactant[j, 0])])
        own *= clipped(counts[U(reactant[j, 1])] - offset[j, 1])
        own *= clipped(counts[U(reactant[j, 2])] - offset[j, 2])
        if rows[j] >= 0:
            if own > 0.0:
                first, top = U(start[j, 0]), U(start[j, 1])
                above, below = 0.0, 0.0
                for t in range(first, U(start[j, 2])):
                    q = scratch[U(parent[t])] * clipped(counts[U(node[t])] - less[t])
                    scratch[t - first + ONE] = q
                    below += constants[below_at + t] * q
                    if t < top:
                        above += constants[above_at + t] * q
                own *= (above if top > first else 1.0) / below if below > 0.0 else 0.0
            pace[rows[j]] = own
        w[j] = constants[j] * own


@bare
def all_slopes(  # type: ignore[no-untyped-def]
    reactant, offset, rows, start, parent, node, less, constants, counts, scratch, adjoint, gradient, depend_start,
    depend_species, slope
):  # fmt: skip
    """slope : derivatives of each propensity by the species in `depend_species`, taken backwards through its nodes.

    adjoint : as scratch; gradient : (N + 1,), zero before and after.
    """
    below_at = U(rows.size)
    above_at = below_at + U(parent.size)
    for j in range(rows.size):
        a, b, c = U(reactant[j, 0]), U(reactant[j, 1]), U(reactant[j, 2])
        x, y, z = clipped(counts[a]), clipped(counts[b] - offset[j, 1]), clipped(counts[c] - offset[j, 2])
        first, top, last = U(start[j, 0]), U(start[j, 1]), U(start[j, 2])
        factor = 1.0
        if rows[j] >= 0:
            above, below = 0.0, 0.0
            for t in range(first, last):
                q = scratch[U(parent[t])] * clipped(counts[U(node[t])] - less[t])
                scratch[t - first + ONE] = q
                below += constants[below_at + t] * q
                if t < top:
                    above += constants[above_at + t] * q
            if not top > first:
                above = 1.0
            factor = above / below if below > 0.0 else 0.0
            scale = x * y * z / below if below > 0.0 else 0.0
            adjoint[0] = 0.0
            for t in range(first, last):
                own = -factor * constants[below_at + t]
                if t < top:
                    own += constants[above_at + t]
                adjoint[t - first + ONE] = own * scale
            for back in range(last - first):
                t = last - ONE - U(back)
                own = adjoint[t - first + ONE]
                i, before = U(node[t]), U(parent[t])
                adjoint[before] += own * clipped(counts[i] - less[t])
                gradient[i] += own * scratch[before]
        gradient[a] += factor * y * z
        gradient[b] += factor * x * z
        gradient[c] += factor * x * y
        for d in range(depend_start[j], depend_start[j + 1]):
            slope[d] = constants[j] * gradient[U(depend_species[d])]
        for t in range(first, last):
            gradient[U(node[t])] = 0.0
        gradient[a], gradient[b], gradient[c] = 0.0, 0.0, 0.0


@bare
def integrate_row(factor, offset, paced, counts, running, pace, span):  # type: ignore[no-untyped-def]
    """recording.integrate for rows of one replicate."""
    for q in range(factor.shape[0]):
        value = counts[U(factor[q, 0])] - offset[q, 0]
        value *= counts[U(factor[q, 1])] - offset[q, 1]
        running[q] += value * (counts[U(factor[q, 2])] - offset[q, 2]) * span
    for k in range(paced.shape[0]):
        running[U(paced[k, 0])] += pace[U(paced[k, 1])] * span


@bare
def mark_critical(w, counts, taken_start, taken_species, taken_amount, critical):  # type: ignore[no-untyped-def]
    """critical : (M,), 1 where fewer than CRITICAL firings are left; returns their total propensity."""
    total = 0.0
    for j in range(w.size):
        critical[j] = 0
        if not w[j] > 0.0:
            continue
        for k in range(taken_start[j], taken_start[j + 1]):
            if counts[U(taken_species[k])] < CRITICAL * taken_amount[k]:
                critical[j] = 1
        if critical[j]:
            total += w[j]
    return total


@bare
def jacobian(  # type: ignore[no-untyped-def]
    pair, sense, depend_start, depend_species, slope, critical, touch_start, touch_pair, touch_amount, matrix, pull
):
    """matrix : (K, K), of net rates of pairs by net extents of pairs; pull : (N,), rate at which each species alone relaxes.

    Returns a bound of the fastest relaxation, 1/s: the smaller of the trace and of the greatest row sum.
    """
    matrix[:] = 0.0
    pull[:] = 0.0
    for j in range(pair.size):
        if critical[j]:
            continue
        k = U(pair[j])
        for d in range(depend_start[j], depend_start[j + 1]):
            i = depend_species[d]
            own = sense[j] * slope[d]
            for t in range(touch_start[i], touch_start[i + 1]):
                m = U(touch_pair[t])
                matrix[k, m] += own * touch_amount[t]
                if m == k:
                    pull[i] -= own * touch_amount[t]
    trace, widest = 0.0, 0.0
    for k in range(matrix.shape[0]):
        trace += clipped(-matrix[k, k])
        row = 0.0
        for m in range(matrix.shape[0]):
            row += abs(matrix[k, m])
        widest = max(widest, row)
    return min(trace, widest)


@bare
def leap_length(  # type: ignore[no-untyped-def]
    w, critical, forward, backward, pair, order, change_start, change_species, change_amount, depend_start, depend_species,
    slope, pull, tolerance, bound, drift, spread,
):  # fmt: skip
    """How far no pair's gross propensity is expected to change by more than a share `tolerance` (Cao, Gillespie & Petzold,
    J. Chem. Phys. 124:044109, 2006, on net extents), s.

    A species may change by what changes the gross propensity of a pair by that share, so that a product that is not there
    yet does not shorten leaps while its reverse reaction is negligible. A species that relaxes within the leap, to where
    its spread is within bounds, does not either: the implicit step holds it.
    """
    bound[:] = np.inf
    drift[:] = 0.0
    spread[:] = 0.0
    for k in range(forward.size):
        net, gross = 0.0, 0.0
        for j, sign in ((forward[k], 1.0), (backward[k], -1.0)):
            if j >= 0 and not critical[j]:
                net += sign * w[j]
                gross += w[j]
        if gross > 0.0:
            for c in range(change_start[k], change_start[k + 1]):
                i, a = U(change_species[c]), change_amount[c]
                drift[i] += a * net
                spread[i] += a * a * gross
    for j in range(w.size):
        if critical[j]:
            continue
        k = pair[j]
        gross = 0.0
        if forward[k] >= 0:
            gross += w[forward[k]]
        if backward[k] >= 0:
            gross += w[backward[k]]
        for d in range(depend_start[j], depend_start[j + 1]):
            steep = abs(slope[d]) * order[j]
            if steep > 0.0:
                i = U(depend_species[d])
                bound[i] = min(bound[i], tolerance * gross / steep)
    tau = np.inf
    wider = math.sqrt(3.0 / tolerance)
    for i in range(bound.size):
        if bound[i] < np.inf:
            away, most = abs(drift[i]), max(1.0, bound[i])
            if away > 0.5 * pull[i] * most:
                tau = min(tau, most / away)
            most = max(1.0, bound[i] * wider) ** 2
            if spread[i] > 2.0 * pull[i] * most:
                tau = min(tau, most / spread[i])
    return tau


@bare
def factorise(matrix, half, lu, pivot):  # type: ignore[no-untyped-def]
    """LU of I - half * matrix with partial pivoting, in place of `lu`; half : tau / 2."""
    K = matrix.shape[0]
    for k in range(K):
        for m in range(K):
            lu[k, m] = (1.0 if k == m else 0.0) - half * matrix[k, m]
    for c in range(K):
        best = c
        for k in range(c + 1, K):
            if abs(lu[k, c]) > abs(lu[best, c]):
                best = k
        pivot[c] = best
        if best != c:
            for m in range(K):
                lu[c, m], lu[best, m] = lu[best, m], lu[c, m]
        if lu[c, c] == 0.0:
            lu[c, c] = 1e-300
        for k in range(c + 1, K):
            if lu[k, c] != 0.0:
                lu[k, c] /= lu[c, c]
                own = lu[k, c]
                for m in range(c + 1, K):
                    lu[k, m] -= own * lu[c, m]


@bare
def solve(lu, pivot, x):  # type: ignore[no-untyped-def]
    """Solve in place with the factors of `factorise`."""
    K = x.size
    for c in range(K):
        p = pivot[c]
        if p != c:
            # rows below were exchanged whole, factors included
            x[c], x[p] = x[p], x[c]
    for k in range(K):
        total = x[k]
        for m in range(k):
            total -= lu[k, m] * x[m]
        x[k] = total
    for back in range(K):
        k = K - 1 - back
        total = x[k]
        for m in range(k + 1, K):
            total -= lu[k, m] * x[m]
        x[k] = total / lu[k, k]


@bare
def correct(  # type: ignore[no-untyped-def]
    newton, shrinks, step, reactant, offset, rows, start, parent, node, less, constants, counts, scratch, forward, backward,
    critical, change_start, change_species, change_amount, there, back, more, fewer, matrix, lu, pivot, end, end_w, end_pace,
    rest, fix,
):  # fmt: skip
    """fix : (K,), half the change of each pair's net rate over the leap, at an end that it leads to itself, in firings.

    there, back : (K,), mean firings both ways at the rates of the start; more, fewer : what was drawn. Afterwards end_w has
    the propensities of the end. Critical channels have no part in it.
    """
    fix[:] = 0.0
    if newton:
        factorise(matrix, 0.5 * step, lu, pivot)
    for _ in range(ITERATIONS):
        for i in range(end.size):
            end[i] = counts[i]
        for k in range(fix.size):
            extent = more[k] - fewer[k] + fix[k]
            for c in range(change_start[k], change_start[k + 1]):
                end[U(change_species[c])] += change_amount[c] * extent
        for i in range(end.size):
            end[i] = clipped(end[i])
        all_propensities(reactant, offset, rows, start, parent, node, less, constants, end, scratch, end_w, end_pace)
        for k in range(fix.size):
            f, b = forward[k], backward[k]
            net = 0.0
            if f >= 0 and not critical[f]:
                net += end_w[f] * step - there[k]
            if b >= 0 and not critical[b]:
                net -= end_w[b] * step - back[k]
            rest[k] = 0.5 * net - fix[k]
        if newton:
            solve(lu, pivot, rest)
        largest = 0.0
        for k in range(fix.size):
            fix[k] += rest[k]
            largest = max(largest, abs(rest[k]))
        if largest * shrinks < CONVERGED:
            break
