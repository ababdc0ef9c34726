"""Planning: a sweep file becomes a directory that workers can work on, and a directory takes more points."""

from __future__ import annotations

import math
import time
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.errors import InputError, Problem, one_problem
from driblet.version import __version__
from driblet_analysis.sweep.axes import AxisError, column_of
from driblet_analysis.sweep.directory import NAME, Plan, read_plan, read_values, write_plan
from driblet_analysis.sweep.estimate import Estimate, estimate_work
from driblet_analysis.sweep.keypaths import toml_text
from driblet_analysis.sweep.points import Points, Row, make_points, place, point_system, simulated
from driblet_analysis.sweep.summary import summary_columns
from driblet_analysis.sweep.sweep_file import Sweep, read_sweep

MOST_SHARDS = 1000  # files: few enough for the quota of a cluster, many enough for 1,000 tasks
SHARD_SECONDS = 4.0  # of one core: how uneven workers may end, where that does not make too many shards
_LEAST_SHARDS = 64
_SHARD_BYTES = 64e6


class Report(NamedTuple):
    """What planning did. Attributes: plan; added : points that are new; estimate : of all points of the sweep file."""

    plan: Plan
    added: int
    estimate: Estimate


def make_plan(sweep_file: str | Path, directory: str | Path) -> Report:
    """Validate every point of a sweep file and write the plan. The same plan again changes nothing.

    Raises InputError with every problem found, and when the directory is taken.
    """
    directory = Path(directory)
    _check_place(directory)
    sweep = read_sweep(sweep_file)
    points = make_points(sweep)
    estimate = _estimate(sweep, points)
    plan = Plan(
        directory,
        sweep.identity,
        sweep.title,
        sweep.keep,
        sweep.shared_streams,
        time.strftime("%Y-%m-%dT%H:%M:%S%z"),
        __version__,
        points.paths,
        len(sweep.paths),
        points.columns,
        _shards(estimate, MOST_SHARDS),
        estimate.seconds_per_point,
        toml_text(sweep.raw),
        sweep.text,
    )
    if (directory / NAME).exists():
        standing = read_plan(directory)
        if standing.identity == plan.identity and standing.hashes() == {int(h) for h in points.hashes}:
            return Report(standing, 0, estimate)
        if begun(directory):
            text = (
                "work has begun on another plan here; `driblet sweep extend` adds points to it, another -o keeps both"
            )
            raise one_problem(str(directory), "", text)
    write_plan(plan, points.rows, points.hashes)
    return Report(plan, len(points), estimate)


def extend_plan(directory: str | Path, sweep_file: str | Path) -> Report:
    """Add the points of a sweep file that a directory does not have yet; what is there stays, done or not.

    Raises InputError when the sweep file differs in anything but its points.
    """
    plan = read_plan(directory)
    plan.check_version()
    sweep = read_sweep(sweep_file)
    if sweep.identity != plan.identity:
        raise one_problem(sweep.source, "", f"is another sweep than the one in {directory}: {_difference(plan, sweep)}")
    points = make_points(sweep)
    estimate = _estimate(sweep, points)
    known = plan.hashes()
    new = [i for i, h in enumerate(points.hashes) if int(h) not in known]
    if not new:
        return Report(plan, 0, estimate)
    order = [points.paths.index(path) for path in plan.paths]
    rows: list[Row] = [tuple(points.rows[i][j] for j in order) for i in new]
    values, hashes = read_values(plan)
    _check_columns(plan, [*values[:1], *rows], sweep)
    share = len(new) / len(points)
    added = _shards(
        estimate._replace(
            points=len(new), bytes=estimate.bytes * share, core_seconds=_times(estimate.core_seconds, share)
        ),
        max(_LEAST_SHARDS, MOST_SHARDS - plan.shards),
    )
    extended = replace(plan, first=np.concatenate([plan.first[:-1], plan.points + added]), sweep_text=sweep.text)
    write_plan(extended, [*values, *rows], np.concatenate([hashes, points.hashes[new]]))
    return Report(extended, len(new), estimate)


def begun(directory: Path) -> bool:
    """Whether any worker has taken up work in a sweep's directory."""
    return any(next((directory / name).glob("*"), None) is not None for name in ("shards", "claims"))


def _times(value: float | None, factor: float) -> float | None:
    return None if value is None else value * factor


def _check_place(directory: Path) -> None:
    if directory.is_dir():
        if not (directory / NAME).exists() and next(directory.iterdir(), None) is not None:
            raise one_problem(str(directory), "", "is not empty and holds no sweep; choose another -o")
    elif directory.exists():
        raise one_problem(str(directory), "", "is a file; a directory's name is needed")
    elif not directory.absolute().parent.is_dir():
        raise one_problem(str(directory), "", f"cannot be made: the folder {directory.parent} does not exist")


def _estimate(sweep: Sweep, points: Points) -> Estimate:
    def system(number: int):  # type: ignore[no-untyped-def]
        changes = dict(zip(points.paths, points.rows[number], strict=True))
        return simulated(point_system(sweep.raw, changes, sweep.source))

    return estimate_work(system, len(points), sweep.keep, len(summary_columns(system(0))))


def _shards(estimate: Estimate, most: int) -> NDArray[np.int64]:
    """First point of each shard, and the number of points: shape=(shards + 1,)."""
    points = estimate.points
    size = SHARD_SECONDS / estimate.seconds_per_point if estimate.seconds_per_point else points
    size = min(size, points / _LEAST_SHARDS, _SHARD_BYTES * points / estimate.bytes)
    whole = max(1, math.ceil(points / most), int(size))
    return np.append(np.arange(0, points, whole), points).astype(np.int64)


def _difference(plan: Plan, sweep: Sweep) -> str:
    """In which respect a sweep file is another sweep than a plan; points are not compared."""
    if toml_text(sweep.raw) != plan.system_text:
        return "the base system, replicates or seed differ"
    if set(sweep.paths) != set(plan.paths[: plan.axes]):
        return f"its axes are {', '.join(sweep.paths)}, those there are {', '.join(plan.paths[: plan.axes])}"
    if sweep.keep != plan.keep or sweep.shared_streams != plan.shared_streams:
        return "keep or shared_streams differ"
    return "its [derived] values differ"


def _check_columns(plan: Plan, rows: Sequence[Sequence[object]], sweep: Sweep) -> None:
    problems = []
    for i, path in enumerate(plan.paths):
        try:
            column_of(row[i] for row in rows)  # type: ignore[misc]
        except AxisError as error:
            problems.append(Problem(place(sweep, path), f"{error} (the directory's points included)"))
    if problems:  # of the first only: derived values follow their axes
        raise InputError(sweep.source, problems[:1])
