"""Slurm: a sweep as a job array, one part of the points a task. The script is written to be read, kept, and submitted again."""

from __future__ import annotations

import json
import math
import re
import shlex
import shutil
import subprocess
import sys
from collections import Counter
from collections.abc import Sequence
from pathlib import Path
from typing import Any, NamedTuple

from driblet.errors import InputError, Problem, one_problem
from driblet.version import __version__
from driblet_analysis.sweep.directory import Plan, read_plan
from driblet_analysis.sweep.files import write_text, writing
from driblet_analysis.sweep.local import Session, repair, shards_of_part

FOLDER = "slurm"
WARNING_SECONDS = 60  # before its time limit a task is told to stop, which takes it as long as writing one file
_TASK_SECONDS = 1200.0  # of the tasks that are made where the user does not say how long they should be
_SHORTEST_SECONDS = 240.0
_TIMEOUT_SECONDS = 60.0
_LARGEST_ARRAY = 1001  # Slurm's own default; ids stay below it


class Options(NamedTuple):
    """What a task asks of Slurm; None leaves it to the cluster. Attributes: setup : shell lines before the work."""

    partition: str | None = None
    account: str | None = None
    time: str | None = None
    memory: str | None = None
    cpus: int = 1
    throttle: int | None = None
    points_per_task: int | None = None
    setup: Sequence[str] = ()


class Submitted(NamedTuple):
    """A submitted array. Attributes: job : its number, None when nothing was left; script; tasks; text : what to tell."""

    job: str | None
    script: Path | None
    tasks: list[int]
    text: str


def submit(directory: str | Path, options: Options, *, retry: bool = False) -> Submitted:
    """Write a job script for what is left of a sweep and submit it, a warm-up job first.

    Raises InputError where Slurm is absent, refuses or does not answer, and when tasks of this sweep still wait or run.
    """
    plan = read_plan(directory)
    plan.check_version()
    check_options(options)
    if shutil.which("sbatch") is None:
        text = "sbatch is not on this machine: go where jobs are submitted, or use --part K/N under another scheduler"
        raise one_problem("command line", "--slurm", text)
    queue = queued_tasks(plan.directory)
    if queue:
        waiting = ", ".join(f"{n} {state.lower()}" for state, n in queue.items())
        jobs = " ".join(job["job"] for job in _jobs(plan.directory))
        text = f"tasks of this sweep are in Slurm's queue already ({waiting}): let them end, or `scancel {jobs}`"
        raise one_problem(str(directory), "", text)
    notes = repair(plan, range(plan.shards))
    parts = _parts(plan, options)
    left = set(Session(plan, range(plan.shards), None).shards_to_do(retry))
    tasks = [k for k in range(1, parts + 1) if left.intersection(shards_of_part(plan, (k, parts)))]
    if not tasks:
        return Submitted(None, None, [], "nothing is left to do; nothing was submitted")
    folder = plan.directory / FOLDER
    with writing(plan.directory):
        folder.mkdir(exist_ok=True)
        number = 1 + len(list(folder.glob("sweep-*.sh")))
        script = folder / f"sweep-{number:03d}.sh"
        write_text(script, script_text(plan, options, parts, retry))
    array = _ranges(tasks) + (f"%{options.throttle}" if options.throttle else "")
    warm = _sbatch(["--job-name=driblet-warm-up", f"--output={_log(folder, 'warm-up-%j')}", str(script)])
    try:
        job = _sbatch([f"--array={array}", f"--dependency=afterany:{warm}", str(script)])
    except InputError:
        _call(["scancel", warm])
        raise
    with writing(plan.directory):
        entry = {"job": job, "warm_up": warm, "script": script.name, "parts": parts}
        write_text(folder / "jobs.json", json.dumps([*_jobs(plan.directory), entry], indent=1))
    text = (
        f"submitted: job array {job}, {len(tasks)} of {parts} tasks ({array}), after warm-up job {warm}\n"
        f"script:    {script}\nnext:      driblet sweep status {directory}"
    )
    return Submitted(job, script, tasks, "\n".join([*(f"note: {n}" for n in notes), text]))


def script_text(plan: Plan, options: Options, parts: int, retry: bool) -> str:
    """The job script: without an array it warms up, as task K of an array it does part K."""
    folder = (plan.directory / FOLDER).absolute()
    lines = ["#!/bin/bash", f"#SBATCH --job-name={_job_name(plan)}", f'#SBATCH --output="{_log(folder, "%A_%a")}"']
    lines += [f"#SBATCH --cpus-per-task={options.cpus}", f"#SBATCH --signal=B:USR1@{WARNING_SECONDS}"]
    wanted = {"partition": options.partition, "account": options.account, "time": options.time, "mem": options.memory}
    lines += [f"#SBATCH --{name}={value}" for name, value in wanted.items() if value]
    here = shlex.quote(str(plan.directory.absolute()))
    program = f"driblet=({shlex.quote(sys.executable)} -m driblet)"
    lines += [
        "",
        f"# Part SLURM_ARRAY_TASK_ID of {parts} of a driblet sweep ({__version__}). Each task runs a worker per allocated core,",
        f"# and stops at a clean place when Slurm warns it, {WARNING_SECONDS} s before its limit. By hand, one part or all:",
        f"#   sbatch --array=1-{parts} {shlex.quote(str(folder))}/sweep-NNN.sh",
        "",
        *options.setup,
    ]
    lines.append(program)
    if options.setup:
        lines.append("command -v driblet >/dev/null && driblet=(driblet)  # of the environment set up above")
    again = " --retry-failed" if retry else ""
    lines += [
        'if [ -z "${SLURM_ARRAY_TASK_ID:-}" ]; then',
        "  # once, before the array: compiles, so that its tasks do not all compile at the same time",
        f'  exec "${{driblet[@]}}" sweep work {here} --warm-up',
        "fi",
        f'exec "${{driblet[@]}}" sweep work {here} --part "$SLURM_ARRAY_TASK_ID/{parts}"{again}',
    ]
    return "\n".join(lines) + "\n"


