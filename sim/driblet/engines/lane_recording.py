"""Time integrals and histograms of a pack of lanes; recording.py has what is done to one lane at a time."""

from __future__ import annotations

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE, inner
from driblet.engines.vector_hints import separate_arrays_wide_vectors

U = np.uint64


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


@inner
def settle_lanes(settle_start, settle, factor, offset, pace_row, chosen, clock, counts, running, settled, pace, active):  # type: ignore[no-untyped-def]
    """Integrate the monomials that a firing is about to change up to the time of the firing; see scalar.settle_row."""
    nothing = settle_start.size - 1
    for lane in range(active):
        j = np.int64(chosen[lane])
        if j == nothing:
            continue
        until = clock[lane]
        for k in range(U(settle_start[j]), U(settle_start[j + 1])):
            q = U(settle[k])
            value = counts[U(factor[q, 0]), lane] - offset[q, 0]
            value *= counts[U(factor[q, 1]), lane] - offset[q, 1]
            value *= counts[U(factor[q, 2]), lane] - offset[q, 2]
            if pace_row[q] >= 0:
                value = pace[U(pace_row[q]), lane]
            running[q, lane] += value * (until - settled[q, lane])
            settled[q, lane] = until


@inner
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
