"""The working memory of a pack of lanes, and how a replicate gets into a lane and out of it. See lanes.py."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.engines.choice import LANES
from driblet.engines.compile_cache import inner
from driblet.engines.contract import (
    COUNT_OVERFLOW,
    OVERFLOW_GUARD,
    RUNNING,
    Averages,
    EnsembleState,
    NetworkArrays,
    Recorders,
)
from driblet.engines.factors import factored_channels, most_nodes
from driblet.engines.lane_judging import SCRATCH, lane_code
from driblet.engines.requirement_arrays import no_requirements
from driblet.engines.sums import SumRows
from driblet.engines.vector_hints import seldom_called

_CACHE_LINE = 64


class LaneTable(NamedTuple):
    """What a channel multiplies and changes, laid out for lanes.

    factors : int64, (M,), how many of its three factors are needed: 1, 2 or 3
    changes : int, K, changed species a channel at most; channels with fewer change a row that is never read
    species : int64, (M + 1, K); place : uint64, (M + 1, K), the same times the lanes; amount : float64, (M + 1, K)
    Row M changes nothing: it is what a lane fires that must not fire.
    """

    factors: NDArray[np.int64]
    changes: int
    species: NDArray[np.int64]
    place: NDArray[np.uint64]
    amount: NDArray[np.float64]


class Lanes(NamedTuple):
    """The working memory of W lanes; (.., W) arrays. See contract.py for what each holds of its replicate.

    counts : N + 2 rows, the dummy of count 1 and one that is never read; common_rate : (M + 2 T,), used when all lanes
    share them; pace, scratch : see factors.py; chosen : the channel, as a double; since : time up to which integrals are
    taken; mark : the next time with something to record; row : the replicate;
    degree : how many factors of each monomial are needed.
    """

    counts: NDArray[np.float64]
    rate: NDArray[np.float64]
    common_rate: NDArray[np.float64]
    sums: NDArray[np.float64]
    firings: NDArray[np.int64]
    stream: NDArray[np.uint64]
    pace: NDArray[np.float64]
    scratch: NDArray[np.float64]
    running: NDArray[np.float64]
    settled: NDArray[np.float64]
    judged: NDArray[np.float64]
    leaf_sum: NDArray[np.float64]
    integrated_to: NDArray[np.float64]
    code: NDArray[np.int64]
    degree: NDArray[np.int64]
    clock: NDArray[np.float64]
    since: NDArray[np.float64]
    mark: NDArray[np.float64]
    uniform: NDArray[np.float64]
    target: NDArray[np.float64]
    chosen: NDArray[np.float64]
    row: NDArray[np.int64]
    sample: NDArray[np.int64]


def lane_table(network: NetworkArrays, species: int, lanes: int = LANES) -> LaneTable:
    """Lay out a network of `species` free species."""
    channels = len(network.reactant)
    needed = np.ones(channels, dtype=np.int64)
    for slot in (1, 2):
        needed[network.reactant[:, slot] != species] = slot + 1
    number = np.diff(network.change_start)
    changes = int(number.max(initial=1))
    index = np.full((channels + 1, changes), species + 1, dtype=np.int64)
    amount = np.zeros((channels + 1, changes))
    filled = np.arange(changes) < np.append(number, 0)[:, None]
    index[filled], amount[filled] = network.change_species, network.change_amount
    return LaneTable(needed, changes, index, (index * lanes).astype(np.uint64), amount)


def new_lanes(
    network: NetworkArrays, state: EnsembleState, rows: SumRows, recorders: Recorders, lanes: int = LANES
) -> Lanes:
    """Working memory; aligned, so that no vector straddles two cache lines."""

    def aligned(kind: type, *shape: int) -> NDArray[Any]:
        size = 8 * int(np.prod(shape))
        memory = np.zeros(size + _CACHE_LINE, dtype=np.uint8)
        start = -memory.ctypes.data % _CACHE_LINE
        return memory[start : start + size].view(kind).reshape(shape)

    channels = state.firings.shape[1]
    judging = recorders.requirements or no_requirements(len(state.reason), channels)
    leaves, terms = len(judging.leaf), judging.coefficient.shape[1]
    constants = channels + 2 * len(network.node_parent)
    return Lanes(
        counts=aligned(np.float64, state.counts.shape[1] + 1, lanes),
        rate=aligned(np.float64, constants, lanes),
        common_rate=aligned(np.float64, constants),
        sums=aligned(np.float64, rows.end, lanes),
        firings=aligned(np.int64, channels + 1, lanes),
        stream=aligned(np.uint64, 4, lanes),
        pace=aligned(np.float64, len(factored_channels(network)), lanes),
        scratch=aligned(np.float64, most_nodes(network) + 3, lanes),
        running=aligned(np.float64, len(recorders.averages.factor), lanes),
        settled=aligned(np.float64, recorders.averages.settled.shape[1], lanes),
        judged=aligned(np.float64, SCRATCH + terms + leaves, lanes),
        leaf_sum=aligned(np.float64, leaves, lanes),
        integrated_to=aligned(np.float64, lanes),
        code=lane_code(judging.leaf, judging.term_start, judging.factor_start, judging.factor_species),
        degree=_degrees(recorders.averages, state.counts.shape[1] - 1),
        clock=aligned(np.float64, lanes),
        since=aligned(np.float64, lanes),
        mark=aligned(np.float64, lanes),
        uniform=aligned(np.float64, lanes),
        target=aligned(np.float64, lanes),
        chosen=aligned(np.float64, lanes),
        row=aligned(np.int64, lanes),
        sample=aligned(np.int64, lanes),
    )


def _degrees(averages: Averages, dummy: int) -> NDArray[np.int64]:
    """How many factors of each monomial are more than 1; 3 where an offset asks for the full form."""
    used = averages.factor != dummy
    degree = np.where(used[:, 2], 3, np.where(used[:, 1], 2, 1))
    # those that are subtracted from a factor which is left out, or from the first
    asked = (averages.offset != 0.0) & (np.arange(3) >= np.where(degree < 3, degree, 3)[:, None])
    degree[asked.any(axis=1) | (averages.offset[:, 0] != 0.0)] = 3
    return degree.astype(np.int64)


@inner
def enter(lanes, lane, r, rates, state, running, settled, mark):  # type: ignore[no-untyped-def]
    """Put replicate r into a lane; it fires nothing in the step that is under way."""
    seldom_called()
    counts = state.counts
    for i in range(counts.shape[1]):
        lanes.counts[i, lane] = counts[r, i]
    lanes.counts[counts.shape[1], lane] = 0.0
    for j in range(rates.shape[1]):
        lanes.rate[j, lane] = rates[r, j]
    for j in range(state.firings.shape[1]):
        lanes.firings[j, lane] = state.firings[r, j]
    for k in range(4):
        lanes.stream[k, lane] = state.stream[r, k]
    for q in range(lanes.running.shape[0]):
        lanes.running[q, lane] = running[r, q]
    for q in range(lanes.settled.shape[0]):
        lanes.settled[q, lane] = settled[r, q]
    lanes.clock[lane] = state.clock[r]
    lanes.since[lane] = state.clock[r]
    lanes.row[lane] = r
    lanes.sample[lane] = state.next_sample[r]
    lanes.mark[lane] = mark
    lanes.chosen[lane] = np.float64(state.firings.shape[1])


@inner
def leave(lanes, lane, reason, state, running, settled):  # type: ignore[no-untyped-def]
    """Put a lane's replicate back into its row."""
    seldom_called()
    r = lanes.row[lane]
    for i in range(state.counts.shape[1] - 1):
        state.counts[r, i] = lanes.counts[i, lane]
        if lanes.counts[i, lane] > OVERFLOW_GUARD:
            reason = COUNT_OVERFLOW
    for j in range(state.firings.shape[1]):
        state.firings[r, j] = lanes.firings[j, lane]
    for k in range(4):
        state.stream[r, k] = lanes.stream[k, lane]
    for q in range(lanes.running.shape[0]):
        running[r, q] = lanes.running[q, lane]
    for q in range(lanes.settled.shape[0]):
        settled[r, q] = lanes.settled[q, lane]
    state.clock[r] = lanes.clock[lane]
    state.next_sample[r] = lanes.sample[lane]
    state.reason[r] = reason


