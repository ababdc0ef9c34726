"""Replicates x threads -> engine -> recorder: seeds, progress, interruption, resuming.

A replicate's result depends on its seed and number alone: not on threads, packing, call size, recording or restarts.
"""

from __future__ import annotations

import hashlib
import json
import os
import platform
import threading
import time
from collections.abc import Callable, Mapping
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from dataclasses import replace
from pathlib import Path
from queue import SimpleQueue
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.engine_choice import EngineChoice, choose_engine
from driblet.engines.choice import METHODS, choose_method
from driblet.errors import InputError, InterruptedRunError, one_problem
from driblet.events import event_arrays
from driblet.interrupts import noted_interrupts
from driblet.leap_record import leap_arrays
from driblet.lumping import LUMPED
from driblet.network import Network
from driblet.outcomes import EVENT, LEAP, Outcomes
from driblet.results import Run
from driblet.run_file import FORMAT, Block, Layout
from driblet.run_settings import DEFAULT_SAMPLES, check_arguments, sample_times
from driblet.store import RunWriter, discard_parts
from driblet.system import RunSettings, System
from driblet.treatments import Choice, treatment_facts, with_treatments

if TYPE_CHECKING:
    from driblet.packs import Pack, PackRunner
    from driblet.sums import SumsPlan

_UNIT_BYTES = 8 << 20
_POLL_SECONDS = 0.1


class Progress(NamedTuple):
    """Where a run stands: fraction of the simulated time done, replicates finished and planned, events, seconds."""

    fraction: float
    finished: int
    replicates: int
    events: int
    seconds: float


def run(
    system: System,
    output: str | Path | None = None,
    *,
    replicates: int | None = None,
    duration: float | None = None,
    sample_every: float | None = None,
    seed: int | None = None,
    engine: str | None = None,
    leap_tolerance: float | None = None,
    leap_anyway: bool = False,
    burn_in: float | None = None,
    record: str | None = None,
    threads: int | None = None,
    key: int = 0,
    method: str | None = None,
    treatment: str | Mapping[str, str] | None = None,
    statistics: bool = True,
    estimate_error: bool = True,
    stop_when_decided: bool = False,
    resume: bool = False,
    force: bool = False,
    on_progress: Callable[[Progress], None] | None = None,
) -> Run:
    """Simulate an ensemble and return it as a Run, in memory or, with `output`, in a run file.

    duration, sample_every : s. What is not given is taken from the system's [run]. key : sets the random streams of the
    points of a sweep apart, 0 to 2^63 - 1. engine : "exact", "leap" or "auto"; leap_tolerance : the share by which a
    reaction's gross rate may be expected to change in one leap; leap_anyway : "leap" leaps even where exact events cost less,
    for comparisons. method : "lanes" or "scalar", which kernel of the exact
    engine runs; left out, the faster one; the bits are the same. treatment : "elementary", "lumped" or "auto", of all enzymes
    or of some by name, before what the file says. statistics : whether the time integrals that `check` needs are gathered,
    which adds a third to the time and more. estimate_error : whether an approximate run states how far its means may be off
    (error_estimate.py), which takes as long as some 20 replicates. stop_when_decided : a replicate may end when the outcome
    of every requirement is known; its samples then hold the state of that moment to the end. With `resume`, finished
    replicates of an interrupted run are kept; a complete run is returned as it is. Raises InputError for bad settings or an
    output that is taken, InterruptedRunError after Ctrl-C.
    """
    changes = {
        "replicates": replicates,
        "duration_s": duration,
        "sample_every_s": sample_every,
        "seed": seed,
        "engine": engine,
        "leap_tolerance": leap_tolerance,
        "burn_in_s": burn_in,
        "record": record,
    }
    given = {k: v for k, v in changes.items() if v is not None}
    check_arguments(given, threads)
    real = ("duration_s", "sample_every_s", "burn_in_s", "leap_tolerance")
    plain = {k: v if isinstance(v, str) else float(v) if k in real else int(v) for k, v in given.items()}
    settings = replace(system.settings, **plain)  # type: ignore[arg-type]
    if method not in (None, *METHODS):
        raise one_problem("run", "method", f'"{method}" is not a method: "lanes" or "scalar" is')
    if method == "lanes" and settings.record == "events":
        raise one_problem("run", "method", 'events are recorded by "scalar" only')
    stated = system
    system, choices = with_treatments(system, treatment, float(sample_times(settings)[1]), settings.engine)
    network = Network.of(system)
    choice = choose_engine(system, network, settings, key, leap_anyway)
    if not statistics and settings.record == "summary":
        raise one_problem("run", "statistics", 'record = "summary" keeps nothing else: leave one of the two')
    facts = _facts(settings, key, statistics, stop_when_decided, choices, choice)
    path = Path(output) if output is not None else None
    if path is not None and resume and path.is_file():
        existing = Run(path)
        if existing.identity == _identity(system, facts):
            discard_parts(path)  # of a run that was killed after it was complete
            return existing
        existing.close()
        raise one_problem(str(path), "", "holds another run than this one; --force replaces it, another -o keeps it")
    # what loads a compiler, which a complete run does without
    from driblet.packs import PackRunner
    from driblet.sums import SumsPlan

    judged = _requirements(system, network, settings, stop_when_decided, choice)
    histograms = settings.record != "trajectories"
    duration_s = float(sample_times(settings)[-1])
    sums = SumsPlan.of(
        system,
        network,
        duration_s,
        settings.burn_in_s,
        kept=statistics,
        histograms=histograms,
        covariances=settings.record == "summary",
    )
    times = sample_times(settings) if settings.record != "summary" else np.array([0.0, settings.duration_s])
    chosen = choose_method(len(network.channels), settings.replicates, settings.record == "events")
    chosen = "leaps" if choice.leaps else method or chosen
    layout = _layout(system, settings, times, sums, chosen, judged, facts, choice.leaps)
    if estimate_error and (choice.leaps or any(c.taken == LUMPED for c in choices)):
        from driblet.error_estimate import error_estimate

        estimate = error_estimate(stated, system, network, settings, choice, key)
        layout = replace(layout, provenance={**layout.provenance, **(estimate.provenance() if estimate else {})})
    writer = RunWriter(path, layout, resume=resume, force=force)
    threads = threads or os.cpu_count() or 1
    runner = PackRunner(system, settings, layout, sums, key, method, stop_when_decided, choice)
    file = _Ensemble(runner, layout, writer, threads, on_progress).run()
    return Run(file) if path is None else Run(path)


