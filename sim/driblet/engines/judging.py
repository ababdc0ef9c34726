"""Requirements judged while a replicate runs: truth after every event, time spent true, first failure, first success.

A requirement is a postfix program over leaves, a leaf the sign of a polynomial in counts (or, for time averages, of the
integral of a value over a window of time). The state is constant between two events, so all of this is exact. `counts` are
(thing, column) with one replicate a column, as in recording.py.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from driblet.engines.compile_cache import CACHE
from driblet.engines.random_stream import minus_log

THROUGHOUT, AT_END, ONCE = range(3)
SIGN, RATIO, LOG_UP, LOG_DOWN, LOG_MIXED = range(5)
AND, OR = -1, -2
UNDECIDED, FAILED, MET = -1, 0, 1
_SMALLEST_NORMAL = 2.2250738585072014e-308


class Requirements(NamedTuple):
    """Q requirements of R replicates. Off when there are none.

    affected_start, affected : CSR over channels, which requirements a firing can change
    leaf_start : (Q + 1,); leaf_kind, leaf_strict : (L,); leaf_polynomial : (L, 2), see driblet.condition_forms.Leaf
    term_start : (P + 1,) over polynomials; factor_start : (T + 1,) over terms; factor_species, factor_offset : (F,)
    program_start : (Q + 1,); program : leaves from 0 up within the requirement, AND, OR
    when : (Q,), THROUGHOUT, AT_END or ONCE; span : (Q, 2), s; averaged : (Q,), 0 or 1
    window : (Q,), s, what is averaged over; windows : (Q,), how many fill the span, the last takes the rest
    stop : (1,), 1 where a replicate may stop when all requirements are decided
    coefficient : (R, T)
    leaf_value, leaf_sum : (R, L), of averages: value of the moment, integral over the window so far
    leaf_truth : (R, L); truth : (R, Q), of the moment or of the last window; since : (R, Q), s, when it began
    next_window : (R, Q)
    time_met, first_met, first_failure, judged_until : (R, Q), s, the results; NaN for what did not happen
    outcome : (R, Q), UNDECIDED, FAILED or MET; the result.
    """

    affected_start: NDArray[np.int64]
    affected: NDArray[np.int64]
    leaf_start: NDArray[np.int64]
    leaf_kind: NDArray[np.int64]
    leaf_strict: NDArray[np.int64]
    leaf_polynomial: NDArray[np.int64]
    term_start: NDArray[np.int64]
    factor_start: NDArray[np.int64]
    factor_species: NDArray[np.int64]
    factor_offset: NDArray[np.float64]
    program_start: NDArray[np.int64]
    program: NDArray[np.int64]
    when: NDArray[np.int64]
    span: NDArray[np.float64]
    averaged: NDArray[np.int64]
    window: NDArray[np.float64]
    windows: NDArray[np.int64]
    stop: NDArray[np.int64]
    coefficient: NDArray[np.float64]
    leaf_value: NDArray[np.float64]
    leaf_sum: NDArray[np.float64]
    leaf_truth: NDArray[np.int64]
    truth: NDArray[np.int64]
    since: NDArray[np.float64]
    next_window: NDArray[np.int64]
    time_met: NDArray[np.float64]
    first_met: NDArray[np.float64]
    first_failure: NDArray[np.float64]
    judged_until: NDArray[np.float64]
    outcome: NDArray[np.int64]


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def polynomial(rq, r, p, counts, column):  # type: ignore[no-untyped-def]
    """Value of polynomial p in replicate r."""
    total = 0.0
    for t in range(np.uint64(rq.term_start[p]), np.uint64(rq.term_start[p + np.uint64(1)])):
        value = rq.coefficient[r, t]
        for f in range(np.uint64(rq.factor_start[t]), np.uint64(rq.factor_start[t + np.uint64(1)])):
            value *= counts[np.uint64(rq.factor_species[f]), column] - rq.factor_offset[f]
        total += value
    return total


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def meets(value, strict):  # type: ignore[no-untyped-def]
    """1 where value < 0, or <= 0 when not strict; NaN meets nothing."""
    return np.int64(value < 0.0) | (np.int64(value <= 0.0) & (np.int64(1) - strict))


@njit(nogil=True, cache=CACHE, error_model="numpy")
def conclude(rq, r, q):  # type: ignore[no-untyped-def]
    """Truth of requirement q from the truth of its leaves."""
    first = rq.leaf_start[q]
    stack = np.int64(0)  # a stack of bits, the last pushed lowest
    for k in range(rq.program_start[q], rq.program_start[q + 1]):
        code = rq.program[k]
        if code >= 0:
            stack = (stack << 1) | rq.leaf_truth[r, first + code]
        elif code == AND:
            stack = ((stack >> 2) << 1) | (stack & (stack >> 1) & 1)
        else:
            stack = ((stack >> 2) << 1) | ((stack | (stack >> 1)) & 1)
    return stack & 1


@njit(nogil=True, cache=CACHE, error_model="numpy")
def credit(rq, r, q, until, closed):  # type: ignore[no-untyped-def]
    """Write down that the truth of q held from `since` to `until`, that instant included where `closed`."""
    start, end = rq.span[q, 0], rq.span[q, 1]
    since = rq.since[r, q]
    if since > end or until < start or (until == start and not closed):
        return
    first = max(since, start)
    if rq.truth[r, q] == 1:
        rq.time_met[r, q] += min(until, end) - first
        if np.isnan(rq.first_met[r, q]):
            rq.first_met[r, q] = first
    elif np.isnan(rq.first_failure[r, q]):
        rq.first_failure[r, q] = first
    if rq.when[q] == AT_END and (until > end or (until == end and closed)):
        rq.outcome[r, q] = rq.truth[r, q]


@njit(nogil=True, cache=CACHE, error_model="numpy")
def take_values(rq, r, q, counts, column):  # type: ignore[no-untyped-def]
    """The values of the moment that q averages."""
    for leaf in range(rq.leaf_start[q], rq.leaf_start[q + 1]):
        kind = rq.leaf_kind[leaf]
        value = polynomial(rq, r, np.uint64(rq.leaf_polynomial[leaf, 0]), counts, column)
        if kind != SIGN:
            below = polynomial(rq, r, np.uint64(rq.leaf_polynomial[leaf, 1]), counts, column)
            value = value / below if kind == RATIO else log_ratio(kind, value, below)
        rq.leaf_value[r, leaf] = value


@njit(nogil=True, cache=CACHE, error_model="numpy")
def log_ratio(kind, above, below):  # type: ignore[no-untyped-def]
    """ln(above / below) with the exhausted reactants that `kind` says: +inf below the line, -inf above it."""
    if above > _SMALLEST_NORMAL and below > _SMALLEST_NORMAL:
        return minus_log(below) - minus_log(above)
    if kind == LOG_UP or (kind == LOG_MIXED and above > 0.0):
        return np.inf if below <= _SMALLEST_NORMAL else -np.inf
    if kind == LOG_DOWN or (kind == LOG_MIXED and below > 0.0):
        return -np.inf if above <= _SMALLEST_NORMAL else np.inf
    return np.nan


@njit(nogil=True, cache=CACHE, error_model="numpy")
def integrate_to(rq, r, q, until):  # type: ignore[no-untyped-def]
    """Integrate the values of q up to `until`, judging every window that ends by then."""
    start, end = rq.span[q, 0], rq.span[q, 1]
    low, high = max(rq.since[r, q], start), min(until, end)
    first, last = rq.leaf_start[q], rq.leaf_start[q + 1]
    while rq.next_window[r, q] < rq.windows[q]:
        k = rq.next_window[r, q]
        edge = end if k == rq.windows[q] - 1 else start + (k + 1) * rq.window[q]
        to = min(edge, high)
        if to > low:
            for leaf in range(first, last):
                rq.leaf_sum[r, leaf] += rq.leaf_value[r, leaf] * (to - low)
            low = to
        if high < edge:
            break
        for leaf in range(first, last):
            rq.leaf_truth[r, leaf] = meets(rq.leaf_sum[r, leaf], rq.leaf_strict[leaf])
            rq.leaf_sum[r, leaf] = 0.0
        rq.truth[r, q] = conclude(rq, r, q)
        if rq.truth[r, q] == 1:
            rq.time_met[r, q] += edge - (start + k * rq.window[q])
            if np.isnan(rq.first_met[r, q]):
                rq.first_met[r, q] = edge
        elif np.isnan(rq.first_failure[r, q]):
            rq.first_failure[r, q] = edge
        if rq.when[q] == AT_END and k == rq.windows[q] - 1:
            rq.outcome[r, q] = rq.truth[r, q]
        rq.next_window[r, q] = k + 1
    rq.since[r, q] = until


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def judge(rq, r, q, counts, column, clock):  # type: ignore[no-untyped-def]
    """Take notice that the counts of requirement q may have changed at `clock`; returns whether its truth did."""
    if rq.averaged[q] != 0:
        before = rq.next_window[r, q]
        integrate_to(rq, r, q, clock)
        take_values(rq, r, q, counts, column)
        return rq.next_window[r, q] != before
    changed = np.int64(0)
    for leaf in range(np.uint64(rq.leaf_start[q]), np.uint64(rq.leaf_start[q + np.uint64(1)])):
        p = np.uint64(rq.leaf_polynomial[leaf, 0])
        truth = meets(polynomial(rq, r, p, counts, column), rq.leaf_strict[leaf])
        changed |= truth ^ rq.leaf_truth[r, leaf]
        rq.leaf_truth[r, leaf] = truth
    if changed != 0:
        truth = conclude(rq, r, q)
        if truth != rq.truth[r, q]:
            credit(rq, r, q, clock, False)
            rq.truth[r, q] = truth
            rq.since[r, q] = clock
            return True
    return False


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def judge_firing(rq, r, channel, counts, column, clock):  # type: ignore[no-untyped-def]
    """Judge what a firing of `channel` at `clock` can change; returns whether the truth of any requirement did."""
    changed = False
    for k in range(np.uint64(rq.affected_start[channel]), np.uint64(rq.affected_start[channel + np.uint64(1)])):
        changed |= judge(rq, r, np.uint64(rq.affected[k]), counts, column, clock)
    return changed


@njit(nogil=True, cache=CACHE, error_model="numpy")
def judge_all(rq, r, counts, column, clock):  # type: ignore[no-untyped-def]
    """Judge every requirement: after a leap, or at a grid point."""
    for q in range(rq.when.size):
        judge(rq, r, np.uint64(q), counts, column, clock)


@njit(nogil=True, cache=CACHE, error_model="numpy")
def open_judgement(rq, r, counts, column):  # type: ignore[no-untyped-def]
    """The truth at time zero; `counts` : of the start."""
    for q in range(rq.when.size):
        rq.since[r, q] = 0.0
        if rq.averaged[q] != 0:
            take_values(rq, r, q, counts, column)
            continue
        for leaf in range(rq.leaf_start[q], rq.leaf_start[q + 1]):
            p = np.uint64(rq.leaf_polynomial[leaf, 0])
            rq.leaf_truth[r, leaf] = meets(polynomial(rq, r, p, counts, column), rq.leaf_strict[leaf])
        rq.truth[r, q] = conclude(rq, r, q)


@njit(nogil=True, cache=CACHE, error_model="numpy")
def all_decided(rq, r, clock):  # type: ignore[no-untyped-def]
    """Whether nothing after `clock` can change an outcome of replicate r."""
    for q in range(rq.when.size):
        if clock > rq.span[q, 1] or rq.outcome[r, q] != UNDECIDED:
            continue
        now = rq.averaged[q] == 0 and clock >= rq.span[q, 0]
        if rq.when[q] == THROUGHOUT:
            if np.isnan(rq.first_failure[r, q]) and not (now and rq.truth[r, q] == 0):
                return False
        elif rq.when[q] == ONCE:
            if np.isnan(rq.first_met[r, q]) and not (now and rq.truth[r, q] == 1):
                return False
        else:
            return False
    return True


@njit(nogil=True, cache=CACHE, error_model="numpy")
def close_judgement(rq, r, end):  # type: ignore[no-untyped-def]
    """The outcomes of a replicate whose record ends at `end`."""
    for q in range(rq.when.size):
        if rq.averaged[q] != 0:
            integrate_to(rq, r, q, end)
        else:
            credit(rq, r, q, end, True)
        through = end >= rq.span[q, 1]
        rq.judged_until[r, q] = min(end, rq.span[q, 1])
        if rq.when[q] == THROUGHOUT:
            if not np.isnan(rq.first_failure[r, q]):
                rq.outcome[r, q] = FAILED
            elif through:
                rq.outcome[r, q] = MET
        elif rq.when[q] == ONCE:
            if not np.isnan(rq.first_met[r, q]):
                rq.outcome[r, q] = MET
            elif through:
                rq.outcome[r, q] = FAILED
