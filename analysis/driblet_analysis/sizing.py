"""Sizing: the question as it is asked, the compartments that answer it, and what the answer means.

A folder holds a sizing: jobs.jsonl, a line for each batch of compartments that is done; answer.json; answer.h5, a run of new
compartments at the answer; the figure and the page. The search asks for batches in an order that depends on their outcomes
alone, so one that was interrupted and goes on ends in the same answer.
"""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

from driblet.ensemble import run
from driblet.errors import CannotAnswerError, InterruptedRunError, one_problem
from driblet.results import Run
from driblet.system.build import build
from driblet.version import __version__
from driblet_analysis.sizing_parts import (
    ALREADY_MET,
    FOUND,
    NOT_REACHABLE,
    Finding,
    Job,
    Outcome,
)
from driblet_analysis.sizing_question import Question
from driblet_analysis.sizing_search import search
from driblet_analysis.sweep.keypaths import Scalar, replaced, toml_text

BATCH = 200  # compartments simulated and kept together
FRESH = 500  # new compartments at the answer
JOBS, ANSWER, RUN_FILE, FIGURE, PAGE = "jobs.jsonl", "answer.json", "answer.h5", "curve.png", "page.html"


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
            with run(
                system, replicates=batch.replicates, seed=batch.seed, threads=threads, estimate_error=False
            ) as ensemble:
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
