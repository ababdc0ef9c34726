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
import time
from collections.abc import Callable, Sequence
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
from driblet_analysis.sweep.status import read_status

FOLDER = "rounds"
_POLL_SECONDS = 5.0
_PATIENCE_SECONDS = 120.0  # with nothing in the queue, for file servers that show results late


def simulate_on_cluster(folder: Path, dask: str | None) -> Simulate:
    """Simulates batches as sweeps below `folder`: on the Dask cluster at an address, or else as Slurm job arrays."""

    def act(question: Question, batches: Sequence[Batch], done: Callable[[Batch, Outcome], None]) -> None:
        plan = _plan(folder, question, batches)
        if dask is not None:
            from driblet_analysis.sweep.dask_cluster import work_on_dask
            from driblet_analysis.sweep.work import Stop

            if work_on_dask(plan.directory, dask, stop=Stop()).stopped:
                raise InterruptedRunError("interrupted")
        else:
            _submit_and_wait(plan)
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


def _submit_and_wait(plan: Plan) -> None:
    """Raises CannotAnswerError when the jobs end and leave points undone."""
    from driblet_analysis.sweep.slurm import Options, queued_tasks, submit

    if not queued_tasks(plan.directory):
        submit(plan.directory, Options(points_per_task=1), retry=True)
    quiet = time.monotonic()
    while read_status(plan.directory).left:
        if queued_tasks(plan.directory):
            quiet = time.monotonic()
        elif time.monotonic() - quiet > _PATIENCE_SECONDS:
            text = (
                f"{plan.directory}: its Slurm tasks have ended and left points undone; see slurm/ in it, then --resume"
            )
            raise CannotAnswerError(text)
        time.sleep(_POLL_SECONDS)


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
