"""Local processes: as many workers as there are cores, each a process of its own that may die without harm to the others."""

from __future__ import annotations

import json
import os
import selectors
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple

from driblet.errors import DribletError, InputError, one_problem
from driblet_analysis.sweep.claims import standings, take
from driblet_analysis.sweep.directory import Plan, read_plan
from driblet_analysis.sweep.files import writing
from driblet_analysis.sweep.shards import DamagedShardError, is_complete, read_results, shard_files, union
from driblet_analysis.sweep.work import Stop, Worker, Written

_MOST_DEATHS = 3  # in a row, without a point written in between
_STOP_SECONDS = 60.0
_SAY_SECONDS = 3.0
_STOPPED = 130


class Progress(NamedTuple):
    """Where the work stands.

    Attributes: done, failed : points on disk, of those asked for; total; seconds; workers; waiting : what is waited for, in
    words, while nothing can be done.
    """

    done: int
    failed: int
    total: int
    seconds: float
    workers: int
    waiting: str = ""


class Outcome(NamedTuple):
    """How `work` ended. Attributes: written, failed : points of this session; left : points not done yet; held : points of
    those that another worker holds; stopped : whether it was asked to stop; notes : what the user should know."""

    written: int
    failed: int
    left: int
    held: int
    stopped: bool
    notes: tuple[str, ...]


def cores() -> int:
    """Cores this process may use: of the allocation of a job, else those it is bound to."""
    allocated = os.environ.get("SLURM_CPUS_PER_TASK") if os.environ.get("SLURM_JOB_ID") else None
    if allocated and allocated.isdigit() and int(allocated) > 0:
        return int(allocated)
    if "SLURM_JOB_ID" in os.environ:
        return 1
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def shards_of_part(plan: Plan, part: tuple[int, int] | None) -> list[int]:
    """The shards of part k of n, all of them without a part; every n-th, so that parts are alike."""
    if part is None:
        return list(range(plan.shards))
    number, parts = part
    return list(range(number - 1, plan.shards, parts))


def work_locally(
    directory: str | Path,
    *,
    workers: int | None = None,
    part: tuple[int, int] | None = None,
    retry: bool = False,
    stop: Stop | None = None,
    on_progress: Callable[[Progress], None] | None = None,
) -> Outcome:
    """Do what is left of a sweep, over local processes; with one worker, in this one.

    part : (k, n), 1 <= k <= n, does the k-th of n parts; retry : failed points too. Raises InputError for a directory that
    is no sweep of this version or cannot be written.
    """
    plan = read_plan(directory)
    plan.check_version()
    shards = shards_of_part(plan, part)
    notes = repair(plan, shards)
    stop = stop or Stop()
    session = Session(plan, shards, on_progress)
    number = min(workers or cores(), max(1, len(session.shards_to_do(retry))))
    if number == 1:
        session.workers = 1
        Worker(plan, shards, stop, session.written_report, retry, session.waiting_for).run()
    elif shards:
        notes += _Pool(session, number, part, retry, stop).run()
    return session.outcome(stop, notes)


def repair(plan: Plan, shards: Sequence[int]) -> list[str]:
    """Set files aside that cannot be read, so that their points are done again. Returns a line for each."""
    notes = []
    for shard, files in shard_files(plan).items():
        if shard not in shards:
            continue
        for file in files:
            try:
                read_results(plan, file, runs=False)
            except FileNotFoundError:
                continue
            except DamagedShardError as error:
                with writing(plan.directory):
                    file.path.rename(file.path.with_suffix(".damaged"))
                standing = standings(plan.directory).get(shard)
                if standing is not None and standing.state == "done":
                    claim = take(plan.directory, shard, standing, reopen=True)
                    if claim is not None:
                        claim.release()
                notes.append(f"{error}; set aside, its points are done again")
    return notes