def _requirements(
    system: System, network: Network, settings: RunSettings, stop_when_decided: bool, choice: EngineChoice
) -> dict[str, str]:
    """Where each requirement will be looked at, and why on samples only, as provenance keeps it. Raises InputError for spans
    that do not fit into the run, and for stops that could never come."""
    from driblet.requirements import CompiledRequirements
    from driblet.system.requirements import span_problems

    source = system.source or "run"
    problems = [p for r in system.requirements for p in span_problems(r, settings.duration_s)]
    if problems:
        raise InputError(source, problems)
    compiled = CompiledRequirements.of(system, network, settings.duration_s)
    if stop_when_decided and not system.requirements:
        raise one_problem(source, "stop_when_decided", "there is no requirement to decide; add [requirements.NAME]")
    if stop_when_decided and compiled.by_grid:
        q, why = next(iter(compiled.by_grid.items()))
        text = f"cannot be decided before the end: it is judged on samples only ({why})"
        raise one_problem(source, f"requirements.{system.requirements[q].name}", text)
    if not system.requirements:
        return {}
    names = [r.name for r in system.requirements]
    looked_at = compiled.resolutions(LEAP if choice.leaps else EVENT)
    kept = {"requirements_looked_at": json.dumps(dict(zip(names, looked_at, strict=True)))}
    if compiled.by_grid:
        kept["requirements_on_samples"] = json.dumps({names[q]: why for q, why in compiled.by_grid.items()})
    return kept


def _row_bytes(system: System, times: NDArray[np.float64]) -> int:
    """About what one replicate's samples take in memory while its unit is made."""
    species, reactions = len(system.free_species), len(system.reactions)
    return 8 * len(times) * max(1, species + 4 * reactions + len(system.readouts))


def _facts(
    settings: RunSettings,
    key: int,
    statistics: bool,
    stop_when_decided: bool,
    choices: tuple[Choice, ...],
    choice: EngineChoice,
) -> dict[str, Any]:
    """The settings that a run's results depend on."""
    return {
        "engine": settings.engine,
        "seed": settings.seed,
        "replicates": settings.replicates,
        "duration_s": settings.duration_s,
        "sample_every_s": settings.sample_every_s or settings.duration_s / DEFAULT_SAMPLES,
        "record": settings.record,
        **({} if settings.burn_in_s is None else {"burn_in_s": settings.burn_in_s}),
        **({"stream_key": key} if key else {}),
        **({} if statistics else {"statistics": False}),
        **({"stop_when_decided": True} if stop_when_decided else {}),
        **treatment_facts(choices),
        **choice.provenance(),
    }


