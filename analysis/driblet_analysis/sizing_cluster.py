"""The rounds of a sizing on a cluster: each becomes a small sweep, worked on by Slurm or Dask like any other.

A batch is a point: a value, a seed and a number of compartments. The run files that the sweep keeps are read for their
outcomes, so that a sizing ends in the same bits wherever its batches were simulated.
"""

from __future__ import annotations

import csv
import hashlib
import io
import json
import tempfile
import threading
import time
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path

from driblet.errors import CannotAnswerError, InterruptedRunError
from driblet.results import Run
from driblet_analysis.sizing import Batch, Simulate
from driblet_analysis.sizing_parts import Outcome
from driblet_analysis.sizing_question import Question
from driblet_analysis.sweep.directory import Plan, read_plan
from driblet_analysis.sweep.files import write_text, writing
from driblet_analysis.sweep.keypaths import toml_text
from driblet_analysis.sweep.plan import make_plan
from driblet_analysis.sweep.shards import union
from driblet_analysis.sweep.slurm import Options, queued_tasks, submit
from driblet_analysis.sweep.status import read_status
from driblet_analysis.sweep.work import Stop, stopping_on_signals

FOLDER = "rounds"
_POLL_SECONDS = 5.0
_PATIENCE_SECONDS = 120.0  # with nothing in the queue, for file servers that show results late


def simulate_on_cluster(
    folder: Path, dask: str | None, options: Options | None = None, tell: Callable[[str], None] | None = None
) -> Simulate:
    """Simulates batches as sweeps below `folder`: on the Dask cluster at an address, or else as Slurm job arrays.

    options : of Slurm; tell : is told in words what is waited for, "" when that is over.
    """
    say = tell or (lambda _: None)

    def act(question: Question, batches: Sequence[Batch], done: Callable[[Batch, Outcome], None]) -> None:
        plan = _plan(folder, question, batches)
        if dask is not None:
            from driblet_analysis.sweep.dask_cluster import work_on_dask

            with _stopping() as stop:
                outcome = work_on_dask(
                    plan.directory, dask, stop=stop, on_progress=lambda progress: say(progress.waiting)
                )
            if outcome.stopped:
                raise InterruptedRunError("interrupted; --resume goes on")
            if outcome.left:
                why = "; ".join([*outcome.notes, f"{outcome.left} of {plan.points} batches are left"])
                raise CannotAnswerError(f"{plan.directory}: {why}; --resume goes on")
        else:
            _submit_and_wait(plan, options or Options(points_per_task=1), say)
        _take_in(plan, batches, done)

    return act


def _plan(folder: Path, question: Question, batches: Sequence[Batch]) -> Plan:
    """The sweep of these batches, made anew or found as it was left."""
    name = hashlib.sha256(json.dumps([question.identity, batches]).encode()).hexdigest()[:12]
    place = (folder / FOLDER / name).absolute()
    with writing(folder):
        place.mkdir(parents=True, exist_ok=True)
    rows = io.StringIO()
    writer = csv.writer(rows)
    writer.writerow([question.path, "run.seed", "run.replicates"])
    writer.writerows(batches)
    write_text(place / "points.csv", rows.getvalue())
    write_text(place / "system.toml", toml_text(question.raw))
    sweep = 'system = "system.toml"\npoints_from = "points.csv"\nkeep = "trajectories"\nshared_streams = true\n'
    write_text(place / "sweep.toml", sweep)
    make_plan(place / "sweep.toml", place / "sweep")
    return read_plan(place / "sweep")


def _stopping() -> AbstractContextManager[Stop]:
    """A stop that answers signals, where signals can be answered."""
    if threading.current_thread() is threading.main_thread():
        return stopping_on_signals()
    return nullcontext(Stop())


def _submit_and_wait(plan: Plan, options: Options, say: Callable[[str], None]) -> None:
    """Raises CannotAnswerError when the jobs end and leave points undone."""
    if not queued_tasks(plan.directory):
        submit(plan.directory, options, retry=True)
    quiet = time.monotonic()
    while read_status(plan.directory).left:
        queue = queued_tasks(plan.directory)
        if queue:
            say("Slurm, " + ", ".join(f"{n} tasks {state.lower()}" for state, n in queue.items()))
            quiet = time.monotonic()
        elif time.monotonic() - quiet > _PATIENCE_SECONDS:
            text = (
                f"{plan.directory}: its Slurm tasks have ended and left points undone; see slurm/ in it, then --resume"
            )
            raise CannotAnswerError(text)
        time.sleep(_POLL_SECONDS)
    say("")


def _take_in(plan: Plan, batches: Sequence[Batch], done: Callable[[Batch, Outcome], None]) -> None:
    points = {(p.changes[plan.paths[0]], p.changes["run.seed"]): p.number for p in plan.read(range(plan.points))}
    for shard in range(plan.shards):
        results, _, _ = union(plan, shard)
        inside = set(plan.shard(shard))
        for batch in batches:
            number = points[batch.value, batch.seed]
            if number not in inside:
                continue
            result = results.get(number)
            if result is None or result.error or result.run is None:
                why = result.error if result is not None and result.error else "it was not simulated"
                raise CannotAnswerError(f"{plan.directory}: point {number} has no result: {why}; --resume tries again")
            with tempfile.TemporaryDirectory(prefix="driblet-") as place:
                path = Path(place) / "run.h5"
                path.write_bytes(result.run)
                with Run(path) as ensemble:
                    done(batch, ensemble.outcomes.met[:, 0])
