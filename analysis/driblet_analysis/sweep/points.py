"""The points of a sweep: made from its axes, each validated as a whole system before anything runs."""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.errors import InputError, Problem
from driblet.run_settings import sample_times
from driblet.system import System
from driblet.system.build import build
from driblet.treatments import with_treatments
from driblet_analysis.sweep.axes import AxisError, Column, canonical, column_of, sobol_fractions, stream_key
from driblet_analysis.sweep.derived import DerivedError
from driblet_analysis.sweep.keypaths import KeyPathError, Scalar, replaced
from driblet_analysis.sweep.sweep_file import MOST_POINTS, Sweep

_MOST_PROBLEMS = 20
Row = tuple[Scalar, ...]


@dataclass(frozen=True)
class Points:
    """Validated points.

    Attributes: paths : of the axes, then of the derived values; rows : a value per path; columns : what the values of a path
    have in common; hashes : uint64, (points,), of the axes' values.
    """

    paths: tuple[str, ...]
    rows: list[Row]
    columns: tuple[Column, ...]
    hashes: NDArray[np.uint64]

    def __len__(self) -> int:
        return len(self.rows)


def make_points(sweep: Sweep) -> Points:
    """Every point of a sweep, each built into a System and thrown away again. Raises InputError with what is wrong."""
    values = _combined(sweep)
    _refuse_twins(sweep, values)
    rows: list[Row] = []
    faults = _Faults(sweep)
    for number, row in enumerate(values):
        try:
            changes = sweep.changes(row)
            rows.append(tuple(changes.values()))
            simulated(point_system(sweep.raw, changes, sweep.source))
        except DerivedError as error:
            faults.add(number, row, Problem("derived", str(error)))
        except KeyPathError as error:
            faults.add(number, row, Problem("axes", str(error)))
        except InputError as error:
            for problem in _causes(sweep, error.problems):
                faults.add(number, row, problem)
    faults.raise_any()
    paths = (*sweep.paths, *sweep.formulas)
    columns = []
    for i, path in enumerate(paths):
        try:
            columns.append(column_of(row[i] for row in rows))
        except AxisError as error:
            raise InputError(sweep.source, [Problem(place(sweep, path), str(error))]) from error
    hashes = [stream_key(sweep.paths, row) for row in values]
    return Points(paths, rows, tuple(columns), np.array(hashes, dtype=np.uint64))


def simulated(system: System) -> System:
    """The system as a run treats it, its enzymes lumped where that was asked. Raises InputError where it cannot be run."""
    times = sample_times(system.settings)
    return with_treatments(system, None, float(times[1]))[0] if system.enzymes else system


def _causes(sweep: Sweep, problems: Sequence[Problem]) -> list[Problem]:
    """Problems without those of derived values that only repeat what is wrong with an axis."""
    wrong = {path for path in sweep.paths if any(_touches(path, p.key) for p in problems)}
    follows = [path for path, formula in sweep.formulas.items() if wrong & set(formula.paths)]
    return [p for p in problems if not any(p.key and _touches(path, p.key) for path in follows)]


def point_system(raw: Mapping[str, Any], changes: Mapping[str, Scalar], source: str, text: str = "") -> System:
    """The system of one point. Raises InputError."""
    return build(replaced(raw, changes), text, source)


def _combined(sweep: Sweep) -> list[Row]:
    if sweep.rows is not None:
        return list(sweep.rows)
    if sweep.combine == "sobol":
        seed = sweep.raw.get("run", {}).get("seed", 0)
        fractions = sobol_fractions(len(sweep.axes), sweep.points, int(seed))
        return [tuple(axis.drawn(float(u)) for axis, u in zip(sweep.axes, row, strict=True)) for row in fractions]
    grids = [axis.grid() for axis in sweep.axes]
    if sweep.combine == "zipped":
        return list(zip(*grids, strict=True))
    size = 1
    for grid in grids:
        size *= len(grid)
    if size > MOST_POINTS:
        text = f"crossed they make {size} points; at most {MOST_POINTS} are planned"
        raise InputError(sweep.source, [Problem("axes", text)])
    return list(itertools.product(*grids))


def _refuse_twins(sweep: Sweep, rows: Sequence[Row]) -> None:
    seen: dict[tuple[str, ...], int] = {}
    twins = []
    for number, row in enumerate(rows):
        first = seen.setdefault(tuple(canonical(value) for value in row), number)
        if first != number:
            twins.append((first, number))
    if twins:
        first, second = twins[0]
        more = f", and {len(twins) - 1} more such pairs" if len(twins) > 1 else ""
        text = f"points {first} and {second} are the same ({describe(sweep.paths, rows[second])}){more}"
        raise InputError(sweep.source, [Problem("points_from" if sweep.rows is not None else "axes", text)])


def describe(paths: Sequence[str], row: Row) -> str:
    """The values of a point for a message: `species.ATP = 1 mM, run.seed = 3`."""
    return ", ".join(f"{path} = {value}" for path, value in zip(paths, row, strict=False))


def place(sweep: Sweep, path: str) -> str:
    """Where a value of a point stands in the sweep file."""
    if path in sweep.formulas:
        return f'derived."{path}"'
    return f'points_from."{path}"' if sweep.rows is not None else f'axes."{path}"'


class _Faults:
    """Problems of points, those that many points share told once."""

    def __init__(self, sweep: Sweep) -> None:
        self.sweep = sweep
        self.found: dict[Problem, list[int]] = {}
        self.values: dict[int, Row] = {}

    def add(self, number: int, row: Row, problem: Problem) -> None:
        self.found.setdefault(problem, []).append(number)
        self.values[number] = row

    def raise_any(self) -> None:
        """Raise what was found, the first of it."""
        lines = list(self._lines())
        if lines:
            left = len(lines) - _MOST_PROBLEMS
            more = [Problem("", f"and {left} more problems in other points")] if left > 0 else []
            raise InputError(self.sweep.source, lines[:_MOST_PROBLEMS] + more)

    def _lines(self) -> Iterator[Problem]:
        told: set[str] = set()
        for problem, numbers in self.found.items():
            path = self._path(problem)
            text = problem.text if path == problem.key or not problem.key else f"{problem.key}: {problem.text}"
            if path is None:
                yield Problem(self._where(numbers), text)
            elif path not in told:  # one line an axis, though every value may have words of its own
                told.add(path)
                alike = {n for other, ns in self.found.items() if self._path(other) == path for n in ns}
                yield Problem(place(self.sweep, path), f"{text}; in {self._where(sorted(alike))}")

    def _path(self, problem: Problem) -> str | None:
        return next((p for p in (*self.sweep.paths, *self.sweep.formulas) if _touches(p, problem.key)), None)

    def _where(self, numbers: list[int]) -> str:
        others = f" and {len(numbers) - 1} more" if len(numbers) > 1 else ""
        return f"point {numbers[0]} ({describe(self.sweep.paths, self.values[numbers[0]])}){others}"


def _touches(path: str, key: str) -> bool:
    return bool(key) and (key == path or key.startswith(f"{path}.") or path.startswith(f"{key}."))