class Session:
    """Counts what one call of `work` has written."""

    def __init__(self, plan: Plan, shards: Sequence[int], on_progress: Callable[[Progress], None] | None) -> None:
        self.plan, self.shards, self.on_progress = plan, shards, on_progress
        self.total = sum(len(plan.shard(s)) for s in shards)
        self.before = sum(self.on_disk().values())
        self.done = self.failed = self.workers = 0
        self.waiting = ""
        self.started = time.monotonic()
        self.tell()

    def on_disk(self) -> dict[int, int]:
        """Points on disk per shard, by the names of the files; a shard in several files counts as its fullest."""
        files = shard_files(self.plan)
        return {s: max((f.points for f in files.get(s, ())), default=0) for s in self.shards}

    def open_shards(self) -> list[int]:
        """Shards that are not complete."""
        files = shard_files(self.plan)
        return [s for s in self.shards if not is_complete(self.plan, s, files.get(s, ()))]

    def shards_to_do(self, retry: bool) -> list[int]:
        """Shards that are not complete, with `retry` those that hold failed points too."""
        found = self.open_shards()
        if retry:
            rest = sorted(set(self.shards) - set(found))
            found += [s for s in rest if any(r.error for r in union(self.plan, s, runs=False)[0].values())]
        return found

    def written_report(self, report: Written) -> None:
        """Take in what a worker has made safe."""
        self.done += report.done
        self.failed += report.failed
        self.waiting = ""
        self.tell()

    def waiting_for(self, text: str) -> None:
        """Say what is waited for."""
        self.waiting = text
        self.tell()

    def tell(self) -> None:
        """Report progress."""
        if self.on_progress is not None:
            done = min(self.before + self.done, self.total)
            seconds = time.monotonic() - self.started
            self.on_progress(Progress(done, self.failed, self.total, seconds, self.workers, self.waiting))

    def outcome(self, stop: Stop, notes: Sequence[str]) -> Outcome:
        """How it ended, by what is on disk."""
        on_disk = self.on_disk()
        left = {s: len(self.plan.shard(s)) - on_disk[s] for s in self.shards}
        claimed = standings(self.plan.directory) if any(left.values()) else {}
        held = sum(n for s, n in left.items() if s in claimed and claimed[s].taken)
        return Outcome(
            self.done + self.failed, self.failed, sum(left.values()), held, stop.asked.is_set(), tuple(notes)
        )


@dataclass
class _Child:
    process: subprocess.Popen[bytes]
    pipe: int
    waiting: bytes = b""
    fault: str = ""


