"""A run cut at the times of additions: between them an engine runs as if nothing else ever happened.

The waiting time to the next event has no memory, so that stopping at a time, adding molecules and drawing the wait anew
from the same stream is exact, and a replicate's bits depend on its own stream alone as ever.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from driblet.engines.contract import NOTHING_CAN_FIRE, RUNNING, TIME_REACHED, EnsembleState, Samples, new_samples
from driblet.system import System


@dataclass(frozen=True)
class Segment:
    """A stretch of a run. start_s, end_s; grid : its part of the recording grid; added : indices of what is added first.

    A sample at the time of an addition is taken after it.
    """

    start_s: float
    end_s: float
    grid: slice
    added: tuple[int, ...]


def segments(system: System, time_s: NDArray[np.float64]) -> list[Segment]:
    """The segments of a run on a recording grid; a run that was asked to be shorter than its file says ends before
    what would be added later.
    """
    end = float(time_s[-1])
    times = sorted({a.at_s for a in system.additions if a.at_s < end})
    starts = [0.0, *times]
    cuts = [0, *(int(np.searchsorted(time_s, t, side="left")) for t in times), len(time_s)]
    found = []
    for k, start in enumerate(starts):
        added = tuple(i for i, a in enumerate(system.additions) if a.at_s == start and k)
        stop = starts[k + 1] if k + 1 < len(starts) else end
        found.append(Segment(start, stop, slice(cuts[k], cuts[k + 1]), added))
    return found


def begin(
    segment: Segment, state: EnsembleState, samples: Samples, added: NDArray[np.float64], columns: Sequence[int]
) -> Samples:
    """Add what is due, set the clocks, and return the grid an engine is to run on.

    samples : of the whole run; added : copies, shape=(R, additions); columns : the free species each addition adds to.
    Replicates that have ended for good hold their state.
    """
    goes_on = np.isin(state.reason, (RUNNING, TIME_REACHED, NOTHING_CAN_FIRE))
    for i in segment.added:
        state.counts[goes_on, columns[i]] += added[goes_on, i]
    state.clock[goes_on] = segment.start_s
    state.next_sample[goes_on] = 0
    state.reason[goes_on] = RUNNING
    times = samples.time[segment.grid]
    if len(times) == len(samples.time):
        return samples
    if not len(times) or times[-1] != segment.end_s:
        times = np.append(times, segment.end_s)
    part = new_samples(times, len(goes_on), samples.counts.shape[2], samples.firings.shape[2])
    part.counts[~goes_on] = state.counts[~goes_on, None, :-1].astype(np.int64)
    part.firings[~goes_on] = state.firings[~goes_on, None]
    return part


def keep(segment: Segment, part: Samples, samples: Samples) -> None:
    """Copy what a segment recorded into the samples of the whole run."""
    if part is samples:
        return
    length = segment.grid.stop - segment.grid.start
    samples.counts[:, segment.grid] = part.counts[:, :length]
    samples.firings[:, segment.grid] = part.firings[:, :length]
