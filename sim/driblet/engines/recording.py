"""What kernels record besides advancing: the grid, windowed time integrals, histograms, conditions, events.

The state is constant between two events, so everything here is exact. `counts`, `firings` and `running` are one
replicate's, as a row of its arrays or as a column of a pack of lanes.
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
) -> Averages:
    """Averages of the given monomials over the windows between `edge_s`; see contract.Averages."""
    edges, monomials = len(edge_s), len(factor)
    return Averages(
        np.array(edge_s, dtype=np.float64),
        np.array(factor, dtype=INTS, order="C").reshape(monomials, 3),
        np.array(offset, dtype=np.float64, order="C").reshape(monomials, 3),
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
) -> Recorders:
    """The given recorders, the others off."""
    replicates, channels = state.firings.shape
    species = state.counts.shape[1] - 1
    return Recorders(
        averages or no_averages(replicates, channels),
        occupancy or no_occupancy(replicates, species),
        conditions or no_conditions(replicates),
        log or new_log(replicates, 0),
    )


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def monomial(factor, offset, q, counts):  # type: ignore[no-untyped-def]
    """Monomial q of one replicate's counts."""
    value = counts[np.uint64(factor[q, 0])] - offset[q, 0]
    value *= counts[np.uint64(factor[q, 1])] - offset[q, 1]
    return value * (counts[np.uint64(factor[q, 2])] - offset[q, 2])


@njit(nogil=True, cache=CACHE, error_model="numpy")
def next_mark(samples, averages, r, sample):  # type: ignore[no-untyped-def]
    """The next time at which replicate r has something to record, inf when there is none."""
    mark = samples.time[sample] if sample < samples.time.size else np.inf
    edge = averages.next_edge[r]
    if edge < averages.edge.size and averages.edge[edge] < mark:
        mark = averages.edge[edge]
    return mark


@njit(nogil=True, cache=CACHE, error_model="numpy")
def integrate(averages, counts, running, span):  # type: ignore[no-untyped-def]
    """Add a time span of constant counts to the running integrals."""
    for q in range(averages.factor.shape[0]):
        running[q] += monomial(averages.factor, averages.offset, q, counts) * span


@njit(nogil=True, cache=CACHE, error_model="numpy")
def close_windows(averages, r, since, later, counts, firings, running):  # type: ignore[no-untyped-def]
    """Integrate up to each edge before `later` and close its window; returns the time integrated up to."""
    edge = averages.next_edge[r]
    while edge < averages.edge.size and not later <= averages.edge[edge]:
        integrate(averages, counts, running, averages.edge[edge] - since)
        since = averages.edge[edge]
        for q in range(running.size):
            if edge > 0:
                averages.integral[r, edge - 1, q] = running[q]
            running[q] = 0.0
        for j in range(firings.size):
            averages.firings[r, edge, j] = firings[j]
        edge += 1
    averages.next_edge[r] = edge
    return since


@njit(nogil=True, cache=CACHE, error_model="numpy")
def sample_until(samples, r, sample, later, counts, firings):  # type: ignore[no-untyped-def]
    """Record the state on each grid point before `later`; returns the index of the next grid point.

    firings : at least M entries.
    """
    while sample < samples.time.size and not later <= samples.time[sample]:
        for i in range(samples.counts.shape[2]):
            samples.counts[r, sample, i] = np.int64(counts[i])
        for j in range(samples.firings.shape[2]):
            samples.firings[r, sample, j] = firings[j]
        sample += 1
    return sample


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def occupy(occupancy, r, s, count, until):  # type: ignore[no-untyped-def]
    """Credit followed species s with the time it has stood at `count`, up to `until`."""
    begin = max(occupancy.since[r, s], occupancy.span[0])
    end = min(until, occupancy.span[1])
    if end > begin:
        b = min(np.int64(count) // occupancy.width[s], np.int64(occupancy.seconds.shape[2] - 1))
        occupancy.seconds[r, s, b] += end - begin
    occupancy.since[r, s] = until


@njit(nogil=True, cache=CACHE, error_model="numpy")
def holds(conditions, r, c, counts):  # type: ignore[no-untyped-def]
    """Whether condition c is met by these counts."""
    value = 0.0
    for t in range(conditions.term_start[c], conditions.term_start[c + 1]):
        value += conditions.weight[r, t] * monomial(conditions.factor, conditions.offset, t, counts)
    return value > 0.0


@njit(nogil=True, cache=CACHE, error_model="numpy")
def look_at_conditions(conditions, r, since, later, counts):  # type: ignore[no-untyped-def]
    """Note conditions first met by the state that stands from `since` to `later`; returns when to stop, inf if not."""
    stop = np.inf
    for c in range(conditions.stops.size):
        if conditions.first_met[r, c] < np.inf:
            continue
        begin, end = conditions.span[c, 0], conditions.span[c, 1]
        if not later > begin or since > end or not holds(conditions, r, c, counts):
            continue
        moment = max(since, begin)
        conditions.first_met[r, c] = moment
        if conditions.stops[c] != 0 and moment < stop:
            stop = moment
    return stop


@njit(nogil=True, cache=CACHE, error_model="numpy")
def close(samples, recorders, r, sample, since, end, stopped, counts, firings, running):  # type: ignore[no-untyped-def]
    """Finish the record of a replicate that ends at `end`: hold the rest of the grid, close or cut its windows."""
    averages, occupancy = recorders.averages, recorders.occupancy
    if stopped:
        if averages.edge.size > 0:
            since = close_windows(averages, r, since, end, counts, firings, running)
            integrate(averages, counts, running, end - since)
            edge = averages.next_edge[r]
            if 0 < edge < averages.edge.size:
                for q in range(running.size):
                    averages.integral[r, edge - 1, q] = running[q]
            for e in range(edge, averages.edge.size):
                for j in range(firings.size):
                    averages.firings[r, e, j] = firings[j]
        sample = sample_until(samples, r, sample, np.inf, counts, firings)
    for s in range(occupancy.species.size):
        occupy(occupancy, r, s, counts[occupancy.species[s]], end)
    return sample
