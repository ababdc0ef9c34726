"""Requirements over a pack of lanes: the signs of all polynomials at once, and a closer look where one has changed.

A truth changes rarely, so that the common case is a few multiplications a lane and a comparison with what was true before.
Results are those of the scalar kernel, bit by bit: values and sums are taken in the same order.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from driblet.engines.compile_cache import inner
from driblet.engines.judging import all_decided, cross_edges, leaf_change, log_ratio, part, turn
from driblet.engines.requirement_arrays import END_LEAF, FIRST_LEAF, RATIO, SIGN
from driblet.engines.vector_hints import seldom_called, separate_arrays_wide_vectors

VALUE, BELOW, PRODUCT, CHANGED, SCRATCH = range(5)
U = np.uint64
_ONE = U(1)


@inner
def enter_judgement(  # type: ignore[no-untyped-def]
    coefficient, leaf_truth, leaf_value, leaf_sum, moment_leaves, integrated_to, next_edge, halt, lanes, lane, r
):
    """Put what is known of replicate r into a lane."""
    seldom_called()
    terms = coefficient.shape[1]
    for t in range(terms):
        lanes.judged[SCRATCH + t, lane] = coefficient[r, t]
    for k in range(leaf_sum.shape[1]):
        lanes.judged[SCRATCH + terms + k, lane] = leaf_truth[r, k] if k < moment_leaves else leaf_value[r, k]
        lanes.leaf_sum[k, lane] = leaf_sum[r, k]
    lanes.integrated_to[lane] = integrated_to[r]
    lanes.mark[lane] = -1.0 if halt[r] < np.inf else min(lanes.mark[lane], next_edge[r])


@inner
def leave_judgement(leaf_value, leaf_sum, integrated_to, moment_leaves, lanes, lane, r):  # type: ignore[no-untyped-def]
    """Put the averages of a lane back into the rows of its replicate, integrated up to its clock."""
    seldom_called()
    standing = lanes.judged.shape[0] - leaf_sum.shape[1]
    for k in range(moment_leaves, leaf_sum.shape[1]):
        leaf_value[r, k] = lanes.judged[standing + k, lane]
        leaf_sum[r, k] = lanes.leaf_sum[k, lane] + part(leaf_value[r, k], lanes.clock[lane] - lanes.integrated_to[lane])
    integrated_to[r] = max(lanes.integrated_to[lane], lanes.clock[lane])


def lane_code(leaf, term_start, factor_start, species) -> NDArray[np.int64]:  # type: ignore[no-untyped-def]
    """The leaves as one row of numbers, read from left to right by `judge_lanes`: of each leaf its kind, whether it is
    strict, and one or two polynomials; of each polynomial the number of terms; of each term its factors and their species."""
    code: list[int] = []
    for kind, strict, first, last in leaf.tolist():
        code += [kind, strict]
        for p in range(first, last + 1):
            terms = range(term_start[p], term_start[p + 1])
            code.append(len(terms))
            for t in terms:
                factors = species[factor_start[t] : factor_start[t + 1]].tolist()
                code += [len(factors), *factors]
    return np.array(code, dtype=np.int64)


@inner
def judge_lanes(code, offset, counts, judged, moment_leaves, leaves, active, width):  # type: ignore[no-untyped-def]
    """Look at every leaf in every lane after a firing: the values of averages are kept, and it is told how many lanes had the
    truth of a moment changed; row CHANGED says which.

    judged : rows VALUE, BELOW, PRODUCT, CHANGED, then the coefficients, then what stands of each leaf: truth or value.
    Values are taken in the order of judging.polynomial_value.
    """
    separate_arrays_wide_vectors()
    standing = U(judged.shape[0] - leaves)
    at, f, t = U(0), U(0), U(SCRATCH)
    for lane in range(width):
        judged[CHANGED, lane] = 0.0
    for k in range(U(leaves)):
        kind, strict = code[at], code[at + _ONE]
        at += U(2)
        into = U(VALUE)
        for _ in range(1 if kind == SIGN else 2):
            for lane in range(width):
                judged[into, lane] = 0.0
            terms = code[at]
            at += _ONE
            for _ in range(terms):
                factors = U(code[at])
                at += _ONE
                a, o = U(0), 0.0
                if factors > U(0):
                    a, o = U(code[at]), offset[f]
                if factors == _ONE:
                    for lane in range(width):
                        judged[into, lane] += judged[t, lane] * (counts[a, lane] - o)
                elif factors == U(2):
                    b, m = U(code[at + _ONE]), offset[f + _ONE]
                    for lane in range(width):
                        judged[into, lane] += judged[t, lane] * (counts[a, lane] - o) * (counts[b, lane] - m)
                else:
                    for lane in range(width):
                        judged[PRODUCT, lane] = judged[t, lane]
                    for n in range(factors):
                        b, m = U(code[at + n]), offset[f + n]
                        for lane in range(width):
                            judged[PRODUCT, lane] *= counts[b, lane] - m
                    for lane in range(width):
                        judged[into, lane] += judged[PRODUCT, lane]
                at += factors
                f += factors
                t += _ONE
            into = U(BELOW)
        if k < U(moment_leaves):
            for lane in range(width):
                value = judged[VALUE, lane]
                truth = 1.0 if value < 0.0 or (strict == 0 and value == 0.0) else 0.0
                judged[CHANGED, lane] += 0.0 if truth == judged[standing + k, lane] else 1.0
        elif kind == SIGN:
            for lane in range(width):
                judged[standing + k, lane] = judged[VALUE, lane]
        elif kind == RATIO:
            for lane in range(width):
                judged[standing + k, lane] = judged[VALUE, lane] / judged[BELOW, lane]
        else:
            for lane in range(width):
                judged[standing + k, lane] = log_ratio(kind, judged[VALUE, lane], judged[BELOW, lane])
    total = 0
    for lane in range(active):
        total += 1 if judged[CHANGED, lane] > 0.0 else 0
    return total


@inner
def integrate_judged(judged, sums, clock, integrated_to, first, width):  # type: ignore[no-untyped-def]
    """Add the time up to the clocks to the sum of every average, the leaves from `first` on."""
    separate_arrays_wide_vectors()
    standing = U(judged.shape[0] - sums.shape[0])
    for k in range(U(first), U(sums.shape[0])):
        for lane in range(width):
            sums[k, lane] += part(judged[standing + k, lane], clock[lane] - integrated_to[lane])
    for lane in range(width):
        integrated_to[lane] = clock[lane]


@inner
def look_closer(  # type: ignore[no-untyped-def]
    moments, stops, table, span, leaf, program, term_start, factor_start, species, offset, coefficient, leaf_truth, record,
    halt, counts, lanes, lane, r,
):  # fmt: skip
    """Judge the moments of a lane of which a truth has changed."""
    seldom_called()
    news = False
    standing = lanes.judged.shape[0] - leaf.shape[0]
    for q in range(moments):
        changed = 0
        for k in range(table[q, FIRST_LEAF], table[q, END_LEAF]):
            changed += leaf_change(
                leaf, term_start, factor_start, species, offset, coefficient, leaf_truth, r, k, counts, lane
            )
            lanes.judged[standing + k, lane] = leaf_truth[r, k]
        if changed > 0:
            news |= turn(table, span, program, leaf_truth, record, r, q, lanes.clock[lane])
    if stops and news and all_decided(moments, table, span, record, r, lanes.clock[lane]):
        halt[r] = lanes.clock[lane]
        lanes.mark[lane] = -1.0


@inner
def cross_lane_edges(  # type: ignore[no-untyped-def]
    moments, moment_leaves, table, span, leaf, program, leaf_value, leaf_truth, record, integrated_to, next_edge, sums, lanes,
    lane, r, until,
):  # fmt: skip
    """Judge the windows of a lane that end before `until`."""
    seldom_called()
    standing = lanes.judged.shape[0] - leaf.shape[0]
    for k in range(moment_leaves, leaf.shape[0]):
        leaf_value[r, k] = lanes.judged[standing + k, lane]
    integrated_to[r] = lanes.integrated_to[lane]
    cross_edges(
        moments, moment_leaves, table, span, leaf, program, leaf_value, leaf_truth, record, integrated_to, next_edge, sums, r,
        lane, until,
    )  # fmt: skip
    lanes.integrated_to[lane] = integrated_to[r]
