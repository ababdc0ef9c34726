"""Sizing: the question as it is asked, the compartments that answer it, and what the answer means.

A folder holds a sizing: jobs.jsonl, a line for each batch of compartments that is done; answer.json; answer.h5, a run of new
compartments at the answer; the figure and the page. The search asks for batches in an order that depends on their outcomes
alone, so one that was interrupted and goes on ends in the same answer.
"""

from __future__ import annotations

import hashlib
import json
import os
import tomllib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from driblet.engines.contract import Recorders
from driblet.ensemble import run, sample_times
from driblet.errors import CannotAnswerError, InputError, InterruptedRunError, Problem, one_problem
from driblet.network import Network
from driblet.quantities import Quantity, QuantityError, read_quantity
from driblet.requirements import CompiledRequirements
from driblet.results import Run
from driblet.system import System, load
from driblet.system.build import build
from driblet.version import __version__
from driblet_analysis.sizing_search import (
    ALREADY_MET,
    FOUND,
    NOT_REACHABLE,
    Finding,
    Job,
    Outcome,
    Scale,
    Settings,
    search,
)
from driblet_analysis.sweep.keypaths import KeyPathError, Scalar, lookup, replaced, toml_text

BATCH = 200  # compartments simulated and kept together
FRESH = 500  # new compartments at the answer
JOBS, ANSWER, RUN_FILE, FIGURE, PAGE = "jobs.jsonl", "answer.json", "answer.h5", "curve.png", "page.html"
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


class Batch(NamedTuple):
    """Compartments simulated together. Attributes: value : as the system file has it; seed; replicates."""

    value: Scalar
    seed: int
    replicates: int


class Progress(NamedTuple):
    """Where a sizing stands. Attributes: done : compartments; budget; value : the one that is worked on."""

    done: int
    budget: int
    value: str


Simulate = Callable[[Question, Sequence[Batch], Callable[[Batch, Outcome], None]], None]


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
    """Samples are kept only where the requirement has to be judged on them."""
    system = question.system_at(question.scale.high)
    compiled = CompiledRequirements.of(system, Network.of(system), system.settings.duration_s)
    watched = "requirements" in Recorders._fields  # by the kernels of this version
    record = "summary" if watched and not compiled.by_grid else "trajectories"
    return replace(question, raw=replaced(question.raw, {"run.record": record}))


def batches_of(question: Question, job: Job) -> list[Batch]:
    """A job cut into batches; batch k of a stream holds the same compartments at every value."""
    base = int(question.raw.get("run", {}).get("seed", 0))
    made = []
    for k, start in enumerate(range(0, job.replicates, BATCH)):
        digest = hashlib.sha256(f"{base} size {job.stream} {k}".encode()).digest()
        # 31 bits, so that it stays exact wherever a sweep writes it down as a number
        seed = int.from_bytes(digest[:4], "big") >> 1
        made.append(Batch(question.text(job.value), seed, min(BATCH, job.replicates - start)))
    return made


def simulate_here(threads: int | None = None) -> Simulate:
    """Simulates batches in this process, one after the other."""

    def act(question: Question, batches: Sequence[Batch], done: Callable[[Batch, Outcome], None]) -> None:
        for batch in batches:
            raw = replaced(question.raw, {question.path: batch.value})
            system = build(raw, toml_text(raw), question.system.source)
            with run(system, replicates=batch.replicates, seed=batch.seed, threads=threads) as ensemble:
                done(batch, ensemble.outcomes.met[:, 0])

    return act


