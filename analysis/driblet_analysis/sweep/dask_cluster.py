"""Dask: a sweep on a running cluster, one shard a task.

Tasks write their shard and return numbers, so that one that is lost with its worker, or run twice, costs time and nothing
else. Every wait ends: a scheduler that goes away, a cluster that stays without workers and tasks that do not stop when they are
told to are left, with a note.
"""

from __future__ import annotations

import json
import logging
import platform
import re
import secrets
import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import CancelledError
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

from driblet.errors import DribletError, InputError, one_problem
from driblet_analysis.sweep.claims import FOLDER, Pulse, in_doubt, standings
from driblet_analysis.sweep.directory import Plan, read_plan
from driblet_analysis.sweep.files import writing
from driblet_analysis.sweep.local import Outcome, Progress, Session, repair
from driblet_analysis.sweep.work import Stop, Written, do_shard, warm_up

_CONNECT_SECONDS = 15
_TASKS_PER_THREAD = 3  # in the scheduler's hands at a time
_POLL_SECONDS = 1.0
_PATIENCE_SECONDS = 600.0  # with a cluster that has lost all its workers
_STOP_SECONDS = 60.0
_OLD_SECONDS = 3600.0


def work_on_dask(
    directory: str | Path,
    address: str,
    *,
    retry: bool = False,
    stop: Stop | None = None,
    on_progress: Callable[[Progress], None] | None = None,
) -> Outcome:
    """Do what is left of a sweep on a Dask cluster whose workers see the directory under the same name.

    address : of the scheduler ("tcp://10.0.0.1:8786"), or the name of its scheduler file. Raises InputError without dask,
    when the cluster does not answer, and for what its workers find wrong with the directory.
    """
    plan = read_plan(directory)
    plan.check_version()
    shards = range(plan.shards)
    notes = repair(plan, shards)
    session = Session(plan, shards, on_progress)
    stop = stop or Stop()
    left = session.shards_to_do(retry)
    if left:
        with _client(address) as client, _stop_file(plan) as stop_file:
            notes += _Driver(session, client, stop, stop_file, retry).run(left)
    return session.outcome(stop, notes)


@contextmanager
def _client(address: str) -> Iterator[Any]:
    try:
        from distributed import Client
    except ImportError as error:
        raise one_problem("command line", "--dask", 'needs dask: pip install "driblet[dask]"') from error
    _check_address(address)
    logging.getLogger("distributed.client").setLevel(logging.CRITICAL)  # what matters is told in a line of ours
    try:
        if Path(address).is_file():
            client = Client(scheduler_file=address, timeout=_CONNECT_SECONDS)
        else:
            client = Client(address, timeout=_CONNECT_SECONDS)
    except Exception as error:  # what is no address, or no scheduler file, fails in many ways there
        reason = (" ".join(str(error).split()) or type(error).__name__)[:160]
        raise one_problem("command line", "--dask", f'no Dask scheduler answers at "{address}" ({reason})') from error
    try:
        client.wait_for_workers(1, timeout=_CONNECT_SECONDS)
    except TimeoutError as error:
        client.close()
        raise one_problem("command line", "--dask", f'the Dask cluster at "{address}" has no workers') from error
    try:
        yield client
    finally:
        client.close()


def _check_address(address: str) -> None:
    """Raises InputError for what is no address and no scheduler file; what answers there is another question."""
    if Path(address).is_file():
        try:
            known = isinstance(json.loads(Path(address).read_text("utf-8")).get("address"), str)
        except (OSError, ValueError, AttributeError):
            known = False
        if not known:
            raise one_problem("command line", "--dask", f'"{address}" is no scheduler file: it names no address')
    elif not re.fullmatch(r"[a-z]+://\S+|[^/\s]+:\d+", address):
        text = f'"{address}" is no scheduler file that is here, and no address such as tcp://10.0.0.5:8786'
        raise one_problem("command line", "--dask", text)


