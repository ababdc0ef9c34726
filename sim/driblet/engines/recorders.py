"""Makes the arrays that kernels record into (contract.py says what they hold); no kernels here, so that readers need none."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from driblet.engines.contract import Averages, EnsembleState, EventLog, NetworkArrays, Occupancy, Recorders
from driblet.engines.requirement_arrays import Requirements

INTS = np.int64
Ints = NDArray[np.int64]
MOST_SUMMED_ALL = 200  # channels up to which every event adds to all integrals: what lanes do faster


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
    settle: tuple[Ints, Ints] | None = None,
) -> Averages:
    """Averages of the given monomials over the windows between `edge_s`; settle : from settle_plan, or None for all at every
    event. See contract.Averages."""
    edges, monomials = len(edge_s), len(factor)
    paced = np.zeros((0, 2), dtype=INTS) if paced is None else np.array(paced, dtype=INTS, order="C")
    pace_row = np.full(monomials, -1, dtype=np.int32)
    pace_row[paced[:, 0]] = paced[:, 1]
    return Averages(
        np.array(edge_s, dtype=np.float64),
        np.array(factor, dtype=np.int32, order="C").reshape(monomials, 3),
        np.array(offset, dtype=np.float32, order="C").reshape(monomials, 3),
        paced,
        np.array([] if settle is None else settle[0], dtype=np.int32),
        np.array([] if settle is None else settle[1], dtype=np.int32),
        pace_row,
        np.zeros((replicates, max(0, edges - 1), monomials)),
        np.zeros((replicates, edges, channels), dtype=INTS),
        np.zeros((replicates, monomials)),
        np.zeros((replicates, 0 if settle is None else monomials)),
        np.zeros(replicates, dtype=INTS),
    )


def settle_plan(
    network: NetworkArrays, factor: Ints, paced: Ints, most_summed_all: int = MOST_SUMMED_ALL
) -> tuple[Ints, Ints] | None:
    """Which monomials a firing of each channel changes, CSR; None where every event adds to all of them.

    paced : of contract.Averages, its rows in the order of the channels with a factor. Adding to all costs in proportion to
    their number, which lanes share; settling costs about the same in any network.
    """
    channels = len(network.reactant)
    if channels <= most_summed_all:
        return None
    species = int(max(factor.max(initial=0), network.change_species.max(initial=0))) + 1
    users: list[list[int]] = [[] for _ in range(species)]
    for q, used in enumerate(factor.tolist()):
        for i in set(used):
            users[i].append(q)
    factored = np.flatnonzero(network.factor_start[:, 2] > network.factor_start[:, 0]).tolist()
    paced_of = dict(zip(factored, paced[:, 0].tolist(), strict=True))
    start, found = [0], []
    for j in range(channels):
        changed = network.change_species[network.change_start[j] : network.change_start[j + 1]].tolist()
        depending = network.depend_channel[network.depend_start[j] : network.depend_start[j + 1]].tolist()
        one = {q for i in changed for q in users[i]} | {paced_of[d] for d in depending if d in paced_of}
        found += sorted(one)
        start.append(len(found))
    return np.array(start, dtype=INTS), np.array(found, dtype=INTS)


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
    log: EventLog | None = None,
    requirements: Requirements | None = None,
) -> Recorders:
    """The given recorders, the others off."""
    replicates, channels = state.firings.shape
    species = state.counts.shape[1] - 1
    return Recorders(
        averages or no_averages(replicates, channels),
        occupancy or no_occupancy(replicates, species),
        log or new_log(replicates, 0),
        requirements,
    )