def _identity(system: System, facts: Mapping[str, Any]) -> str:
    """A hash that runs share which must give the same bits."""
    text = json.dumps([FORMAT, system.text, facts], sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()[:32]


def _layout(
    system: System,
    settings: RunSettings,
    times: NDArray[np.float64],
    sums: SumsPlan,
    method: str,
    judged: Mapping[str, str],
    facts: Mapping[str, Any],
    leaps: bool,
) -> Layout:
    unit = max(1, min(-(-settings.replicates // 64), _UNIT_BYTES // _row_bytes(system, times)))
    unit = 1 << (unit.bit_length() - 1)  # a power of two, so that whole units fill a pack of lanes
    import numba

    from driblet.version import __version__

    provenance = {
        **facts,
        "method": method,
        **judged,
        "driblet_version": __version__,
        "numpy_version": np.__version__,
        "numba_version": numba.__version__,
        "python_version": platform.python_version(),
        "source": system.source,
        "started": time.strftime("%Y-%m-%dT%H:%M:%S%z"),
        "host_cpu": _cpu_name(),
    }
    return Layout(
        tuple(s.name for s in system.free_species),
        tuple(r.name for r in system.reactions),
        tuple(r.name for r in system.readouts),
        tuple(r.expression.unit for r in system.readouts),
        times,
        settings.replicates,
        unit,
        _identity(system, facts),
        system.text,
        provenance,
        sums.per_replicate
        + (event_arrays() if settings.record == "events" else ())
        + Outcomes.arrays(len(system.requirements))
        + (leap_arrays() if leaps else ()),
        sums.fixed,
    )


def _cpu_name() -> str:
    try:
        for line in Path("/proc/cpuinfo").read_text("utf-8").splitlines():
            if line.startswith("model name"):
                return line.split(":", 1)[1].strip()
    except OSError:
        pass
    return platform.processor() or platform.machine()


class _Ensemble:
    def __init__(
        self,
        runner: PackRunner,
        layout: Layout,
        writer: RunWriter,
        threads: int,
        on_progress: Callable[[Progress], None] | None,
    ) -> None:
        self.layout, self.writer, self.threads, self.on_progress = layout, writer, threads, on_progress
        self.runner = runner
        self.stop = threading.Event()
        self.blocks: SimpleQueue[Block] = SimpleQueue()
        self.packs: list[Pack] = []
        self.finished = sum(len(self._rows(u)) for u in writer.done)
        self.events = 0
        self.fraction = 0.0
        self.started = time.monotonic()

    def run(self) -> Any:
        """Simulate every unit that is not done yet; returns what the writer's finish returns."""
        with noted_interrupts() as interrupted:
            file = self._simulate(interrupted)
        if interrupted():
            path = self.writer.path
            raise InterruptedRunError(f"interrupted; {path} was complete already" if path else self._farewell())
        return file

    def _simulate(self, interrupted: Callable[[], bool]) -> Any:
        from driblet.packs import Pack, next_pack

        pending = [u for u in range(self.layout.units) if u not in self.writer.done]
        row_bytes = _row_bytes(self.runner.system, self.runner.time_s)
        futures: set[Future[None]] = set()
        with ThreadPoolExecutor(max_workers=self.threads) as pool:
            try:
                while pending or futures:
                    while len(futures) < self.threads and pending:
                        pack = Pack.of(next_pack(pending, self.layout.unit, self.threads, row_bytes), self.layout)
                        self.packs.append(pack)
                        futures.add(pool.submit(self.runner.simulate, pack, self.blocks.put, self.stop.is_set))
                    self._write()
                    self._report()
                    if interrupted():
                        raise KeyboardInterrupt
                    done, futures = wait(futures, timeout=_POLL_SECONDS, return_when=FIRST_COMPLETED)
                    for future in done:
                        future.result()
            except KeyboardInterrupt:
                self._stop(futures)
                raise InterruptedRunError(self._farewell()) from None
            except BaseException:
                self._stop(futures)
                raise
        try:
            self._write()
            self._report()
            seconds = time.monotonic() - self.started
            closing = {"wall_time_s": seconds, "threads": self.threads, "events_this_session": self.events}
            return self.writer.finish(closing)
        except KeyboardInterrupt:
            self.writer.flush()
            raise InterruptedRunError(self._farewell()) from None

    def _write(self) -> None:
        """Pass on the units that the workers have handed over."""
        while not self.blocks.empty():
            block = self.blocks.get()
            self.writer.add(block)
            self.finished += len(block.replicate)
            self.events += int(block.events.sum())
            for pack in self.packs:
                if block.unit in pack.units:
                    # here and not in the worker, so that the fraction done never falls
                    pack.written[pack.bounds[pack.units.index(block.unit)]] = True
                    pack.events_written += int(block.events.sum())
            self.packs = [pack for pack in self.packs if not pack.written.all()]

    def _stop(self, futures: set[Future[None]]) -> None:
        self.stop.set()
        for future in futures:
            future.cancel()
        wait(futures)
        self._write()
        self.writer.flush()

    def _farewell(self) -> str:
        path = self.writer.path
        if path is None:
            return "interrupted; a run in memory leaves nothing"
        kept = sum(len(self._rows(u)) for u in self.writer.done)
        if not kept:
            return "interrupted before a replicate was finished; nothing was kept"
        return (
            f"interrupted: {kept} of {self.layout.replicates} replicates are kept in {path}.parts, "
            "which every command reads; go on with --resume"
        )

    def _rows(self, unit: int) -> range:
        start = unit * self.layout.unit
        return range(start, min(start + self.layout.unit, self.layout.replicates))

    def _report(self) -> None:
        if self.on_progress is None:
            return
        grid = len(self.runner.time_s)
        partial = sum(pack.samples_done(grid) for pack in self.packs) / grid
        events = self.events + sum(max(0, pack.events - pack.events_written) for pack in self.packs)
        # a unit that has just passed an addition can seem to be behind for a moment
        self.fraction = max(self.fraction, min(1.0, (self.finished + partial) / self.layout.replicates))
        self.on_progress(
            Progress(self.fraction, self.finished, self.layout.replicates, events, time.monotonic() - self.started)
        )