def queued_tasks(directory: str | Path) -> dict[str, int]:
    """Tasks of a sweep's jobs in Slurm's queue by state; empty where there are none or nothing can be known."""
    jobs = _jobs(Path(directory))
    if not jobs or shutil.which("squeue") is None:
        return {}
    ids = ",".join(str(job[name]) for job in jobs for name in ("warm_up", "job"))
    try:
        done = _call(["squeue", "--noheader", "--array", f"--jobs={ids}", "--format=%T"])
    except InputError:
        return {}
    return dict(Counter(done.stdout.split())) if done.returncode == 0 else {}


def _jobs(directory: Path) -> list[dict[str, Any]]:
    try:
        jobs = json.loads((directory / FOLDER / "jobs.json").read_text("utf-8"))
    except (OSError, ValueError):
        return []
    return jobs if isinstance(jobs, list) else []


def check_options(options: Options) -> None:
    """Raises InputError with every option that Slurm could not read, or that would leave no time to stop cleanly."""
    problems = []
    for name in ("partition", "account", "time", "memory"):
        value = getattr(options, name)
        if value is not None and not re.fullmatch(r"[\w.:,@%+-]+", value):
            problems.append(Problem(f"--{name}", f'"{value}" will not do: letters, digits and . : , - _ are read'))
    seconds = _seconds(options.time) if options.time else None
    if seconds is not None and seconds < _SHORTEST_SECONDS:
        text = f'"{options.time}" is too short: Slurm warns a task a minute or two before its limit; give 4 minutes or more'
        problems.append(Problem("--time", text))
    if problems:
        raise InputError("command line", problems)


def _seconds(limit: str) -> float | None:
    """A time limit as Slurm reads it: minutes, minutes:seconds, hours:minutes:seconds, days-hours[:minutes[:seconds]]."""
    match = re.fullmatch(r"(?:(\d+)-)?(\d+)(?::(\d+))?(?::(\d+))?", limit)
    if match is None:
        return None  # Slurm will say what it thinks of it
    days, *rest = match.groups()
    numbers = [int(n) for n in rest if n is not None]
    weights = (3600, 60, 1) if days is not None or len(numbers) == 3 else (60, 1, 0)
    return int(days or 0) * 86400 + sum(n * w for n, w in zip(numbers, weights, strict=False))


def _parts(plan: Plan, options: Options) -> int:
    """Into how many tasks the sweep is cut; a task holds whole shards."""
    if options.points_per_task is not None:
        wanted = math.ceil(plan.points / options.points_per_task)
    elif plan.seconds_per_point:
        wanted = math.ceil(plan.points * plan.seconds_per_point / (_TASK_SECONDS * options.cpus))
    else:
        wanted = 100
    return max(1, min(wanted, plan.shards, _array_limit() - 1))


def _array_limit() -> int:
    done = _call(["scontrol", "show", "config"])
    match = re.search(r"^MaxArraySize\s*=\s*(\d+)", done.stdout, re.MULTILINE)
    return int(match[1]) if match and int(match[1]) > 1 else _LARGEST_ARRAY


def _ranges(numbers: Sequence[int]) -> str:
    """Sorted numbers as Slurm writes them: 1-4,7,9-10."""
    pieces: list[list[int]] = []
    for number in numbers:
        if pieces and number == pieces[-1][1] + 1:
            pieces[-1][1] = number
        else:
            pieces.append([number, number])
    return ",".join(f"{a}-{b}" if a < b else str(a) for a, b in pieces)


def _job_name(plan: Plan) -> str:
    return "driblet-" + (re.sub(r"[^A-Za-z0-9_-]+", "-", plan.directory.absolute().name).strip("-")[:40] or "sweep")


def _log(folder: Path, name: str) -> str:
    """A log's name for Slurm, which replaces what follows a percent sign."""
    return f"{str(folder.absolute()).replace('%', '%%')}/{name}.log"


def _sbatch(arguments: list[str]) -> str:
    done = _call(["sbatch", "--parsable", *arguments])
    if done.returncode != 0 or not done.stdout.strip():
        reason = " ".join(line.partition("error: ")[2] or line for line in done.stderr.strip().splitlines()[:3])
        raise one_problem("command line", "--slurm", f"Slurm refuses: {reason or 'no reason given'}")
    return done.stdout.strip().splitlines()[-1].split(";")[0]


def _call(command: list[str]) -> subprocess.CompletedProcess[str]:
    try:
        return subprocess.run(command, capture_output=True, text=True, timeout=_TIMEOUT_SECONDS, check=False)
    except subprocess.TimeoutExpired as error:
        text = f"{command[0]} did not answer within {_TIMEOUT_SECONDS:g} s; nothing more was submitted"
        raise one_problem("command line", "--slurm", text) from error
    except OSError as error:
        raise one_problem("command line", "--slurm", f"{command[0]} cannot be run: {error.strerror}") from error