@inner
def move(lanes, source, lane):  # type: ignore[no-untyped-def]
    """Move a lane to another place in the middle of a step, and leave its old place empty: nothing can fire there."""
    seldom_called()
    for matrix in (
        lanes.counts,
        lanes.rate,
        lanes.pace,
        lanes.running,
        lanes.settled,
        lanes.judged,
        lanes.leaf_sum,
    ):
        for i in range(matrix.shape[0]):
            matrix[i, lane] = matrix[i, source]
            matrix[i, source] = 0.0
    for j in range(lanes.firings.shape[0]):
        lanes.firings[j, lane] = lanes.firings[j, source]
    for k in range(4):
        lanes.stream[k, lane] = lanes.stream[k, source]
    for vector in (lanes.clock, lanes.since, lanes.mark, lanes.chosen, lanes.integrated_to):
        vector[lane] = vector[source]
    lanes.row[lane] = lanes.row[source]
    lanes.sample[lane] = lanes.sample[source]
    empty(lanes, source)


@inner
def empty(lanes, lane):  # type: ignore[no-untyped-def]
    """Leave a lane without molecules."""
    seldom_called()
    for i in range(lanes.counts.shape[0]):
        lanes.counts[i, lane] = 0.0
    for j in range(lanes.rate.shape[0]):
        lanes.rate[j, lane] = 0.0
    lanes.mark[lane] = np.inf
    lanes.clock[lane] = 0.0
    lanes.since[lane] = 0.0
    lanes.chosen[lane] = np.float64(lanes.firings.shape[0] - 1)


@inner
def next_running(reason, after):  # type: ignore[no-untyped-def]
    """The first replicate from `after` on that is to be advanced, or the number of replicates."""
    r = after
    while r < reason.size and reason[r] != RUNNING:
        r += 1
    return r
