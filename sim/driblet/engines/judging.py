"""Requirements judged while a replicate runs: truth after every event, time spent true, first failure, first success.

A requirement is a postfix program over leaves. A leaf is the sign of a polynomial in counts or, for time averages, of the
integral of a value over a window of time, which is judged at the window's edge. The state is constant between two events,
so all of this is exact. `counts` and `sums` are (thing, column) with one replicate a column, as in recording.py; functions
take arrays and no tuples, whose many reference counts would cost more than the work.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE, inner
from driblet.engines.random_stream import minus_log
from driblet.engines.requirement_arrays import (
    AND,
    AT_END,
    END,
    END_CODE,
    END_LEAF,
    FAILED,
    FIRST_CODE,
    FIRST_FAILURE,
    FIRST_LEAF,
    FIRST_MET,
    JUDGED_UNTIL,
    KIND,
    LOG_DOWN,
    LOG_UP,
    MET,
    NEXT_WINDOW,
    ONCE,
    OTHER,
    OUTCOME,
    POLYNOMIAL,
    RATIO,
    SIGN,
    SINCE,
    START,
    STRICT,
    THROUGHOUT,
    TIME_MET,
    TRUTH,
    UNDECIDED,
    WHEN,
    WINDOW,
    WINDOWS,
)
from driblet.engines.vector_hints import seldom_called

U = np.uint64
_ONE = U(1)
_TINY = 2.2250738585072014e-308  # the smallest normal double


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def polynomial_value(term_start, factor_start, species, offset, coefficient, r, p, counts, column):  # type: ignore[no-untyped-def]
    """Value of polynomial p in replicate r."""
    total = 0.0
    for t in range(U(term_start[p]), U(term_start[p + _ONE])):
        value = coefficient[r, t]
        for f in range(U(factor_start[t]), U(factor_start[t + _ONE])):
            value *= counts[U(species[f]), column] - offset[f]
        total += value
    return total


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def meets(value, strict):  # type: ignore[no-untyped-def]
    """1 where value < 0, or <= 0 when not strict; NaN meets nothing."""
    if strict != 0:
        return 1.0 if value < 0.0 else 0.0
    return 1.0 if value <= 0.0 else 0.0


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def log_ratio(kind, above, below):  # type: ignore[no-untyped-def]
    """ln(above / below), infinite where a side is exhausted: `kind` says which side counts, or neither where both are."""
    value = minus_log(max(below, _TINY)) - minus_log(max(above, _TINY))
    no_above, no_below = above <= _TINY, below <= _TINY
    if no_above and no_below:
        return np.inf if kind == LOG_UP else -np.inf if kind == LOG_DOWN else np.nan
    return -np.inf if no_above else np.inf if no_below else value


@inner
def conclude(table, program, leaf_truth, r, q):  # type: ignore[no-untyped-def]
    """Truth of requirement q, 1 or 0, from the truth of its leaves."""
    first = table[q, FIRST_LEAF]
    stack = np.int64(0)  # a stack of bits, the last pushed lowest
    for k in range(table[q, FIRST_CODE], table[q, END_CODE]):
        code = program[k]
        if code >= 0:
            stack = (stack << 1) | np.int64(leaf_truth[r, first + code])
        elif code == AND:
            stack = ((stack >> 2) << 1) | (stack & (stack >> 1) & 1)
        else:
            stack = ((stack >> 2) << 1) | ((stack | (stack >> 1)) & 1)
    return np.float64(stack & 1)


@inner
def credit(table, span, record, r, q, until):  # type: ignore[no-untyped-def]
    """Write down that the truth of q held from SINCE up to `until`, that instant left out."""
    start, end = span[q, START], span[q, END]
    since, truth = record[r, q, SINCE], record[r, q, TRUTH]
    if since > end or until <= start:
        return
    first = max(since, start)
    if truth == 1.0:
        record[r, q, TIME_MET] += min(until, end) - first
        if np.isnan(record[r, q, FIRST_MET]):
            record[r, q, FIRST_MET] = first
    elif np.isnan(record[r, q, FIRST_FAILURE]):
        record[r, q, FIRST_FAILURE] = first
    if table[q, WHEN] == AT_END and until > end:
        record[r, q, OUTCOME] = truth


@inner
def turn(table, span, program, leaf_truth, record, r, q, clock):  # type: ignore[no-untyped-def]
    """A leaf of q has changed at `clock`; returns whether q has."""
    seldom_called()
    truth = conclude(table, program, leaf_truth, r, q)
    if truth == record[r, q, TRUTH]:
        return False
    credit(table, span, record, r, q, clock)
    record[r, q, TRUTH] = truth
    record[r, q, SINCE] = clock
    return True


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def leaf_change(leaf, term_start, factor_start, species, offset, coefficient, leaf_truth, r, k, counts, column):  # type: ignore[no-untyped-def]
    """Look at leaf k of a moment anew; 1 where its truth has changed."""
    p = U(leaf[k, POLYNOMIAL])
    value = polynomial_value(term_start, factor_start, species, offset, coefficient, r, p, counts, column)
    truth = meets(value, leaf[k, STRICT])
    if truth == leaf_truth[r, k]:
        return 0
    leaf_truth[r, k] = truth
    return 1


@inner
def take_value(leaf, term_start, factor_start, species, offset, coefficient, r, k, counts, column):  # type: ignore[no-untyped-def]
    """The value of the moment of leaf k of an average."""
    seldom_called()
    kind = leaf[k, KIND]
    p = U(leaf[k, POLYNOMIAL])
    value = polynomial_value(term_start, factor_start, species, offset, coefficient, r, p, counts, column)
    if kind == SIGN:
        return value
    p = U(leaf[k, OTHER])
    below = polynomial_value(term_start, factor_start, species, offset, coefficient, r, p, counts, column)
    return value / below if kind == RATIO else log_ratio(kind, value, below)


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def part(value, time):  # type: ignore[no-untyped-def]
    """value * time, 0 for no time, also of an infinite value."""
    return value * time if time > 0.0 else 0.0


@inner
def window_edge(table, span, record, r, q):  # type: ignore[no-untyped-def]
    """Where the present window of an average ends: the start of the span at first, inf after the last."""
    k = record[r, q, NEXT_WINDOW]
    if k == table[q, WINDOWS]:
        return np.inf
    if k == table[q, WINDOWS] - 1.0:
        return span[q, END]
    return span[q, START] + (k + 1.0) * span[q, WINDOW]


@inner
def judge_window(table, span, leaf, program, leaf_truth, record, sums, r, column, q):  # type: ignore[no-untyped-def]
    """The present window of q is complete: judge it, and begin the next."""
    seldom_called()
    k = record[r, q, NEXT_WINDOW]
    edge = window_edge(table, span, record, r, q)
    record[r, q, NEXT_WINDOW] = k + 1.0
    for n in range(table[q, FIRST_LEAF], table[q, END_LEAF]):
        leaf_truth[r, n] = meets(sums[U(n), column], leaf[n, STRICT])
        sums[U(n), column] = 0.0
    if k < 0.0:  # what came before the span
        return
    truth = conclude(table, program, leaf_truth, r, q)
    record[r, q, TRUTH] = truth
    if truth == 1.0:
        record[r, q, TIME_MET] += edge - (span[q, START] + k * span[q, WINDOW])
        if np.isnan(record[r, q, FIRST_MET]):
            record[r, q, FIRST_MET] = edge
    elif np.isnan(record[r, q, FIRST_FAILURE]):
        record[r, q, FIRST_FAILURE] = edge
    if table[q, WHEN] == AT_END and k == table[q, WINDOWS] - 1.0:
        record[r, q, OUTCOME] = truth


@inner
def cross_edges(  # type: ignore[no-untyped-def]
    moments, moment_leaves, table, span, leaf, program, leaf_value, leaf_truth, record, integrated_to, next_edge, sums, r,
    column, until,
):  # fmt: skip
    """Judge every window that ends before `until`; values : of the present state.

    Afterwards averages are integrated up to integrated_to[r].
    """
    seldom_called()
    edge = next_edge[r]
    while edge < until:
        for n in range(moment_leaves, leaf.shape[0]):
            sums[U(n), column] += part(leaf_value[r, n], edge - integrated_to[r])
        integrated_to[r] = edge
        after = np.inf
        for q in range(moments, table.shape[0]):
            if window_edge(table, span, record, r, q) == edge:
                judge_window(table, span, leaf, program, leaf_truth, record, sums, r, column, q)
            after = min(after, window_edge(table, span, record, r, q))
        edge = after
        next_edge[r] = edge


@inner
def all_decided(moments, table, span, record, r, clock):  # type: ignore[no-untyped-def]
    """Whether nothing after `clock` can change an outcome of replicate r."""
    seldom_called()
    for q in range(table.shape[0]):
        if clock > span[q, END] or record[r, q, OUTCOME] != UNDECIDED:
            continue
        now = q < moments and clock >= span[q, START]
        if table[q, WHEN] == THROUGHOUT:
            if np.isnan(record[r, q, FIRST_FAILURE]) and not (now and record[r, q, TRUTH] == 0.0):
                return False
        elif table[q, WHEN] == ONCE:
            if np.isnan(record[r, q, FIRST_MET]) and not (now and record[r, q, TRUTH] == 1.0):
                return False
        else:
            return False
    return True


@njit(nogil=True, cache=CACHE, error_model="numpy")
def judge_rows(rq, rows, counts, clock, opening):  # type: ignore[no-untyped-def]
    """judge_all for counts (R, species): the way in from Python, in one compiled form for any number of replicates."""
    every = 1 if clock >= 0.0 else 2  # no literal: views of no particular layout, see recording.py
    judge_all(rq, rows, counts.T[::every], clock, opening)


@inner
def judge_all(rq, rows, counts, clock, opening):  # type: ignore[no-untyped-def]
    """Look at every requirement of the replicates `rows` anew at `clock`; counts : (species, R).

    opening : at the start of a run, where there is nothing before; else after a leap or an addition.
    """
    every = 1 if clock >= 0.0 else 2  # no literal: views of no particular layout, see recording.py
    columns, sums = counts[::every], rq.leaf_sum.T[::every]
    for r in rows:
        if opening:
            rq.next_edge[r] = np.inf
            for q in range(rq.moments, rq.table.shape[0]):
                rq.record[r, q, NEXT_WINDOW] = -1.0 if rq.span[q, START] > 0.0 else 0.0
                rq.next_edge[r] = min(rq.next_edge[r], window_edge(rq.table, rq.span, rq.record, r, q))
        else:
            cross_edges(
                rq.moments, rq.moment_leaves, rq.table, rq.span, rq.leaf, rq.program, rq.leaf_value, rq.leaf_truth, rq.record,
                rq.integrated_to, rq.next_edge, sums, r, r, clock,
            )  # fmt: skip
            for n in range(rq.moment_leaves, rq.leaf.shape[0]):
                sums[n, r] += part(rq.leaf_value[r, n], clock - rq.integrated_to[r])
            rq.integrated_to[r] = max(rq.integrated_to[r], clock)
        for n in range(rq.moment_leaves, rq.leaf.shape[0]):
            rq.leaf_value[r, n] = take_value(
                rq.leaf, rq.term_start, rq.factor_start, rq.factor_species, rq.factor_offset, rq.coefficient, r, n, columns, r
            )  # fmt: skip
        for q in range(rq.moments):
            for k in range(rq.table[q, FIRST_LEAF], rq.table[q, END_LEAF]):
                leaf_change(
                    rq.leaf, rq.term_start, rq.factor_start, rq.factor_species, rq.factor_offset, rq.coefficient,
                    rq.leaf_truth, r, k, columns, r,
                )  # fmt: skip
            if opening:
                rq.record[r, q, TRUTH] = conclude(rq.table, rq.program, rq.leaf_truth, r, q)
            else:
                turn(rq.table, rq.span, rq.program, rq.leaf_truth, rq.record, r, q, clock)


@njit(nogil=True, cache=CACHE, error_model="numpy")
def close_judgement(rq, end):  # type: ignore[no-untyped-def]
    """The outcomes of replicates whose records end at end[r], that instant included."""
    every = 1 if end.size > 0 else 2
    sums = rq.leaf_sum.T[::every]
    for r in range(end.size):
        until = np.nextafter(end[r], np.inf)
        cross_edges(
            rq.moments, rq.moment_leaves, rq.table, rq.span, rq.leaf, rq.program, rq.leaf_value, rq.leaf_truth, rq.record,
            rq.integrated_to, rq.next_edge, sums, r, r, until,
        )  # fmt: skip
        for q in range(rq.table.shape[0]):
            if q < rq.moments:
                credit(rq.table, rq.span, rq.record, r, q, until)
            through = end[r] >= rq.span[q, END]
            rq.record[r, q, JUDGED_UNTIL] = min(end[r], rq.span[q, END])
            if rq.table[q, WHEN] == THROUGHOUT:
                if not np.isnan(rq.record[r, q, FIRST_FAILURE]):
                    rq.record[r, q, OUTCOME] = FAILED
                elif through:
                    rq.record[r, q, OUTCOME] = MET
            elif rq.table[q, WHEN] == ONCE:
                if not np.isnan(rq.record[r, q, FIRST_MET]):
                    rq.record[r, q, OUTCOME] = MET
                elif through:
                    rq.record[r, q, OUTCOME] = FAILED