@contextmanager
def _stop_file(plan: Plan) -> Iterator[Path]:
    """A file whose appearance tells running tasks to stop after the point under way."""
    folder = (plan.directory / FOLDER).absolute()
    for old in folder.glob(".stop-*"):
        with suppress(OSError):
            if time.time() - old.stat().st_mtime > _OLD_SECONDS:
                old.unlink()
    yield folder / f".stop-{secrets.token_hex(4)}"  # stays for tasks that are left running


class _Driver:
    """Keeps the cluster supplied with tasks and takes in what they return."""

    def __init__(self, session: Session, client: Any, stop: Stop, stop_file: Path, retry: bool) -> None:
        self.session, self.client, self.stop, self.stop_file, self.retry = session, client, stop, stop_file, retry
        self.directory = str(session.plan.directory.absolute())
        self.notes: list[str] = []
        self.fault = ""
        self.gone = ""  # why the cluster is of no use any more
        self.told_to_stop: float | None = None
        self.without_workers: float | None = None
        self.taken: set[int] = set()  # shards that were in another worker's hands
        self.lost: set[int] = set()  # shards whose tasks died with their workers again and again

    def run(self, left: list[int]) -> list[str]:
        """Have every shard done; returns notes. Raises InputError with what the workers found wrong."""
        try:
            warm = self.client.submit(_warm_up, self.directory, pure=False)
            self._drain({warm: -1}, iter(()))
            while left and not self.ended:
                self.taken.clear()
                self._drain({}, iter(left))
                left = self._given_up()
        except OSError as error:  # what a broken connection raises there; the disk's errors are told as faults
            self.gone = f"the Dask scheduler went away ({' '.join(str(error).split())[:100] or type(error).__name__})"
        if self.gone:
            self.notes.append(f"{self.gone}; what is written is kept")
        if self.fault:
            raise one_problem(str(self.session.plan.directory), "", self.fault)
        return self.notes

    @property
    def ended(self) -> bool:
        return bool(self.fault or self.gone) or self.stop.asked.is_set()

    def _drain(self, running: dict[Any, int], queue: Iterator[int]) -> None:
        """Keep a few tasks per thread with the scheduler until the queue is empty and all have returned."""
        while running or not self.ended:
            threads = self._threads()
            while not self.ended and len(running) < _TASKS_PER_THREAD * threads:
                shard = next(queue, None)
                if shard is None:
                    break
                future = self.client.submit(
                    _do_shard, self.directory, shard, self.retry, str(self.stop_file), pure=False, retries=2
                )
                running[future] = shard
            if not running:
                return
            if self.gone or (self.ended and not self._stop_tasks(running)):
                return
            self._wait(running)
            self.session.tell()
            for future in [f for f in running if f.done()]:
                self._take_in(future, running.pop(future))

    @staticmethod
    def _wait(running: dict[Any, int]) -> None:
        """Until a task returns, is dropped or lost, or for a moment."""
        from distributed import wait

        with suppress(TimeoutError, CancelledError):
            wait(list(running), timeout=_POLL_SECONDS, return_when="FIRST_COMPLETED")

    def _threads(self) -> int:
        """Threads of the cluster, 1 while it has no workers; after a while without any it is given up."""
        threads = sum(self.client.nthreads().values())
        self.session.workers = threads
        if threads:
            if self.without_workers is not None:
                self.without_workers = None
                self.session.waiting_for("")
            return threads
        now = time.monotonic()
        self.without_workers = self.without_workers or now
        if now - self.without_workers > _PATIENCE_SECONDS:
            self.gone = f"the Dask cluster had no workers for {_PATIENCE_SECONDS:g} s"
        text = f"the Dask cluster has lost its workers; without new ones it is given up after {_PATIENCE_SECONDS:g} s"
        self.session.waiting_for(text)
        return 1

    def _stop_tasks(self, running: dict[Any, int]) -> bool:
        """Tasks that have not begun are dropped, those that run are told to stop. Returns whether to wait for them."""
        now = time.monotonic()
        if self.told_to_stop is not None:
            if now - self.told_to_stop > _STOP_SECONDS:
                text = f"{len(running)} tasks have not stopped within {_STOP_SECONDS:g} s and are left to the cluster"
                self.notes.append(text)
                return False
            self.session.waiting_for(f"{len(running)} tasks are told to stop; they are left after {_STOP_SECONDS:g} s")
            return True
        self.told_to_stop = now
        with writing(self.session.plan.directory):
            self.stop_file.parent.mkdir(exist_ok=True)
            self.stop_file.touch()
        self.client.cancel([future for future in running if future.status == "pending" and not self._begun(future)])
        return True

    def _begun(self, future: Any) -> bool:
        return any(future.key in keys for keys in self.client.processing().values())

    def _take_in(self, future: Any, shard: int) -> None:
        if future.status == "cancelled":
            if not self.ended:  # nobody here has dropped it
                self.gone = "the Dask scheduler went away or dropped its tasks"
            return
        if future.status == "error":
            error = future.exception()
            text = " ".join(str(error).split())[:200]
            if type(error).__name__ == "KilledWorker":
                self.lost.add(shard)
                self.notes.append(f"workers died at shard {shard} again and again; it is left")
            elif isinstance(error, ImportError):
                self.fault = f"the Dask workers cannot import driblet ({text}); install the same version there"
            else:
                self.fault = f"a Dask task failed: {type(error).__name__}: {text}"
            return
        result = future.result()
        if result["fault"]:
            self.fault = f"{result['fault']} (on Dask worker {result['host']})"
        elif not result["mine"]:
            self.taken.add(shard)
        elif shard >= 0:
            self.session.written_report(Written(shard, result["done"], result["failed"]))

    def _given_up(self) -> list[int]:
        """Shards found in other hands that are free after all: waits while their owners may be dead."""
        pulse = Pulse()
        while not self.ended:
            todo = sorted(set(self.session.open_shards()) & self.taken - self.lost)
            claimed = standings(self.session.plan.directory)
            free = [s for s in todo if s not in claimed or not claimed[s].taken]
            doubtful = [s for s in todo if s in claimed and pulse.doubtful(s, claimed[s])]
            if free or not doubtful:
                return free
            self.session.waiting_for(in_doubt(len(doubtful)))
            self.stop.asked.wait(_POLL_SECONDS)
        return []