@dataclass
class _Ledger:
    """The batches that are done, on disk: a line each, written and synced before it counts."""

    folder: Path
    question: Question
    simulate: Simulate
    on_progress: Callable[[Progress], None] | None = None

    def __post_init__(self) -> None:
        self.done: dict[Batch, Outcome] = {}
        self.count = 0
        path = self.folder / JOBS
        if not path.exists():
            self._append({"identity": self.question.identity, "driblet_version": __version__})
            return
        lines = path.read_text("utf-8").split("\n")
        if lines[-1]:  # cut short by a kill: that batch is done again
            self._truncate(path, lines)
        for line in lines[1:-1]:
            row = json.loads(line)
            met = np.array([{"1": 1, "0": 0}.get(c, -1) for c in row["met"]], dtype=np.int8)
            self.done[Batch(row["value"], row["seed"], row["replicates"])] = met

    @staticmethod
    def _truncate(path: Path, lines: list[str]) -> None:
        text = "\n".join(lines[:-1])
        path.write_text(f"{text}\n" if text else "", "utf-8")

    def _append(self, row: Mapping[str, Any]) -> None:
        try:
            with (self.folder / JOBS).open("a", encoding="utf-8") as stream:
                stream.write(json.dumps(row) + "\n")
                stream.flush()
                os.fsync(stream.fileno())
        except OSError as error:
            raise one_problem(str(self.folder), "", f"cannot be written: {(error.strerror or '').lower()}") from error

    def _take_in(self, batch: Batch, met: Outcome) -> None:
        text = "".join("1" if m == 1 else "0" if m == 0 else "?" for m in met)
        self._append({**batch._asdict(), "met": text})
        self.done[batch] = met
        self._tell(batch)

    def _tell(self, batch: Batch) -> None:
        self.count += batch.replicates
        if self.on_progress is not None:
            self.on_progress(Progress(self.count, self.question.settings.budget, str(batch.value)))

    def ask(self, jobs: Sequence[Job]) -> list[Outcome]:
        """Outcomes of jobs, simulated where they are not there yet."""
        cut = [batches_of(self.question, job) for job in jobs]
        wanted = [batch for one in cut for batch in one]
        for batch in wanted:
            if batch in self.done:
                self._tell(batch)
        missing = [batch for batch in dict.fromkeys(wanted) if batch not in self.done]
        if missing:
            self.simulate(self.question, missing, self._take_in)
        found = [np.concatenate([self.done[batch] for batch in one]) for one in cut]
        if all((outcome < 0).all() for outcome in found):
            raise CannotAnswerError(
                f"{self.question.system.source}: requirements.{self.question.requirement}: no compartment was watched long "
                "enough to decide it; a longer run or another span is needed"
            )
        return found


@dataclass(frozen=True)
class Sizing:
    """A finished sizing. Attributes: finding; question; folder; at : value of the run of new compartments, or None."""

    question: Question
    finding: Finding
    folder: Path
    at: float | None

    def fresh(self) -> Run:
        """The run of new compartments at `at`."""
        return Run(self.folder / RUN_FILE)


def size(
    question: Question,
    folder: str | Path,
    *,
    resume: bool = False,
    force: bool = False,
    simulate: Simulate | None = None,
    threads: int | None = None,
    on_progress: Callable[[Progress], None] | None = None,
) -> Sizing:
    """Answer a question; everything simulated is kept in `folder`.

    Raises InputError for a folder that is taken, CannotAnswerError where nothing decides the requirement, and
    InterruptedRunError after Ctrl-C.
    """
    folder = Path(folder)
    _claim(folder, question, resume, force)
    ledger = _Ledger(folder, question, simulate or simulate_here(threads), on_progress)
    try:
        finding = search(question.scale, question.settings, ledger.ask)
        at = finding.at if finding.status in (FOUND, ALREADY_MET, NOT_REACHABLE) else None
        if at is not None:
            _run_fresh(question, folder, at, threads)
    except (KeyboardInterrupt, InterruptedRunError):
        kept = sum(batch.replicates for batch in ledger.done)
        text = f"interrupted: {kept} compartments are kept in {folder}; go on with --resume"
        raise InterruptedRunError(text) from None
    return Sizing(question, finding, folder, at)


def _run_fresh(question: Question, folder: Path, value: float, threads: int | None) -> None:
    """New compartments at the answer, in a run file that every command reads; independent of how it was found."""
    system = question.system_at(value)
    seed = batches_of(question, Job(value, -1, 1))[0].seed
    run(system, folder / RUN_FILE, replicates=FRESH, seed=seed, threads=threads, force=True).close()


def _claim(folder: Path, question: Question, resume: bool, force: bool) -> None:
    path = folder / JOBS
    try:
        if folder.exists() and not folder.is_dir():
            raise one_problem(str(folder), "", "is a file; -o names a folder")
        if path.exists() and not force:
            if not resume:
                raise one_problem(
                    str(folder),
                    "",
                    "holds a sizing already; --resume goes on with it, --force starts anew, another -o keeps it",
                )
            if _identity(path) != question.identity:
                raise one_problem(str(folder), "", "holds another sizing than this one; another -o keeps it")
            return
        if folder.exists() and not path.exists() and any(folder.iterdir()):
            raise one_problem(str(folder), "", "is not empty and holds no sizing; -o names a folder of its own")
        folder.mkdir(exist_ok=True)
        for name in (JOBS, ANSWER, RUN_FILE, FIGURE, PAGE):
            (folder / name).unlink(missing_ok=True)
    except OSError as error:
        raise one_problem(str(folder), "", f"cannot be written: {(error.strerror or str(error)).lower()}") from error


def _identity(path: Path) -> str:
    try:
        return str(json.loads(path.read_text("utf-8").split("\n", 1)[0])["identity"])
    except (ValueError, KeyError, TypeError):
        return ""


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
