"""The sweep file (TOML): which system, which values at which key paths, how they are combined, what is kept."""

from __future__ import annotations

import hashlib
import json
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from driblet.errors import InputError, Problem, one_problem
from driblet.system import load
from driblet.system.tables import unknown_key
from driblet_analysis.sweep.axes import Axis, AxisError, read_axis
from driblet_analysis.sweep.derived import DerivedError, Formula, read_formula
from driblet_analysis.sweep.keypaths import KeyPathError, Scalar, lookup, replaced
from driblet_analysis.sweep.points_file import read_points_file

COMBINATIONS = ("crossed", "zipped", "sobol")
KEEPS = ("summary", "trajectories")
MOST_POINTS = 1_000_000
KEYS = (
    "title",
    "system",
    "combine",
    "points",
    "points_from",
    "replicates",
    "seed",
    "keep",
    "shared_streams",
    "temperature_independent",
    "axes",
    "derived",
)


@dataclass(frozen=True)
class Sweep:
    """A sweep file, read and checked against its system.

    Attributes: source : the sweep file's name; text : its text; system_source, raw : the base system's file name and its
    parsed text with the sweep's replicates and seed put in; axes; combine : how they make points; points : number of Sobol
    points; rows : points read from a file, one value per axis, or None; formulas : derived values by key path, in order.
    """

    source: str
    text: str
    title: str
    system_source: str
    raw: Mapping[str, Any]
    axes: tuple[Axis, ...]
    combine: str
    points: int
    rows: tuple[tuple[Scalar, ...], ...] | None
    formulas: Mapping[str, Formula]
    keep: str
    shared_streams: bool

    @property
    def paths(self) -> tuple[str, ...]:
        """Key paths of the axes."""
        return tuple(axis.path for axis in self.axes)

    @property
    def identity(self) -> str:
        """A hash of everything but the points: sweeps that share it can share a directory."""
        formulas = {path: formula.text for path, formula in self.formulas.items()}
        facts = [self.raw, sorted(self.paths), formulas, self.keep, self.shared_streams]
        return hashlib.sha256(json.dumps(facts, sort_keys=True, default=str).encode()).hexdigest()[:32]

    def changes(self, values: tuple[Scalar, ...]) -> dict[str, Scalar]:
        """What a point puts where: its own values and those derived from them. Raises DerivedError."""
        changes: dict[str, Scalar] = dict(zip(self.paths, values, strict=True))
        for path, formula in self.formulas.items():
            known = {p: changes[p] if p in changes else lookup(self.raw, p) for p in formula.paths}
            changes[path] = formula.value(known)
        return changes


def read_sweep(path: str | Path) -> Sweep:
    """Read a sweep file and its base system. Raises InputError with every problem found."""
    source = str(path)
    raw, text = _parse(Path(path), source)
    problems: list[Problem] = []
    for key in raw:
        if key not in KEYS:
            problems.append(Problem(key, unknown_key(key, list(KEYS))))
    system = raw.get("system")
    if not isinstance(system, str) or not system.strip():
        problems.append(Problem("system", 'is missing: the file to sweep, such as system = "vesicle.toml"'))
        raise InputError(source, problems)
    system_path = Path(path).parent / system
    # whatever is wrong with the system by itself is told under its own name; its text carries the files it names
    system_read = load(system_path)
    base = _with_settings({"title": system_read.title, **tomllib.loads(system_read.text)}, raw)
    title = raw.get("title", "")
    if not isinstance(title, str):
        problems.append(Problem("title", "a text in quotes is needed"))
        title = ""
    combine, points = _combination(raw, problems)
    axes, rows = _axes(raw, Path(path).parent, combine, problems)
    _check_paths(base, axes, raw, problems)
    formulas = _formulas(raw, base, [axis.path for axis in axes], problems)
    keep = raw.get("keep", "summary")
    if keep not in KEEPS:
        problems.append(Problem("keep", f'{keep!r} is not known: "summary" or "trajectories"'.replace("'", '"')))
    shared = raw.get("shared_streams", False)
    if not isinstance(shared, bool):
        problems.append(Problem("shared_streams", f"{shared!r} will not do: true or false is needed"))
    if problems:
        raise InputError(source, problems)
    return Sweep(
        source,
        text,
        title or Path(source).stem,
        str(system_path),
        base,
        axes,
        combine,
        points,
        rows,
        formulas,
        keep,
        shared,
    )


def _parse(path: Path, source: str) -> tuple[dict[str, Any], str]:
    try:
        text = path.read_bytes().decode("utf-8-sig")
        raw = tomllib.loads(text)
    except UnicodeDecodeError as error:
        raise one_problem(source, "", "is not text in UTF-8, so it is no sweep file") from error
    except tomllib.TOMLDecodeError as error:
        reason = str(error)
        raise one_problem(source, "", f"is not valid TOML: {reason[0].lower()}{reason[1:]}") from error
    except OSError as error:
        raise one_problem(source, "", f"cannot be read: {(error.strerror or str(error)).lower()}") from error
    except (ValueError, RecursionError) as error:
        raise one_problem(source, "", f"is no sweep file: {error}") from error
    if not text.strip():
        raise one_problem(source, "", "is empty; a sweep file names a system and its axes")
    if "system" not in raw and "species" in raw:
        raise one_problem(source, "", 'is a system file; a sweep file names it: system = "..." and [axes]')
    return raw, text


