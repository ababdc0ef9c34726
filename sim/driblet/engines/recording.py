"""What kernels record besides advancing: the grid, windowed time integrals, histograms, events.

The state is constant between two events, so everything here is exact. `counts`, `firings` and `running` are (thing, column)
with one replicate a column: the arrays of a pack of lanes, or those of the state transposed. So is `pace`, propensities
with a factor over their constants (factors.py). All are passed as views of no particular layout, so that one compiled form
serves both.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE, inner
from driblet.engines.vector_hints import seldom_called


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def monomial(factor, offset, q, counts, column):  # type: ignore[no-untyped-def]
    """Monomial q of one replicate's counts."""
    value = counts[np.uint64(factor[q, 0]), column] - offset[q, 0]
    value *= counts[np.uint64(factor[q, 1]), column] - offset[q, 1]
    return value * (counts[np.uint64(factor[q, 2]), column] - offset[q, 2])


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def next_mark(time, edge, next_edge, r, sample):  # type: ignore[no-untyped-def]
    """The next time at which replicate r has something to record, inf when there is none."""
    grid_point = time[sample] if sample < time.size else np.inf
    window_edge = edge[next_edge[r]] if next_edge[r] < edge.size else np.inf
    return min(grid_point, window_edge)


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def sample_until(time, sampled_counts, sampled_firings, r, sample, later, counts, firings, column):  # type: ignore[no-untyped-def]
    """Record the state on each grid point before `later`; returns the index of the next grid point."""
    while sample < time.size and not later <= time[sample]:
        for i in range(sampled_counts.shape[2]):
            sampled_counts[r, sample, i] = np.int64(counts[np.uint64(i), column])
        for j in range(sampled_firings.shape[2]):
            sampled_firings[r, sample, j] = firings[np.uint64(j), column]
        sample += 1
    return sample


@inner
def hold_samples(time, sampled_counts, sampled_firings, r, sample, counts, firings, column):  # type: ignore[no-untyped-def]
    """Record the state on the rest of the grid; returns its length."""
    seldom_called()
    return sample_until(time, sampled_counts, sampled_firings, r, sample, np.inf, counts, firings, column)


@inner
def integrate(factor, offset, paced, counts, running, pace, column, span):  # type: ignore[no-untyped-def]
    """Add a time span of constant counts to the running integrals."""
    for q in range(np.uint64(factor.shape[0])):
        running[q, column] += monomial(factor, offset, q, counts, column) * span
    for k in range(paced.shape[0]):
        running[np.uint64(paced[k, 0]), column] += pace[np.uint64(paced[k, 1]), column] * span


@inner
def settle_all(factor, offset, paced, counts, running, settled, pace, column, until):  # type: ignore[no-untyped-def]
    """Integrate every monomial from where it is settled up to `until`."""
    seldom_called()
    for q in range(np.uint64(factor.shape[0])):
        running[q, column] += monomial(factor, offset, q, counts, column) * (until - settled[q, column])
    for k in range(paced.shape[0]):
        q = np.uint64(paced[k, 0])
        running[q, column] += pace[np.uint64(paced[k, 1]), column] * (until - settled[q, column])
    for q in range(np.uint64(factor.shape[0])):
        settled[q, column] = until


@inner
def close_windows(averages, r, since, later, counts, firings, running, settled, pace, column):  # type: ignore[no-untyped-def]
    """Integrate up to each edge before `later` and close its window; returns the time integrated up to."""
    seldom_called()
    edge = averages.next_edge[r]
    while edge < averages.edge.size and not later <= averages.edge[edge]:
        if averages.settle_start.size > 0:
            settle_all(
                averages.factor, averages.offset, averages.paced, counts, running, settled, pace, column, averages.edge[edge]
            )  # fmt: skip
        else:
            span = averages.edge[edge] - since
            integrate(averages.factor, averages.offset, averages.paced, counts, running, pace, column, span)
        since = averages.edge[edge]
        for q in range(averages.factor.shape[0]):
            if edge > 0:
                averages.integral[r, edge - 1, q] = running[q, column]
            running[q, column] = 0.0
        for j in range(averages.firings.shape[2]):
            averages.firings[r, edge, j] = firings[j, column]
        edge += 1
    averages.next_edge[r] = edge
    return since


@inner
def cut_windows(averages, r, since, end, counts, firings, running, settled, pace, column):  # type: ignore[no-untyped-def]
    """Keep what a replicate that stops at `end` has of its window, and hold its firings at the later edges."""
    seldom_called()
    if averages.settle_start.size > 0:
        settle_all(averages.factor, averages.offset, averages.paced, counts, running, settled, pace, column, end)
    else:
        integrate(averages.factor, averages.offset, averages.paced, counts, running, pace, column, end - since)
    edge = averages.next_edge[r]
    if 0 < edge < averages.edge.size:
        for q in range(averages.factor.shape[0]):
            averages.integral[r, edge - 1, q] = running[q, column]
    for e in range(edge, averages.edge.size):
        for j in range(averages.firings.shape[2]):
            averages.firings[r, e, j] = firings[j, column]


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def occupy(seconds, since, span, width, r, s, count, until):  # type: ignore[no-untyped-def]
    """Credit followed species s with the time it has stood at `count`, up to `until`."""
    begin = max(since[r, s], span[0])
    end = min(until, span[1])
    if end > begin:
        b = min(np.int64(count) // width[s], np.int64(seconds.shape[2] - 1))
        seconds[r, s, b] += end - begin
    since[r, s] = until


@inner
def settle_histograms(occupancy, r, counts, column, end):  # type: ignore[no-untyped-def]
    """Credit every followed species with the time up to the end of its replicate."""
    seldom_called()
    seconds, since, span, width = occupancy.seconds, occupancy.since, occupancy.span, occupancy.width
    for s in range(occupancy.species.size):
        occupy(seconds, since, span, width, r, s, counts[occupancy.species[s], column], end)
