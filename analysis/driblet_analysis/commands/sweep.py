"""`driblet sweep`: many points of one system, planned, worked on anywhere, collected into one table."""

from __future__ import annotations

import re
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from driblet.commands.screen import CAUTION, console, duration, number, print_json, table
from driblet.errors import EXIT_CANNOT_ANSWER, EXIT_DONE, EXIT_INTERRUPTED, one_problem
from driblet_analysis.commands.cluster_options import WaitingLines, only_with_slurm, slurm_options

if TYPE_CHECKING:
    from driblet_analysis.sweep.local import Outcome
    from driblet_analysis.sweep.plan import Report

DIRECTORY = click.argument("directory", metavar="DIR", type=click.Path(path_type=Path))
SWEEP_FILE = click.argument("sweep_file", metavar="SWEEP.toml", type=click.Path(path_type=Path))


@click.group(short_help="Simulate many points of a system, here or on a cluster.")
def sweep() -> None:
    """Simulate one system at many points: plan, work (here, in parts, on Slurm, on Dask), collect.

    A directory holds the sweep. Work can be stopped, killed and taken up again at any time, by any number of workers;
    every way of working gives the same bits.
    """


@sweep.command(short_help="Validate every point and write the plan.")
@SWEEP_FILE
@click.option("-o", "--output", "directory", metavar="DIR", required=True, type=click.Path(path_type=Path))
def plan(sweep_file: Path, directory: Path) -> None:
    """Validate every point of SWEEP.toml, write the plan to DIR and print what the sweep will cost."""
    from driblet_analysis.sweep.plan import make_plan

    report = make_plan(sweep_file, directory)
    _show_report(report, "planned" if report.added else "planned already, nothing changed")
    console().print(f"next:    driblet sweep work {directory}", markup=False, soft_wrap=True)


@sweep.command(short_help="Add points to a sweep.")
@DIRECTORY
@SWEEP_FILE
def extend(directory: Path, sweep_file: Path) -> None:
    """Add the points of SWEEP.toml that DIR does not have yet; those it has, done or not, stay as they are."""
    from driblet_analysis.sweep.plan import extend_plan

    report = extend_plan(directory, sweep_file)
    _show_report(report, f"{report.added} points added" if report.added else "no new points, nothing changed")
    console().print(f"next:    driblet sweep work {directory}", markup=False, soft_wrap=True)


def _show_report(report: Report, what: str) -> None:
    from driblet_analysis.sweep.directory import Plan

    out, made, estimate = console(), report.plan, report.estimate
    assert isinstance(made, Plan)
    out.print(made.title, style="bold", end="")
    out.print(f": {what}")
    rows = [
        [path, "axis" if i < made.axes else "derived", column.unit or ("words" if column.kind == "text" else "1")]
        for i, (path, column) in enumerate(zip(made.paths, made.columns, strict=True))
    ]
    out.print(table("what differs between points", ["key path", "", "unit"], rows, left=3))
    run_table = made.raw.get("run", {})
    replicates = "as swept" if "run.replicates" in made.paths else str(run_table.get("replicates", 100))
    out.print(
        f"{made.points:,} points of {replicates} compartments, in {made.shards} shards, keeping {made.keep}",
        markup=False,
    )
    if estimate.events is None or estimate.core_seconds is None:
        out.print("the work cannot be estimated: the rate equations of these systems could not be integrated")
    else:
        basis = "" if estimate.sampled >= estimate.points else f" (from {estimate.sampled} points spread over the plan)"
        out.print(
            f"expected: {number(estimate.events, 3)} reaction events, about {duration(estimate.core_seconds)} on one "
            f"core, {_bytes(estimate.bytes)} of disk{basis}",
            markup=False,
        )


def _bytes(size: float) -> str:
    for unit in ("B", "kB", "MB", "GB"):
        if size < 1000:
            return f"{size:.3g} {unit}"
        size /= 1000
    return f"{size:.3g} TB"


def _part(context: click.Context, parameter: click.Parameter, value: str | None) -> tuple[int, int] | None:
    if value is None:
        return None
    match = re.fullmatch(r"(\d{1,9})/(\d{1,9})", value)
    if not match or not 1 <= int(match[1]) <= int(match[2]):
        raise one_problem("command line", "--part", f'"{value}" is no part: write K/N, such as 3/40, K from 1 to N')
    return int(match[1]), int(match[2])


