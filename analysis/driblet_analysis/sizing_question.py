"""The question of a sizing as it is asked on the command line, checked against its system file before anything runs."""

from __future__ import annotations

import hashlib
import json
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, NamedTuple

from driblet.errors import InputError, Problem
from driblet.quantities import Quantity, QuantityError, read_quantity
from driblet.run_settings import sample_times
from driblet.system import System, load
from driblet.system.build import build
from driblet.version import __version__
from driblet_analysis.sizing_parts import (
    Scale,
    Settings,
)
from driblet_analysis.sweep.keypaths import KeyPathError, Scalar, lookup, replaced, toml_text

_NOT_SIZED = ("run.seed", "run.replicates", "run.record", "run.engine")


@dataclass(frozen=True)
class Question:
    """What is asked, checked.

    Attributes: system : as in the file; raw : the parsed file with the one requirement; path : key path that is varied;
    scale, unit : its values, unit "" for plain numbers; requirement; settings.
    """

    system: System
    raw: Mapping[str, Any]
    path: str
    scale: Scale
    unit: str
    requirement: str
    settings: Settings

    def text(self, value: float) -> Scalar:
        """A value as the system file has it."""
        if self.unit:
            return f"{value:.6g} {self.unit}"
        return int(value) if self.scale.whole else value

    def system_at(self, value: float, **settings: Scalar) -> System:
        """The system with a value, and keys of [run], put in. Raises InputError."""
        changes = {self.path: self.text(value), **{f"run.{key}": v for key, v in settings.items()}}
        raw = replaced(self.raw, changes)
        return build(raw, toml_text(raw), self.system.source)

    @property
    def identity(self) -> str:
        """A hash of everything that shapes the answer, but for the stopping rule."""
        facts = [__version__, self.raw, self.path, self.unit, [self.scale.low, self.scale.high], self.requirement]
        return hashlib.sha256(json.dumps(facts, sort_keys=True, default=str).encode()).hexdigest()[:32]


def read_question(
    file: str | Path,
    path: str,
    low: str,
    high: str,
    requirement: str,
    within: float = Settings(0.5).within,
    budget: int = Settings(0.5).budget,
    seed: int | None = None,
) -> Question:
    """Read and check a question. Raises InputError with everything that is wrong."""
    system = load(file)
    raw = tomllib.loads(system.text)
    problems: list[Problem] = []
    _check_path(raw, path, problems)
    share = _share(system, requirement, problems)
    limits = _limits(low, high, problems)
    if problems:
        raise InputError(str(file), problems)
    assert limits is not None
    unit, first, last, temperature = limits
    run_table = {**raw.get("run", {}), **({} if seed is None else {"seed": seed})}
    raw = {**raw, "requirements": {requirement: raw["requirements"][requirement]}, "run": run_table}
    scale = Scale(first, last, log=first > 0 and not temperature)
    question = Question(system, raw, path, scale, unit, requirement, Settings(share, within, budget))
    for option, value in ((low, first), (high, last)):
        try:
            made = question.system_at(value)
            sample_times(made.settings)
        except InputError as error:
            problems += [
                Problem(f"--between {option}", f"{p.key}: {p.text}" if p.key else p.text) for p in error.problems
            ]
    if problems:
        raise InputError(str(file), problems)
    return _with_record(_with_whole(question))


def _check_path(raw: Mapping[str, Any], path: str, problems: list[Problem]) -> None:
    where = f"--vary {path}"
    try:
        there = lookup(raw, path)
    except KeyPathError as error:
        problems.append(Problem(where, str(error)))
        return
    if path in _NOT_SIZED or path.split(".")[0] == "requirements":
        problems.append(Problem(where, "shapes the question and not the compartment; name what you could make larger"))
        return
    if path == "conditions.temperature":
        fixed = [
            n for n, r in raw.get("reactions", {}).items() if isinstance(r, Mapping) and "activation_energy" not in r
        ]
        if fixed:
            text = f"rate constants do not follow it: {', '.join(fixed[:4])} would keep those of one temperature"
            problems.append(Problem(where, text))
            return
    try:
        if isinstance(there, bool):
            raise QuantityError("")
        read_quantity(there, allow_plain=True)
    except QuantityError:
        problems.append(Problem(where, f"{there!r} is no quantity; a number or a number with a unit can be sized"))


def _share(system: System, name: str, problems: list[Problem]) -> float:
    where = f"--requirement {name}"
    found = next((r for r in system.requirements if r.name == name), None)
    if found is None:
        known = ", ".join(r.name for r in system.requirements)
        hint = f"the file has {known}" if known else "the file has none; add [requirements.NAME]"
        problems.append(Problem(where, f"is no requirement of this file; {hint}"))
    elif found.share is None:
        text = "states no share of compartments; add one, such as share = 0.95"
        problems.append(Problem(f"requirements.{name}.share", text))
    elif found.share == 1.0:
        text = (
            "all of the compartments: no sample can show that, since however many meet it the next may not; "
            "ask for a share below 1, such as 0.99 (which takes 500 or more compartments to show)"
        )
        problems.append(Problem(f"requirements.{name}.share", text))
    else:
        return found.share
    return 0.5


def _limits(low: str, high: str, problems: list[Problem]) -> tuple[str, float, float, bool] | None:
    read: list[Quantity] = []
    for text in (low, high):
        try:
            read.append(read_quantity(text, allow_plain=True))
        except QuantityError as error:
            problems.append(Problem("--between", str(error)))
    if len(read) < 2:
        return None
    first, last = read
    if dict(first.unit.dimensionality) != dict(last.unit.dimensionality):
        problems.append(Problem("--between", f'"{low}" and "{high}" are of different kinds'))
        return None
    registry = first.unit._REGISTRY
    end = float(registry.Quantity(last.value, last.unit).to(first.unit).magnitude)
    end = float(f"{end:.10g}")
    if not first.value < end:
        text = "are reversed" if first.value > end else "are the same value"
        problems.append(Problem("--between", f'"{low}" and "{high}" {text}; the lower limit comes first'))
        return None
    unit = "" if first.unit.dimensionless else low.split(None, 1)[1].strip()
    return unit, first.value, end, first.kind == "temperature"


def _with_whole(question: Question) -> Question:
    """Whole values only, where the limits are whole and the build refuses what lies between two of them."""
    scale = question.scale
    if not (scale.low.is_integer() and scale.high.is_integer()):
        return question
    try:
        question.system_at(scale.low + 0.5)
    except InputError:
        return replace(question, scale=replace(scale, whole=True))
    return question


def _with_record(question: Question) -> Question:
    """Trajectories are kept, whatever the file says: a requirement may have to be judged on their samples."""
    return replace(question, raw=replaced(question.raw, {"run.record": "trajectories"}))


class Load(NamedTuple):
    """What one species or enzyme amounts to in the median compartment. copies : mean; concentration : mol/L."""

    name: str
    copies: float
    concentration_M: float


def loads_of(system: System) -> list[Load]:
    """Everything that is loaded, in the order of the file, enzymes in all their states together."""
    omega = system.compartment.omega
    copies: dict[str, float] = {}
    for species in system.free_species:
        name = species.enzyme or species.label
        copies[name] = copies.get(name, 0.0) + species.mean_copies(omega)
    return [Load(name, n, n / omega) for name, n in copies.items() if n > 0]
