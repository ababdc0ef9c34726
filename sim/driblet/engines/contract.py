"""What every engine takes and gives: arrays only. This is the contract; an engine is a function `advance`.

    events = advance(network, rates, state, samples, budget)

It advances the replicates (rows) whose `state.reason` is RUNNING until each has a reason, or until about `budget` events
have fired, and returns the number fired. The caller loops; progress, Ctrl-C, recording and files live there. How often an
engine returns, which replicates share a call and how many threads run never changes a replicate's bits: all that a
replicate needs to go on is in its rows.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

RUNNING = 0
TIME_REACHED = 1
NOTHING_CAN_FIRE = 2  # the state is frozen; the rest of the grid holds it
COUNT_OVERFLOW = 3

REASONS = {
    TIME_REACHED: "time reached",
    NOTHING_CAN_FIRE: "nothing can fire any more",
    COUNT_OVERFLOW: "a count passed 2^53",
}
LARGEST_COUNT = 2.0**53
MOST_EVENTS_A_CALL = 1 << 22  # an event changes a count by at most 3, which bounds how far a call can overshoot


class NetworkArrays(NamedTuple):
    """A network as flat arrays. M channels, N free species; species N is a dummy whose count is always 1.

    reactant : int64, (M, 3), the species each propensity multiplies, N where there is none
    offset : float64, (M, 3), 0, 1 or 2: what is subtracted, which makes the falling factorial
    change_start, change_species, change_amount : CSR over channels, what a firing changes
    depend_start, depend_channel : CSR over channels, which propensities a firing changes
    first_dependent : int64, (M,), the lowest of those
    """

    reactant: NDArray[np.int64]
    offset: NDArray[np.float64]
    change_start: NDArray[np.int64]
    change_species: NDArray[np.int64]
    change_amount: NDArray[np.float64]
    depend_start: NDArray[np.int64]
    depend_channel: NDArray[np.int64]
    first_dependent: NDArray[np.int64]


class EnsembleState(NamedTuple):
    """Everything about R replicates that an engine carries from call to call.

    counts : float64, (R, N + 1), whole numbers up to 2^53, the last column 1
    stream : uint64, (R, 4), xoshiro256++
    clock : float64, (R,), s, time of the last event
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
