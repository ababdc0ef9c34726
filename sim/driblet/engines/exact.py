"""The exact engine: Gillespie's direct method (J. Phys. Chem. 81:2340, 1977) with a dependency graph.

Propensities are kept per channel and their running sums are rebuilt from the first changed channel on, in channel order,
so that nothing drifts over any number of events. Two draws an event: the waiting time, then the channel.
"""

from __future__ import annotations

import numpy as np
from numba import njit

from driblet.engines.compile_cache import CACHE
from driblet.engines.contract import (
    COUNT_OVERFLOW,
    LARGEST_COUNT,
    NOTHING_CAN_FIRE,
    RUNNING,
    TIME_REACHED,
)
from driblet.engines.random_stream import minus_log, next_word, selection_uniform, waiting_uniform


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def propensity(network, constant, counts, channel):  # type: ignore[no-untyped-def]
    """constant times the falling factorials of the channel's reactants; counts : (N + 1,)."""
    a, b, c = network.reactant[channel, 0], network.reactant[channel, 1], network.reactant[channel, 2]
    value = constant * counts[np.uint64(a)]
    value *= counts[np.uint64(b)] - network.offset[channel, 1]
    return value * (counts[np.uint64(c)] - network.offset[channel, 2])


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def select(cumulative, target):  # type: ignore[no-untyped-def]
    """The channel whose share of the cumulative propensities holds `target`, 0 <= target < total.

    A channel of propensity zero has an empty share and is never selected.
    """
    channel = np.uint64(0)
    while cumulative[channel] <= target:
        channel += np.uint64(1)
    return channel


@njit(nogil=True, cache=CACHE, error_model="numpy")
def advance(network, rates, state, samples, budget):  # type: ignore[no-untyped-def]
    """See contract.py. rates : float64, (R, M), 1/s per product of falling factorials."""
    replicates, channels = rates.shape
    species = state.counts.shape[1] - 1
    grid_size = samples.time.size
    single = np.empty(channels)
    cumulative = np.empty(channels)
    left = budget
    for r in range(replicates):
        if state.reason[r] != RUNNING:
            continue
        if left <= 0:
            break
        counts, constants, firings = state.counts[r], rates[r], state.firings[r]
        for j in range(channels):
            single[j] = propensity(network, constants[j], counts, j)
        clock = state.clock[r]
        sample = state.next_sample[r]
        next_time = samples.time[sample]
        first = 0
        while left > 0:
            total = 0.0 if first == 0 else cumulative[np.uint64(first - 1)]
            for j in range(np.uint64(first), np.uint64(channels)):
                total += single[j]
                cumulative[j] = total
            # a total of zero makes the wait infinite, so the grid below ends the replicate
            wait = np.inf
            if total > 0.0:
                wait = minus_log(waiting_uniform(next_word(state.stream, r))) / total
            later = clock + wait
            if not later <= next_time:
                while sample < grid_size and not later <= samples.time[sample]:
                    for i in range(species):
                        samples.counts[r, sample, i] = np.int64(counts[i])
                    for j in range(channels):
                        samples.firings[r, sample, j] = firings[j]
                    sample += 1
                if sample == grid_size:
                    state.reason[r] = TIME_REACHED if total > 0.0 else NOTHING_CAN_FIRE
                    break
                next_time = samples.time[sample]
            clock = later
            j = select(cumulative, selection_uniform(next_word(state.stream, r)) * total)
            for k in range(np.uint64(network.change_start[j]), np.uint64(network.change_start[j + np.uint64(1)])):
                counts[np.uint64(network.change_species[k])] += network.change_amount[k]
            for k in range(np.uint64(network.depend_start[j]), np.uint64(network.depend_start[j + np.uint64(1)])):
                d = np.uint64(network.depend_channel[k])
                single[d] = propensity(network, constants[d], counts, d)
            first = network.first_dependent[j]
            firings[j] += 1
            left -= 1
        state.clock[r] = clock
        state.next_sample[r] = sample
        for i in range(species):
            if counts[i] > LARGEST_COUNT - 1.6e7:
                state.reason[r] = COUNT_OVERFLOW
    return budget - left
