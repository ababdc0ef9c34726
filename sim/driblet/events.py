"""Every event of a run, kept up to a stated number a replicate: when, and which channel. For dwell times and the like."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.engines.contract import BUFFER_FULL, RUNNING, EnsembleState, Recorders
from driblet.engines.recorders import new_log
from driblet.run_file import PerReplicate

MOST_EVENTS = 200_000  # kept of each replicate; those after are counted, not kept
_BUFFER = 1 << 13


def event_arrays() -> tuple[PerReplicate, ...]:
    """The arrays as the run file declares them."""
    return (
        PerReplicate("events_kept/time", (), object, "s"),
        PerReplicate("events_kept/channel", (), object, "1"),
    )


class EventRecord:
    """Events of some replicates while they run."""

    def __init__(self, replicates: int) -> None:
        self.time: list[list[NDArray[np.float64]]] = [[] for _ in range(replicates)]
        self.channel: list[list[NDArray[np.float64]]] = [[] for _ in range(replicates)]
        self.kept = np.zeros(replicates, dtype=np.int64)

    def attach(self, recorders: Recorders) -> Recorders:
        """`recorders` with an event log."""
        return recorders._replace(log=new_log(len(self.kept), _BUFFER))

    def drain(self, state: EnsembleState, recorders: Recorders) -> None:
        """Take what the log holds and let full replicates go on."""
        log = recorders.log
        for r in np.flatnonzero(log.used):
            take = int(min(log.used[r], MOST_EVENTS - self.kept[r]))
            if take:
                self.time[r].append(log.time[r, :take].copy())
                self.channel[r].append(log.channel[r, :take].astype(float))
                self.kept[r] += take
            log.used[r] = 0
        state.reason[state.reason == BUFFER_FULL] = RUNNING

    def results(self) -> dict[str, NDArray[Any]]:
        """The events by the names they have in a run file."""
        out: dict[str, NDArray[Any]] = {}
        for name, parts in (("time", self.time), ("channel", self.channel)):
            rows = np.empty(len(parts), dtype=object)
            for r, arrays in enumerate(parts):
                rows[r] = np.concatenate(arrays) if arrays else np.zeros(0)
            out[f"events_kept/{name}"] = rows
        return out
