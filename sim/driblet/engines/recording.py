"""What kernels record besides advancing: the grid, windowed time integrals, histograms, conditions, events.

The state is constant between two events, so everything here is exact. `counts`, `firings` and `running` are (thing, column)
with one replicate a column: the arrays of a pack of lanes, or those of the state transposed. So is `pace`, propensities
with a factor over their constants (factors.py). All are passed as views of no particular layout, so that one compiled form
serves both.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from driblet.engines.compile_cache import CACHE
from driblet.engines.contract import (
    Averages,
    Conditions,
    EnsembleState,
    EventLog,
    Occupancy,
    Recorders,
)
from driblet.engines.judging import Requirements

INTS = np.int64


def no_averages(replicates: int, channels: int) -> Averages:
    """Averages that are off."""
    return new_averages(np.zeros(0), np.zeros((0, 3), dtype=INTS), np.zeros((0, 3)), replicates, channels)


def new_averages(
    edge_s: NDArray[np.float64],
    factor: NDArray[np.int64],
    offset: NDArray[np.float64],
    replicates: int,
    channels: int,
    paced: NDArray[np.int64] | None = None,
) -> Averages:
    """Averages of the given monomials over the windows between `edge_s`; see contract.Averages."""
    edges, monomials = len(edge_s), len(factor)
    return Averages(
        np.array(edge_s, dtype=np.float64),
        np.array(factor, dtype=INTS, order="C").reshape(monomials, 3),
        np.array(offset, dtype=np.float64, order="C").reshape(monomials, 3),
        np.zeros((0, 2), dtype=INTS) if paced is None else np.array(paced, dtype=INTS, order="C"),
        np.zeros((replicates, max(0, edges - 1), monomials)),
        np.zeros((replicates, edges, channels), dtype=INTS),
        np.zeros((replicates, monomials)),
        np.zeros(replicates, dtype=INTS),
    )


def new_occupancy(
    species: NDArray[np.int64],
    width: NDArray[np.int64],
    bins: int,
    span_s: tuple[float, float],
    replicates: int,
    free_species: int,
) -> Occupancy:
    """Histograms of the given species, `bins` each; see contract.Occupancy."""
    slot = np.full(free_species + 2, -1, dtype=INTS)
    slot[species] = np.arange(len(species))
    return Occupancy(
        slot,
        np.array(species, dtype=INTS),
        np.array(width, dtype=INTS),
        np.array(span_s, dtype=np.float64),
        np.zeros((replicates, len(species), bins)),
        np.zeros((replicates, len(species))),
    )


def no_occupancy(replicates: int, free_species: int) -> Occupancy:
    """Histograms that are off."""
    none = np.zeros(0, dtype=INTS)
    return new_occupancy(none, none, 0, (0.0, 0.0), replicates, free_species)


def new_conditions(
    term_start: NDArray[np.int64],
    weight: NDArray[np.float64],
    factor: NDArray[np.int64],
    offset: NDArray[np.float64],
    span_s: NDArray[np.float64],
    stops: NDArray[np.bool_],
) -> Conditions:
    """Conditions, none met yet; weight : (replicates, terms). See contract.Conditions."""
    terms = weight.shape[1]
    return Conditions(
        np.array(term_start, dtype=INTS),
        np.array(weight, dtype=np.float64, order="C"),
        np.array(factor, dtype=INTS, order="C").reshape(terms, 3),
        np.array(offset, dtype=np.float64, order="C").reshape(terms, 3),
        np.array(span_s, dtype=np.float64, order="C").reshape(len(term_start) - 1, 2),
        np.array(stops, dtype=INTS),
        np.full((weight.shape[0], len(term_start) - 1), np.inf),
    )


def no_conditions(replicates: int) -> Conditions:
    """Conditions that are off."""
    none, no_index = np.zeros(0), np.zeros(0, dtype=INTS)
    start, stops = np.zeros(1, dtype=INTS), np.zeros(0, dtype=np.bool_)
    return new_conditions(start, np.zeros((replicates, 0)), no_index, none, none, stops)


def new_log(replicates: int, events: int) -> EventLog:
    """An event log of `events` entries a replicate; 0 switches it off."""
    return EventLog(
        np.zeros((replicates, events)),
        np.zeros((replicates, events), dtype=np.int32),
        np.zeros(replicates, dtype=INTS),
    )


def recorders_for(
    state: EnsembleState,
    averages: Averages | None = None,
    occupancy: Occupancy | None = None,
    conditions: Conditions | None = None,
    log: EventLog | None = None,
    requirements: Requirements | None = None,
) -> Recorders:
    """The given recorders, the others off."""
    replicates, channels = state.firings.shape
    species = state.counts.shape[1] - 1
    return Recorders(
        averages or no_averages(replicates, channels),
        occupancy or no_occupancy(replicates, species),
        conditions or no_conditions(replicates),
        log or new_log(replicates, 0),
        requirements,
    )


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


@njit(nogil=True, cache=CACHE, error_model="numpy")
def hold_samples(time, sampled_counts, sampled_firings, r, sample, counts, firings, column):  # type: ignore[no-untyped-def]
    """Record the state on the rest of the grid; returns its length."""
    return sample_until(time, sampled_counts, sampled_firings, r, sample, np.inf, counts, firings, column)


@njit(nogil=True, cache=CACHE, error_model="numpy")
def integrate(factor, offset, paced, counts, running, pace, column, span):  # type: ignore[no-untyped-def]
    """Add a time span of constant counts to the running integrals."""
    for q in range(np.uint64(factor.shape[0])):
        running[q, column] += monomial(factor, offset, q, counts, column) * span
    for k in range(paced.shape[0]):
        running[np.uint64(paced[k, 0]), column] += pace[np.uint64(paced[k, 1]), column] * span


@njit(nogil=True, cache=CACHE, error_model="numpy")
def close_windows(averages, r, since, later, counts, firings, running, pace, column):  # type: ignore[no-untyped-def]
    """Integrate up to each edge before `later` and close its window; returns the time integrated up to."""
    edge = averages.next_edge[r]
    while edge < averages.edge.size and not later <= averages.edge[edge]:
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


@njit(nogil=True, cache=CACHE, error_model="numpy")
def cut_windows(averages, r, since, end, counts, firings, running, pace, column):  # type: ignore[no-untyped-def]
    """Keep what a replicate that stops at `end` has of its window, and hold its firings at the later edges."""
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


@njit(nogil=True, cache=CACHE, error_model="numpy")
def settle_histograms(occupancy, r, counts, column, end):  # type: ignore[no-untyped-def]
    """Credit every followed species with the time up to the end of its replicate."""
    seconds, since, span, width = occupancy.seconds, occupancy.since, occupancy.span, occupancy.width
    for s in range(occupancy.species.size):
        occupy(seconds, since, span, width, r, s, counts[occupancy.species[s], column], end)


@njit(nogil=True, cache=CACHE, error_model="numpy")
def look_at_conditions(conditions, r, since, later, counts, column):  # type: ignore[no-untyped-def]
    """Note conditions first met by the state that stands from `since` to `later`; returns when to stop, inf if not."""
    stop = np.inf
    for c in range(conditions.stops.size):
        begin, end = conditions.span[c, 0], conditions.span[c, 1]
        if conditions.first_met[r, c] < np.inf or not later > begin or since > end:
            continue
        value = 0.0
        for t in range(conditions.term_start[c], conditions.term_start[c + 1]):
            term = monomial(conditions.factor, conditions.offset, t, counts, column)
            value += conditions.weight[r, t] * term
        if value > 0.0:
            moment = max(since, begin)
            conditions.first_met[r, c] = moment
            if conditions.stops[c] != 0 and moment < stop:
                stop = moment
    return stop