@sweep.command(short_help="Do what is left: here, in parts, on Slurm or on Dask.")
@DIRECTORY
@click.option("--workers", type=click.IntRange(1, 4096), help="Processes here; default: one per core this job may use.")
@click.option("--part", callback=_part, metavar="K/N", help="Do the K-th of N parts only, for any scheduler.")
@click.option("--retry-failed", is_flag=True, help="Do points again that ended with an error.")
@click.option("--slurm", is_flag=True, help="Submit a Slurm job array instead of working here.")
@click.option("--dask", metavar="ADDRESS|FILE", help="Work on a running Dask cluster: its address or scheduler file.")
@slurm_options
@click.option("--cpus", type=click.IntRange(1, 4096), help="Slurm: cores of a task; it runs a worker on each.")
@click.option("--points-per-task", type=click.IntRange(1), help="Slurm: how much a task takes on.")
@click.option("--warm-up", is_flag=True, hidden=True, help="Compile what the sweep needs, and nothing else.")
def work(
    directory: Path,
    workers: int | None,
    part: tuple[int, int] | None,
    retry_failed: bool,
    slurm: bool,
    dask: str | None,
    partition: str | None,
    account: str | None,
    limit: str | None,
    memory: str | None,
    cpus: int | None,
    throttle: int | None,
    points_per_task: int | None,
    setup: tuple[str, ...],
    warm_up: bool,
) -> int:
    """Do what is left of the sweep in DIR.

    Ctrl-C, a termination or Slurm's warning stops at a clean place: what is finished is written. Exit status 0: nothing is
    left here; 3: points failed, or are left with no worker on them; 130: stopped.
    """
    given = {
        "--partition": partition, "--account": account, "--time": limit, "--memory": memory, "--cpus": cpus,
        "--throttle": throttle, "--points-per-task": points_per_task, "--setup": setup,
    }  # fmt: skip
    _check_combination(given, slurm, dask, part, workers, retry_failed)
    if warm_up:
        from driblet_analysis.sweep.directory import read_plan
        from driblet_analysis.sweep.work import warm_up as compile_all

        compile_all(read_plan(directory))
        return EXIT_DONE
    if slurm:
        from driblet_analysis.sweep.slurm import Options, submit

        options = Options(partition, account, limit, memory, cpus or 1, throttle, points_per_task, setup)
        submitted = submit(directory, options, retry=retry_failed)
        out = console()
        out.print(submitted.text, markup=False, soft_wrap=True)
        return EXIT_DONE
    from driblet_analysis.sweep.work import stopping_on_signals

    with _bar() as update, stopping_on_signals() as stop:
        if dask is not None:
            from driblet_analysis.sweep.dask_cluster import work_on_dask

            outcome = work_on_dask(directory, dask, retry=retry_failed, stop=stop, on_progress=update)
        else:
            from driblet_analysis.sweep.local import work_locally

            outcome = work_locally(
                directory, workers=workers, part=part, retry=retry_failed, stop=stop, on_progress=update
            )
    return _show_outcome(outcome, directory)


def _check_combination(
    given: dict[str, Any], slurm: bool, dask: str | None, part: object, workers: object, retry: bool
) -> None:
    only_with_slurm(slurm, given)
    chosen = [name for name, value in (("--slurm", slurm), ("--dask", dask), ("--part", part)) if value]
    if len(chosen) > 1:
        raise click.UsageError(f"{' and '.join(chosen)} are different ways of working: give one of them")
    if workers and (slurm or dask):
        raise click.UsageError("--workers counts processes here; a cluster has its own")


def _show_outcome(outcome: Outcome, directory: Path) -> int:
    out = console()
    for note in outcome.notes:
        out.print(f"note: {note}", markup=False)
    text = f"{outcome.written} points written in this session"
    if outcome.failed:
        text += f", {outcome.failed} of them ended with an error (`driblet sweep status {directory}` shows it)"
    out.print(text, markup=False, soft_wrap=True)
    if outcome.left:
        held = f", {outcome.held} of them in other workers' hands" if outcome.held else ""
        out.print(
            f"left: {outcome.left} points{held}; `driblet sweep work {directory}` goes on", markup=False, soft_wrap=True
        )
    if outcome.stopped:
        out.print("stopped when asked; what is finished is kept", markup=False)
        return EXIT_INTERRUPTED
    return EXIT_CANNOT_ANSWER if outcome.failed or outcome.left > outcome.held else EXIT_DONE