def _warm_up(directory: str) -> dict[str, Any]:
    def act(plan: Plan) -> bool:
        warm_up(plan)
        return True

    return _answering(act, directory, lambda: (0, 0))


def _do_shard(directory: str, shard: int, retry: bool, stop_file: str) -> dict[str, Any]:
    """The task: one shard. Returns plain numbers and texts; the results are on the disk."""
    stop, ended = Stop(), threading.Event()
    counts = [0, 0]

    def report(written: Written) -> None:
        counts[0] += written.done
        counts[1] += written.failed

    def watch() -> None:
        while not ended.wait(_POLL_SECONDS):
            if Path(stop_file).exists():
                stop.asked.set()

    threading.Thread(target=watch, daemon=True).start()
    try:
        return _answering(
            lambda plan: do_shard(plan, shard, stop, report, retry), directory, lambda: (counts[0], counts[1])
        )
    finally:
        ended.set()


def _answering(act: Callable[[Plan], bool], directory: str, counts: Callable[[], tuple[int, int]]) -> dict[str, Any]:
    """What a task returns: an error as a text, since not every exception survives the way back."""
    mine, fault = True, ""
    try:
        plan = read_plan(directory)
        plan.check_version()
        mine = act(plan)
    except InputError as error:
        fault = "; ".join(p.text for p in error.problems)
    except DribletError as error:
        fault = str(error)
    done, failed = counts()
    return {"mine": mine, "fault": fault, "host": platform.node(), "done": done, "failed": failed}
