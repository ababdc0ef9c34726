"""One pack of replicates from start to end: several units of the run file advanced together, so that lanes stay full.

A unit is handed over as soon as its replicates are done, whatever the rest of its pack is doing.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.engine_choice import EngineChoice, leap_engine, leap_rates
from driblet.engines.choice import LANES
from driblet.engines.contract import (
    COUNT_OVERFLOW,
    REASONS,
    RUNNING,
    EnsembleState,
    Recorders,
    Samples,
    new_samples,
    new_state,
)
from driblet.engines.exact import ExactEngine
from driblet.engines.leap import LeapEngine
from driblet.engines.leap_arrays import WORK
from driblet.errors import InterruptedRunError, one_problem
from driblet.events import EventRecord
from driblet.leap_record import leap_values
from driblet.loading import additions_of, prepare
from driblet.network import BACKWARD, FORWARD, Network
from driblet.readouts import evaluate
from driblet.requirements import CompiledRequirements, conclude_all, look_at_all
from driblet.run_file import Block, Layout
from driblet.segments import begin, keep, segments
from driblet.sums import SumsPlan
from driblet.system import RunSettings, System

_BUDGET = 1 << 22  # events an engine fires before it looks up: some 30 ms in lanes, 100 ms one by one
_PACK_BYTES = 256 << 20
_MOST_ROWS = 8 * LANES
# what a recorder holds for each replicate; everything else is for all alike
_OWN_ROWS = {
    "averages": {"integral", "firings", "running", "settled", "next_edge"},
    "occupancy": {"seconds", "since"},
    "log": {"time", "channel", "used"},
    "requirements": {
        *("coefficient", "leaf_value", "leaf_sum", "leaf_truth", "record"),
        *("integrated_to", "next_edge", "halt"),
    },
}


def next_pack(pending: list[int], unit: int, threads: int, row_bytes: int) -> list[int]:
    """Take the units of the next pack off `pending`.

    Packs fill whole sets of lanes and shrink towards the end of a run, so that threads end together.
    """
    share = len(pending) * unit // (2 * threads if threads > 1 else 1)
    rows = max(LANES, min(share, _MOST_ROWS) // LANES * LANES)
    rows = min(rows, _PACK_BYTES // max(1, row_bytes))
    units = max(1, rows // unit)
    taken = pending[:units]
    del pending[:units]
    return taken


def rows_of(recorders: Recorders, rows: slice) -> Recorders:
    """The recorders of some of the replicates, as views."""
    parts = {}
    for name, recorder in recorders._asdict().items():
        if recorder is None:
            continue
        own = {k: a[rows] for k, a in recorder._asdict().items() if k in _OWN_ROWS[name]}
        parts[name] = recorder._replace(**own)
    return recorders._replace(**parts)


@dataclass
class Pack:
    """Units simulated together. What changes while it runs is read by the main thread for progress only.

    Attributes: units : their numbers; rows : replicates, int64, (R,); next_sample : of each, in the segment that runs;
    before : samples of the segments that are done; events : fired; written : (R,), whether the main thread has the
    replicate's unit; events_written : of those.
    """

    units: list[int]
    rows: NDArray[np.int64]
    bounds: list[slice]
    next_sample: NDArray[np.int64] | None = None
    before: int = 0
    events: int = 0
    events_written: int = 0
    written: NDArray[np.bool_] = field(default_factory=lambda: np.zeros(0, dtype=np.bool_))

    @classmethod
    def of(cls, units: list[int], layout: Layout) -> Pack:
        """The pack of the given units."""
        ranges = [range(u * layout.unit, min((u + 1) * layout.unit, layout.replicates)) for u in units]
        ends = np.cumsum([0, *(len(r) for r in ranges)]).tolist()
        rows = np.array([r for one in ranges for r in one], dtype=np.int64)
        bounds = [slice(a, b) for a, b in itertools.pairwise(ends)]
        return cls(units, rows, bounds, written=np.zeros(len(rows), dtype=np.bool_))

    def samples_done(self, grid: int) -> float:
        """Samples taken of replicates that are not written yet."""
        if self.next_sample is None:
            return 0.0
        left = ~self.written
        return float(np.minimum(grid, self.next_sample[left] + self.before).sum())


class PackRunner:
    """Simulates packs of one run; threads share it."""

    def __init__(
        self,
        system: System,
        settings: RunSettings,
        layout: Layout,
        sums: SumsPlan,
        key: int,
        method: str | None,
        stop_when_decided: bool,
        choice: EngineChoice,
    ) -> None:
        self.system, self.settings, self.layout, self.sums, self.key = system, settings, layout, sums, key
        self.network = Network.of(system)
        self.requirements = CompiledRequirements.of(system, self.network, settings.duration_s)
        self.stop_when_decided = stop_when_decided
        self.engine: ExactEngine | LeapEngine
        self.turnover = None
        if choice.leaps:
            self.engine, self.turnover = leap_engine(system, self.network, choice.tolerance, choice.stiffness)
        else:
            self.engine = ExactEngine(self.network.arrays, len(self.network.species), method)
        # a summary keeps two samples, but its covariances are taken from more
        hidden = settings.record == "summary"
        self.time_s = np.unique(np.append(sums.hidden_grid(), 0.0)) if hidden else layout.time_s
        self.segments = segments(system, self.time_s)

    def simulate(self, pack: Pack, hand_over: Callable[[Block], None], stopped: Callable[[], bool]) -> None:
        """Simulate a pack and hand over each of its units. Raises InterruptedRunError once `stopped` says so."""
        replicates = pack.rows.tolist()
        start = prepare(self.system, self.settings.seed, replicates, self.key)
        rates = self.network.rates(start.omega)
        if self.turnover is not None:
            rates = leap_rates(self.network, self.turnover, start.omega)
        species, channels = len(self.network.species), len(self.network.channels)
        state = new_state(start.counts, start.stream, channels)
        samples = new_samples(self.time_s, len(replicates), species, channels)
        added = additions_of(self.system, self.settings.seed, replicates, start.omega, self.key)
        columns = [self.network.species.index(a.species) for a in self.system.additions]
        totals = self.sums.empty(len(replicates))
        work = np.zeros((len(replicates), WORK)) if isinstance(self.engine, LeapEngine) else None
        log = EventRecord(len(replicates)) if self.settings.record == "events" else None
        judging = self.requirements.recorder(start.omega, self.stop_when_decided)
        if judging is not None:
            look_at_all(judging, np.arange(len(replicates)), state.counts.T, 0.0, True)
        one_segment = len(self.segments) == 1 and log is None
        waiting = list(range(len(pack.units)))

        def hand_over_finished(recorders: Recorders) -> None:
            for k in [k for k in waiting if (state.reason[pack.bounds[k]] != RUNNING).all()]:
                rows = pack.bounds[k]
                waiting.remove(k)
                part = {name: array[rows] for name, array in totals.items()}
                self.sums.collect(rows_of(recorders, rows), part)
                if log is not None:
                    part.update({name: array[rows] for name, array in log.results().items()})
                recorded = samples._replace(counts=samples.counts[rows], firings=samples.firings[rows])
                ended = state._replace(**{name: array[rows] for name, array in state._asdict().items()})
                judged = rows_of(recorders, rows).requirements
                if judged is not None:
                    conclude_all(judged, ended.clock)
                outcomes = self.requirements.outcomes(judged, recorded.counts, self.time_s, start.omega[rows])
                part.update(outcomes.values())
                if work is not None:
                    part.update(leap_values(work[rows]))
                numbers = (pack.units[k], pack.rows[rows])
                hand_over(self._block(*numbers, start.omega[rows], start.volume_L[rows], ended, recorded, part))

        pack.next_sample = state.next_sample
        for segment in self.segments:
            part = begin(segment, state, samples, added, columns)
            recorders = self.sums.recorders(state, segment.start_s, segment.end_s)._replace(requirements=judging)
            if judging is not None and segment.added:
                going_on = np.flatnonzero(state.reason == RUNNING)
                look_at_all(judging, going_on, state.counts.T, segment.start_s, False)
            if log is not None:
                recorders = log.attach(recorders)
            while (state.reason == RUNNING).any():
                if stopped():
                    raise InterruptedRunError("interrupted")
                if isinstance(self.engine, LeapEngine):
                    pack.events += self.engine.advance(rates, state, part, _BUDGET, recorders, work)
                else:
                    pack.events += self.engine.advance(rates, state, part, _BUDGET, recorders)
                if log is not None:
                    log.drain(state, recorders)
                if one_segment:
                    hand_over_finished(recorders)
            keep(segment, part, samples)
            pack.before = segment.grid.stop
            if segment is not self.segments[-1]:
                self.sums.collect(recorders, totals)
            else:
                hand_over_finished(recorders)

    def _block(
        self,
        unit: int,
        rows: NDArray[np.int64],
        omega: NDArray[np.float64],
        volume_L: NDArray[np.float64],
        state: EnsembleState,
        samples: Samples,
        totals: dict[str, NDArray[Any]],
    ) -> Block:
        """A finished unit as the run file takes it. Raises InputError for a count beyond what an engine can hold."""
        if (state.reason == COUNT_OVERFLOW).any():
            r = int(np.flatnonzero(state.reason == COUNT_OVERFLOW)[0])
            name = self.network.species[int(np.argmax(state.counts[r, :-1]))]
            text = (
                f"{REASONS[COUNT_OVERFLOW]} in replicate {rows[r]}: the system grows without bound, or holds too much"
            )
            raise one_problem(self.system.source, f"species.{name}", text)
        totals.update(self.sums.sampled(self.time_s, samples.counts))
        if len(self.time_s) != len(self.layout.time_s):
            samples = Samples(self.layout.time_s, samples.counts[:, [0, -1]], samples.firings[:, [0, -1]])
        series: dict[str, NDArray[Any]] = {
            "counts": samples.counts,
            "firings_forward": self._by_reaction(samples.firings, FORWARD),
            "firings_backward": self._by_reaction(samples.firings, BACKWARD),
        }
        for readout in self.system.readouts:
            values = evaluate(self.system, readout.expression, samples.counts, omega[:, None])
            series[f"readout_{readout.name}"] = values
        return Block(unit, rows, volume_L, state.reason, state.firings.sum(axis=1), series, totals)

    def _by_reaction(self, firings: NDArray[np.int64], direction: int) -> NDArray[np.int64]:
        index = self.network.channel_index(direction)
        out = firings[..., index]
        out[..., index < 0] = 0
        return out