@contextmanager
def _bar() -> Iterator[Any]:
    """A progress bar on a terminal, elsewhere a line for what is waited for; yields what takes the reports."""
    if not sys.stderr.isatty():
        tell = WaitingLines()
        yield lambda progress: tell(progress.waiting)
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

    bar = Progress(
        TextColumn("sweeping"),
        BarColumn(complete_style="blue", finished_style="blue"),
        TextColumn("{task.completed}/{task.total} points  {task.fields[detail]}"),
        TimeRemainingColumn(compact=True),
        console=Console(file=sys.stderr),
        transient=True,
    )
    with bar:
        task = bar.add_task("", total=None, detail="")

        def update(progress: Any) -> None:
            detail = f"{progress.workers} workers" + (f", {progress.failed} failed" if progress.failed else "")
            if progress.waiting:
                detail = f"waiting: {progress.waiting}"
            bar.update(task, total=progress.total, completed=progress.done, detail=detail)

        yield update


@sweep.command(short_help="Show what is done, failed and left.")
@DIRECTORY
@click.option("--json", "as_json", is_flag=True, help="Print the same facts as JSON.")
def status(directory: Path, as_json: bool) -> None:
    """Show where the sweep in DIR stands, from what is on its disk: points done, failed and left, and who works on them."""
    from driblet_analysis.sweep.slurm import queued_tasks
    from driblet_analysis.sweep.status import read_status

    found = read_status(directory)
    queue = queued_tasks(directory)
    facts: dict[str, Any] = {
        "directory": str(directory),
        "title": found.plan.title,
        "points": found.plan.points,
        "done": found.done,
        "failed": found.failed,
        "left": found.left,
        "workers": found.workers,
        "at_work": found.at_work,
        "silent": found.silent,
        "seconds_per_point": found.seconds_per_point,
        "core_seconds_left": found.left * (found.seconds_per_point or found.plan.seconds_per_point) or None,
        "failures": [{"point": n, "error": e} for n, e in found.failures],
        "workers_died_at": found.suspects,
        "damaged": found.damaged,
        "slurm_tasks": queue,
    }
    if as_json:
        print_json(facts)
        return
    out = console()
    out.print(
        f"{found.plan.title}: {found.done} of {found.plan.points} points done, {found.failed} failed, {found.left} left",
        markup=False,
    )
    if found.left:
        left = facts["core_seconds_left"]
        cost = f"about {duration(left)} of one core are left; " if left else ""
        now = f"{found.workers} shards in work ({found.at_work} points)" if found.workers else "no worker is on them"
        out.print(f"{cost}{now}", markup=False)
    if found.silent:
        out.print(
            f"no sign of life for a while from the workers of {found.silent} points; they are given up soon",
            markup=False,
        )
    for text, times in found.errors.most_common(5):
        first = next(n for n, e in found.failures if e == text) if any(e == text for _, e in found.failures) else None
        out.print(
            f"{times} failed" + (f", such as point {first}" if first is not None else "") + f": {text}", markup=False
        )
    if found.errors:
        out.print(f"`driblet sweep work {directory} --retry-failed` does them again", markup=False)
    if found.suspects:
        out.print(f"workers died at point {', '.join(map(str, found.suspects[:10]))}", markup=False)
    for line in found.damaged:
        out.print(f"{line}; `driblet sweep work` sets it aside and does its points again", markup=False)
    if queue:
        out.print("Slurm: " + ", ".join(f"{n} tasks {state.lower()}" for state, n in queue.items()), markup=False)


@sweep.command(short_help="Make one table of all points, or a run file of one.")
@DIRECTORY
@click.option(
    "-o",
    "--output",
    metavar="TABLE",
    required=True,
    type=click.Path(path_type=Path),
    help="TABLE.csv, TABLE.h5, or a name without ending for both.",
)
@click.option(
    "--point", type=click.IntRange(0), help="Write this point's run file instead; simulated again if it was not kept."
)
@click.option("--force", is_flag=True, help="Replace an existing output.")
def collect(directory: Path, output: Path, point: int | None, force: bool) -> None:
    """Write one tidy table: a row per point, units in the head, how it was made at its top.

    Points that are not done yet are left out, and said so.
    """
    from driblet_analysis.sweep.collecting import collect as make_table
    from driblet_analysis.sweep.collecting import collect_run

    out = console()
    if point is not None:
        kept = collect_run(directory, point, output, force=force)
        how = "as kept" if kept else "simulated again, with the same bits as in the sweep"
        out.print(f"point {point}, {how}", markup=False)
        out.print(f"written: {output}", markup=False, soft_wrap=True)
        return
    made = make_table(directory, output, force=force)
    failed = f", {made.failed} that ended with an error" if made.failed else ""
    left = f"; {made.left} points are not done and not in it" if made.left else ""
    out.print(f"{made.done} points{failed}{left}", markup=False)
    for line in made.damaged:
        out.print(f"note: {line}", markup=False)
    out.print(f"written: {', '.join(map(str, made.paths))}", markup=False, soft_wrap=True)
    out.print(CAUTION, markup=False)
