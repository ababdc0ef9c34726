"""Collecting: the results of a sweep as one tidy table, and single points as run files."""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import NamedTuple

from driblet.ensemble import run
from driblet.errors import one_problem
from driblet_analysis.sweep.axes import in_column
from driblet_analysis.sweep.directory import Plan, read_plan
from driblet_analysis.sweep.files import sync_folder
from driblet_analysis.sweep.shards import union
from driblet_analysis.sweep.summary import SummaryColumn
from driblet_analysis.sweep.table import Cell, CsvTable, Hdf5Table, TableColumn
from driblet_analysis.sweep.work import record_of

_WRITERS: dict[str, type[CsvTable] | type[Hdf5Table]] = {".csv": CsvTable, ".h5": Hdf5Table}


class Collected(NamedTuple):
    """What a table holds.

    Attributes: paths : files written; done, failed, left : points; damaged : lines about files left out.
    """

    paths: tuple[Path, ...]
    done: int
    failed: int
    left: int
    damaged: tuple[str, ...]


def collect(directory: str | Path, output: str | Path, *, force: bool = False) -> Collected:
    """Write the points that are done or failed to TABLE.csv, TABLE.h5, or without an ending both.

    Shards are read one after the other, so memory does not grow with the number of points. Raises InputError for a
    directory that is no sweep of this version, and an output that is taken or cannot be written.
    """
    plan = read_plan(directory)
    paths = _outputs(Path(output), force)
    survey = _survey(plan)
    temporary = {path: path.with_name(f".{path.stem[:100]}.{secrets.token_hex(4)}.tmp") for path in paths}
    try:
        with ExitStack() as stack:
            results = [_result_column(c) for c in survey.columns]
            head = [*_point_columns(plan), *results, TableColumn("error", "1", "text", "result")]
            provenance = _provenance(plan, survey)
            writers = [_WRITERS[path.suffix.lower()](temporary[path], head, provenance) for path in paths]
            for writer in writers:
                stack.callback(writer.close)
            for shard in range(plan.shards):
                rows = list(_rows(plan, shard, survey.columns))
                for writer in writers:
                    writer.add(rows)
        for path in paths:
            with temporary[path].open("rb+") as stream:
                os.fsync(stream.fileno())
            temporary[path].replace(path)
            sync_folder(path.absolute().parent)
    except OSError as error:
        raise one_problem(str(output), "", f"cannot be written: {(error.strerror or str(error)).lower()}") from error
    finally:
        for unfinished in temporary.values():
            unfinished.unlink(missing_ok=True)
    left = plan.points - survey.done - survey.failed
    return Collected(tuple(paths), survey.done, survey.failed, left, tuple(survey.damaged))


def collect_run(directory: str | Path, point: int, output: str | Path, *, force: bool = False) -> bool:
    """Write one point as a run file: the one kept, or simulated again to the same bits. Returns whether it was kept.

    Raises InputError for an unknown point, a directory that is no sweep of this version, and an output that is taken.
    """
    plan = read_plan(directory)
    if not 0 <= point < plan.points:
        text = f"there is no point {point}; points go from 0 to {plan.points - 1}"
        raise one_problem(str(directory), "", text)
    shard = next(s for s in range(plan.shards) if point in plan.shard(s))
    result = union(plan, shard)[0].get(point)
    path = Path(output)
    if result is not None and result.run is not None:
        if path.exists() and not force:
            raise one_problem(str(path), "", "exists already; --force replaces it")
        temporary = path.with_name(f".{secrets.token_hex(4)}.tmp")
        try:
            temporary.write_bytes(result.run)
            temporary.replace(path)
        except OSError as error:
            temporary.unlink(missing_ok=True)
            raise one_problem(str(path), "", f"cannot be written: {(error.strerror or str(error)).lower()}") from error
        return True
    plan.check_version()
    one = plan.read(range(point, point + 1))[0]
    system = plan.system(one)
    run(system, path, key=one.key, record=record_of(system), force=force).close()
    return False


class _Survey(NamedTuple):
    """What shards hold, found before anything is written."""

    columns: list[SummaryColumn]
    done: int
    failed: int
    damaged: list[str]


def _survey(plan: Plan) -> _Survey:
    columns: dict[SummaryColumn, None] = {}
    done = failed = 0
    damaged: list[str] = []
    for shard in range(plan.shards):
        results, _, faults = union(plan, shard, runs=False)
        damaged += faults
        for result in results.values():
            columns.update(dict.fromkeys(result.values))
            failed += bool(result.error)
            done += not result.error
    return _Survey(list(columns), done, failed, damaged)


def _outputs(output: Path, force: bool) -> list[Path]:
    if output.suffix.lower() in _WRITERS:
        paths = [output]
    elif output.suffix:
        raise one_problem(str(output), "", "is no table's name: it ends in .csv or .h5, or in nothing for both")
    else:
        paths = [output.with_name(output.name + ending) for ending in _WRITERS]
    for path in paths:
        if path.exists() and not force:
            raise one_problem(str(path), "", "exists already; --force replaces it")
        if not path.absolute().parent.is_dir():
            raise one_problem(str(path), "", f"cannot be written: the folder {path.parent} does not exist")
    return paths


def _point_columns(plan: Plan) -> list[TableColumn]:
    columns = [TableColumn("point", "1", "whole", "point")]
    for i, (path, column) in enumerate(zip(plan.paths, plan.columns, strict=True)):
        role = "axis" if i < plan.axes else "derived"
        columns.append(TableColumn(path, column.unit or "1", column.kind, role))
    return columns


def _result_column(column: SummaryColumn) -> TableColumn:
    # whole numbers, but NaN where a point failed
    return TableColumn(column.name, column.unit, "number", "result")


def _rows(plan: Plan, shard: int, columns: list[SummaryColumn]) -> Iterator[list[Cell]]:
    results, _, _ = union(plan, shard, runs=False)
    for point in plan.read(plan.shard(shard)) if results else ():
        result = results.get(point.number)
        if result is None:
            continue
        row: list[Cell] = [point.number]
        row += [in_column(value, column) for value, column in zip(point.changes.values(), plan.columns, strict=True)]
        row += [result.values.get(column, float("nan")) for column in columns]
        row.append(result.error)
        yield row


def _provenance(plan: Plan, survey: _Survey) -> dict[str, str]:
    run_table = plan.raw.get("run", {})
    return {
        "sweep": plan.title,
        "driblet_version": plan.driblet_version,
        "sweep_identity": plan.identity,
        "points": f"{plan.points} planned, {survey.done} done, {survey.failed} failed",
        "axes": ", ".join(plan.paths[: plan.axes]),
        "derived": ", ".join(plan.paths[plan.axes :]),
        "streams": "shared by all points" if plan.shared_streams else "keyed by the values of each point",
        "seed": str(run_table.get("seed", 0)),
        "averages": "over the run after its burn-in, its second half where none is stated; the compartment is the sampling "
        "unit",
        "system_file": plan.system_text,
        "sweep_file": plan.sweep_text,
    }