class _Pool:
    """Child processes and what they report; a child that dies is replaced."""

    def __init__(self, session: Session, number: int, part: tuple[int, int] | None, retry: bool, stop: Stop) -> None:
        self.session, self.number, self.part, self.retry, self.stop = session, number, part, retry, stop
        self.children: dict[int, _Child] = {}
        self.selector = selectors.DefaultSelector()
        self.deaths = 0
        self.faults: list[str] = []
        self.notes: list[str] = []
        self.told_to_stop: float | None = None

    def run(self) -> list[str]:
        """Run until every child has ended. Returns notes; raises InputError with the first fault of a child."""
        try:
            for _ in range(self.number):
                self._start()
            while self.children:
                self._pass_on_stop()
                self.session.workers = len(self.children)
                for key, _ in self.selector.select(timeout=0.2):
                    self._read(self.children[key.fd])
                self.session.tell()
        finally:
            for child in self.children.values():
                child.process.kill()
                child.process.wait()
            self.selector.close()
        if self.faults:
            raise one_problem(str(self.session.plan.directory), "", self.faults[0])
        return self.notes

    def _start(self) -> None:
        reader, writer = os.pipe()
        facts = {"directory": str(self.session.plan.directory), "part": self.part, "retry": self.retry, "pipe": writer}
        code = "from driblet_analysis.sweep.local import run_child; run_child()"
        one_thread = dict.fromkeys(("NUMBA_NUM_THREADS", "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"), "1")
        process = subprocess.Popen(
            [sys.executable, "-c", code, json.dumps(facts)],
            stdin=subprocess.PIPE,
            stdout=subprocess.DEVNULL,
            pass_fds=(writer,),
            start_new_session=True,  # Ctrl-C in a terminal is for the parent, who passes it on
            env={**os.environ, **one_thread},
        )
        os.close(writer)
        self.children[reader] = _Child(process, reader)
        self.selector.register(reader, selectors.EVENT_READ)

    def _read(self, child: _Child) -> None:
        data = os.read(child.pipe, 65536)
        if not data:
            self._ended(child)
            return
        *lines, child.waiting = (child.waiting + data).split(b"\n")
        for line in lines:
            message = json.loads(line)
            if "fault" in message:
                child.fault = message["fault"]
            elif "waiting" in message:
                self.session.waiting_for(message["waiting"])
            else:
                self.deaths = 0
                self.session.written_report(Written(**message))

    def _ended(self, child: _Child) -> None:
        self.selector.unregister(child.pipe)
        os.close(child.pipe)
        del self.children[child.pipe]
        if child.process.stdin:
            child.process.stdin.close()
        status = child.process.wait()
        if child.fault:
            self.faults.append(child.fault)
            self.stop.asked.set()  # a disk that is full is full for all
        elif status not in (0, _STOPPED) and not self.stop.asked.is_set():
            self._replace(status)

    def _replace(self, status: int) -> None:
        self.deaths += 1
        how = f"was killed by signal {-status}" if status < 0 else f"ended with status {status}"
        if self.deaths < _MOST_DEATHS * self.number:
            self.notes.append(f"a worker {how} and was replaced")
            self._start()
            return
        where = sorted({p for s in standings(self.session.plan.directory).values() for p in s.suspects})
        points = f" at point {', '.join(map(str, where[:5]))}" if where else ""
        self.notes.append(f"a worker {how}{points}, after {self.deaths} deaths without progress; it is not replaced")

    def _pass_on_stop(self) -> None:
        if not self.stop.asked.is_set():
            return
        if self.told_to_stop is None:
            self.told_to_stop = time.monotonic()
            for child in self.children.values():
                child.process.terminate()
        elif time.monotonic() - self.told_to_stop < _STOP_SECONDS:
            if time.monotonic() - self.told_to_stop > _SAY_SECONDS:
                text = f"{len(self.children)} workers are told to stop; what has not after {_STOP_SECONDS:g} s is ended"
                self.session.waiting_for(text)
        else:
            for child in self.children.values():
                child.process.kill()


def run_child() -> None:
    """Main of a child process: works, reports through a pipe, and stops when its parent is gone."""
    import signal

    from driblet_analysis.sweep.work import stopping_on_signals

    facts = json.loads(sys.argv[1])
    pipe = int(facts["pipe"])

    def send(message: dict[str, Any]) -> None:
        try:
            os.write(pipe, json.dumps(message).encode() + b"\n")
        except BrokenPipeError:
            os.kill(os.getpid(), signal.SIGTERM)

    def watch_parent() -> None:
        os.read(0, 1)  # nothing is ever sent: this returns when the parent has ended
        os.kill(os.getpid(), signal.SIGTERM)

    status = 0
    with stopping_on_signals() as stop:
        threading.Thread(target=watch_parent, daemon=True).start()
        try:
            plan = read_plan(facts["directory"])
            shards = shards_of_part(plan, tuple(facts["part"]) if facts["part"] else None)
            Worker(
                plan,
                shards,
                stop,
                lambda written: send(written._asdict()),
                facts["retry"],
                lambda text: send({"waiting": text}),
            ).run()
        except KeyboardInterrupt:
            stop.asked.set()
        except InputError as error:
            send({"fault": "; ".join(p.text for p in error.problems)})
            status = 2
        except DribletError as error:
            send({"fault": str(error)})
            status = 2
        if stop.asked.is_set() and not status:
            status = _STOPPED
    sys.stdout.flush()
    os._exit(status)
