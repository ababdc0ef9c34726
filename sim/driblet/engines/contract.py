"""What every engine takes and gives: arrays only. This is the contract; an engine is a function `advance`.

    events = advance(network, rates, state, samples, budget, recorders)

It advances the replicates (rows) whose `state.reason` is RUNNING until each has a reason, or until about `budget` events
have fired, and returns the number fired. The caller loops; progress, Ctrl-C, recording and files live there. How often an
engine returns, which replicates share a call, how many advance in lockstep and how many threads run never changes a
replicate's bits: all that a replicate needs to go on is in its rows.

Canonical arithmetic. An event takes two words of the replicate's stream, the first for the waiting time and the second for
the channel. Propensities are constant * a * (b - o) * (c - p), left to right, but where they have a factor (factors.py);
they are summed in channel order, in groups where there are many (sums.py); a channel is found by counting the cumulative
sums that do not exceed the target. Nothing is contracted, reassociated or replaced by a reciprocal. So every method gives
the same bits.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.engines.requirement_arrays import Requirements

RUNNING = 0
TIME_REACHED = 1
NOTHING_CAN_FIRE = 2  # the state is frozen; the rest of the grid holds it
COUNT_OVERFLOW = 3
STOP_CONDITION = 4  # a condition that stops was met; the rest of the grid holds the state at that moment
BUFFER_FULL = 5  # the event log is full: empty it, set `used` to 0 and the reason to RUNNING, and call again

REASONS = {
    TIME_REACHED: "time reached",
    NOTHING_CAN_FIRE: "nothing can fire any more",
    COUNT_OVERFLOW: "a count passed 2^53",
    STOP_CONDITION: "stop condition met, or every requirement decided",
    BUFFER_FULL: "event buffer full",
}
LARGEST_COUNT = 2.0**53
MOST_EVENTS_A_CALL = 1 << 22  # an event changes a count by at most 100: it bounds how far a call overshoots
OVERFLOW_GUARD = LARGEST_COUNT - 128.0 * MOST_EVENTS_A_CALL


class NetworkArrays(NamedTuple):
    """A network as flat arrays. M channels, N free species; species N is a dummy whose count is always 1.

    reactant : int64, (M, 3), the species each propensity multiplies, N where there is none
    offset : float64, (M, 3), 0, 1 or 2: what is subtracted, which makes the falling factorial
    change_start, change_species, change_amount : CSR over channels, what a firing changes
    depend_start, depend_channel : CSR over channels, which propensities a firing changes
    first_dependent : int64, (M,), the lowest of those
    factor_start : int64, (M, 3), of a channel whose propensity is mass action times a ratio of polynomials (factors.py): its
    first node, the node after those of the numerator (its first node where that is 1), the node after its last; else equal
    node_parent, node_species, node_offset : (T,); node t of a channel stands for the monomial of one earlier node (1 + its
    place in the channel, 0 for the constant 1) times max(n - offset, 0)

    Coefficients of the nodes differ between volumes: they follow the constants in `rates`, (R, M + 2 T), all denominators'
    first.
    """

    reactant: NDArray[np.int64]
    offset: NDArray[np.float64]
    change_start: NDArray[np.int64]
    change_species: NDArray[np.int64]
    change_amount: NDArray[np.float64]
    depend_start: NDArray[np.int64]
    depend_channel: NDArray[np.int64]
    first_dependent: NDArray[np.int64]
    factor_start: NDArray[np.int64]
    node_parent: NDArray[np.int64]
    node_species: NDArray[np.int64]
    node_offset: NDArray[np.float64]


class EnsembleState(NamedTuple):
    """Everything about R replicates that an engine carries from call to call.

    counts : float64, (R, N + 1), whole numbers up to 2^53, the last column 1
    stream : uint64, (R, 4), xoshiro256++
    clock : float64, (R,), s, time of the last event; when the replicate has ended, the time of its end
    next_sample : int64, (R,), index of the next grid point to record
    firings : int64, (R, M), firings so far
    reason : int64, (R,), RUNNING or why the replicate ended
    """

    counts: NDArray[np.float64]
    stream: NDArray[np.uint64]
    clock: NDArray[np.float64]
    next_sample: NDArray[np.int64]
    firings: NDArray[np.int64]
    reason: NDArray[np.int64]


class Samples(NamedTuple):
    """The recording grid and what is recorded on it: the state just after each time.

    time : float64, (G,), s; counts : int64, (R, G, N); firings : int64, (R, G, M), cumulative
    """

    time: NDArray[np.float64]
    counts: NDArray[np.int64]
    firings: NDArray[np.int64]


class Averages(NamedTuple):
    """Exact time integrals of Q monomials (n_a - o)(n_b - p)(n_c - q) over E - 1 windows of time.

    Every event adds to all integrals or, where `settle_start` is not empty, only to those that it changes, each of which
    knows up to when it is settled; at the edges of windows all of them are. The rounding of the two differs, so that which it
    is depends on the network alone (recorders.settle_plan).

    edge : float64, (E,), s, increasing, the last not after the last grid point: window k is [edge_k, edge_k+1)
    factor : int32, (Q, 3), species as in NetworkArrays.reactant; offset : float32, (Q, 3), whole numbers
    paced : int64, (K, 2), monomials that are those of channels with a factor, integrated together with it: q and the
    channel's row in `pace` (factors.py); `factor` and `offset` make such a q zero
    settle_start, settle : int32, CSR over channels, which monomials a firing changes; empty where every event adds to all
    pace_row : int32, (Q,), row in `pace` of those that `paced` lists, -1 for others
    integral : float64, (R, E - 1, Q), s times molecules to the power of the monomial's order; the result
    firings : int64, (R, E, M), cumulative firings at each edge; the result
    running : float64, (R, Q), of the window the replicate is in; settled : (R, Q), s, or (R, 0); next_edge : int64, (R,).
    Carried between calls.

    A replicate that stops early leaves its last window integrated up to its end (`state.clock`) and later ones zero.
    """

    edge: NDArray[np.float64]
    factor: NDArray[np.int32]
    offset: NDArray[np.float32]
    paced: NDArray[np.int64]
    settle_start: NDArray[np.int32]
    settle: NDArray[np.int32]
    pace_row: NDArray[np.int32]
    integral: NDArray[np.float64]
    firings: NDArray[np.int64]
    running: NDArray[np.float64]
    settled: NDArray[np.float64]
    next_edge: NDArray[np.int64]


class Occupancy(NamedTuple):
    """Time spent at each count of S chosen species within a span of time: histograms.

    slot : int64, (N + 2,), row of a species in `seconds`, -1 where it is not followed; species : int64, (S,)
    width : int64, (S,), counts per bin; the last bin holds all larger counts
    span : float64, (2,), s
    seconds : float64, (R, S, B), the result; since : float64, (R, S), carried between calls.
    """

    slot: NDArray[np.int64]
    species: NDArray[np.int64]
    width: NDArray[np.int64]
    span: NDArray[np.float64]
    seconds: NDArray[np.float64]
    since: NDArray[np.float64]


class EventLog(NamedTuple):
    """Every event until the caller empties it. time : float64, (R, L), s; channel : int32, (R, L); used : int64, (R,)."""

    time: NDArray[np.float64]
    channel: NDArray[np.int32]
    used: NDArray[np.int64]


class Recorders(NamedTuple):
    """What is gathered while running besides the grid. Each is off when its arrays are empty, and then costs nothing."""

    averages: Averages
    occupancy: Occupancy
    log: EventLog
    requirements: Requirements | None


def new_state(counts: NDArray[np.float64], stream: NDArray[np.uint64], channels: int) -> EnsembleState:
    """State of replicates at time zero; counts : (R, N), stream : (R, 4)."""
    replicates = counts.shape[0]
    return EnsembleState(
        np.ascontiguousarray(np.hstack([counts, np.ones((replicates, 1))])),
        np.array(stream, dtype=np.uint64, order="C"),
        np.zeros(replicates),
        np.zeros(replicates, dtype=np.int64),
        np.zeros((replicates, channels), dtype=np.int64),
        np.full(replicates, RUNNING, dtype=np.int64),
    )


def new_samples(time_s: NDArray[np.float64], replicates: int, species: int, channels: int) -> Samples:
    """An empty recording for `replicates` rows."""
    shape = (replicates, len(time_s))
    return Samples(
        np.ascontiguousarray(time_s, dtype=np.float64),
        np.zeros((*shape, species), dtype=np.int64),
        np.zeros((*shape, channels), dtype=np.int64),
    )