def _with_settings(base: dict[str, Any], raw: Mapping[str, Any]) -> dict[str, Any]:
    run = base.get("run", {})
    settings = {key: raw[key] for key in ("replicates", "seed") if key in raw}
    return {**base, "run": {**run, **settings}} if settings else base


def _combination(raw: Mapping[str, Any], problems: list[Problem]) -> tuple[str, int]:
    combine = raw.get("combine", "crossed")
    if combine not in COMBINATIONS:
        problems.append(
            Problem("combine", f'{combine!r} is not known: "crossed", "zipped" or "sobol"'.replace("'", '"'))
        )
        return "crossed", 0
    points = raw.get("points", 0)
    if combine == "sobol":
        if isinstance(points, bool) or not isinstance(points, int) or not 1 <= points <= MOST_POINTS:
            text = f"a whole number from 1 to {MOST_POINTS} is needed: how many Sobol points to draw"
            problems.append(Problem("points", text))
            return combine, 1
    elif "points" in raw:
        problems.append(Problem("points", 'goes with combine = "sobol"; the number of values is set per axis'))
    return combine, points


def _axes(
    raw: Mapping[str, Any], folder: Path, combine: str, problems: list[Problem]
) -> tuple[tuple[Axis, ...], tuple[tuple[Scalar, ...], ...] | None]:
    if "points_from" in raw:
        for key in ("axes", "combine", "points"):
            if key in raw:
                problems.append(Problem(key, "does not go with points_from, which gives every point in full"))
        name = raw["points_from"]
        if problems:
            return (), None
        if not isinstance(name, str) or not name.strip():
            problems.append(Problem("points_from", 'the name of a CSV file is needed, such as "points.csv"'))
            return (), None
        paths, rows = read_points_file(folder / name)
        return tuple(Axis(p, tuple(dict.fromkeys(r[i] for r in rows))) for i, p in enumerate(paths)), rows
    section = raw.get("axes")
    if not isinstance(section, Mapping) or not section:
        problems.append(Problem("axes", 'is missing: key paths and values, such as "species.ATP" = ["0.5 mM", "1 mM"]'))
        return (), None
    axes = []
    for path, value in _flat(section):
        key = f'axes."{path}"'
        try:
            axis = read_axis(path, value)
            if combine != "sobol":
                axis.grid()
            elif axis.span is not None and axis.span.points:
                problems.append(Problem(key, "points belongs to crossed and zipped axes; Sobol points fill the span"))
            axes.append(axis)
        except AxisError as error:
            problems.append(Problem(key, str(error)))
    if combine == "zipped" and len({len(axis.grid()) for axis in axes}) > 1:
        lengths = ", ".join(f"{axis.path} {len(axis.grid())}" for axis in axes)
        problems.append(Problem("axes", f"zipped axes need the same number of values: {lengths}"))
    return tuple(axes), None


def _flat(section: Mapping[str, Any], prefix: str = "") -> list[tuple[str, Any]]:
    """Axes by path; a path written without quotes arrives from TOML as nested tables."""
    found = []
    for key, value in section.items():
        path = f"{prefix}{key}"
        if isinstance(value, Mapping) and not {"from", "to", "points", "spacing"} & set(value):
            found += _flat(value, f"{path}.")
        else:
            found.append((path, value))
    return found


def _check_paths(
    base: Mapping[str, Any], axes: tuple[Axis, ...], raw: Mapping[str, Any], problems: list[Problem]
) -> None:
    where = "points_from" if "points_from" in raw else "axes"
    for axis in axes:
        if axis.path == "conditions.temperature" and raw.get("temperature_independent") is not True:
            text = (
                "moves the equilibrium constants and not the rate constants, which would keep those of one temperature; "
                "temperature_independent = true says that this is meant"
            )
            problems.append(Problem(f'{where}."{axis.path}"', text))
        try:
            replaced(base, {axis.path: "1"})
        except KeyPathError as error:
            problems.append(Problem(f'{where}."{axis.path}"', str(error)))
        for key in ("replicates", "seed"):
            if axis.path == f"run.{key}" and key in raw:
                problems.append(Problem(key, f"is an axis too (run.{key}): give one of them"))


def _formulas(
    raw: Mapping[str, Any], base: Mapping[str, Any], paths: list[str], problems: list[Problem]
) -> dict[str, Formula]:
    section = raw.get("derived", {})
    if not isinstance(section, Mapping):
        problems.append(Problem("derived", "a table of formulas by key path is needed"))
        return {}
    formulas: dict[str, Formula] = {}
    for path, text in _flat(section):
        key = f'derived."{path}"'
        try:
            if path in paths:
                raise DerivedError("is an axis too; a value is either swept or derived")
            if not isinstance(text, str):
                raise DerivedError('a formula in quotes is needed, such as "0.05 * species.ATP"')
            replaced(base, {path: "1"})
            formula = read_formula(text)
            _check_used(base, [p for p in formula.paths if p not in paths and p not in formulas])
            formulas[path] = formula
        except (DerivedError, KeyPathError) as error:
            problems.append(Problem(key, str(error)))
    return formulas


def _check_used(base: Mapping[str, Any], paths: list[str]) -> None:
    for path in paths:
        try:
            lookup(base, path)
        except KeyPathError as error:
            raise DerivedError(f'"{path}" {error}') from error
