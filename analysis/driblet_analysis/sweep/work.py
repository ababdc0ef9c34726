"""One worker: takes free shards, simulates their points one after the other, writes what is done, goes on.

Every way of running a sweep (local processes, parts, Slurm tasks, Dask tasks) ends here, so that all give the same bits.
"""

from __future__ import annotations

import signal
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import NamedTuple

from driblet.ensemble import Progress, run
from driblet.errors import DribletError, InterruptedRunError
from driblet.interrupts import Flag
from driblet.system import System
from driblet_analysis.sweep.claims import Claim, Pulse, Standing, in_doubt, standing_of, standings, take
from driblet_analysis.sweep.directory import Plan, Point
from driblet_analysis.sweep.shards import Result, ShardFile, is_complete, shard_files, union, write_results
from driblet_analysis.sweep.summary import summarise

FLUSH_SECONDS = 5.0  # what is simulated is written, and reported, at least this often, points permitting
_WAIT_SECONDS = 2.0
_LONGEST_ERROR = 300
_WARM_SECONDS = 5.0
STOP_SIGNALS = (signal.SIGINT, signal.SIGTERM, signal.SIGUSR1)


class Written(NamedTuple):
    """A report of what has just become safe. Attributes: shard; done, failed : points newly on disk."""

    shard: int
    done: int
    failed: int


class Stop:
    """Asks a worker to stop at a clean place: what is finished is written, the point under way is given up.

    The first signal is only noted, and the run under way looks: an exception out of nowhere can strike while a lock is
    released, or in a callback of HDF5's, and come out as another error, which would be taken for one of the point.
    """

    def __init__(self) -> None:
        self.asked = Flag()

    def __call__(self, *_: object) -> None:
        """Signal handler, in the main thread."""
        again = self.asked.is_set()
        self.asked.set()
        if again:
            raise KeyboardInterrupt


@contextmanager
def stopping_on_signals() -> Iterator[Stop]:
    """A Stop that answers Ctrl-C, a termination and Slurm's warning (USR1). For the main thread alone."""
    stop = Stop()
    before = {number: signal.signal(number, stop) for number in STOP_SIGNALS}
    try:
        yield stop
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def simulate(plan: Plan, point: Point, stop: Stop) -> Result:
    """Simulate a point on one core and summarise it. An error of the point becomes a result with its text.

    Raises KeyboardInterrupt or InterruptedRunError when stopped.
    """
    started = time.monotonic()

    def look(_: Progress) -> None:
        if stop.asked.is_set():
            raise KeyboardInterrupt

    try:
        system = plan.system(point)
        image = None
        if plan.keep == "trajectories":
            with tempfile.TemporaryDirectory(prefix="driblet-") as folder:
                path = Path(folder) / "run.h5"
                with run(
                    system, path, threads=1, key=point.key, record=record_of(system), on_progress=look
                ) as ensemble:
                    values = summarise(ensemble, system)
                image = path.read_bytes()
        else:
            # in memory, so that even readouts can be averaged over time at no cost in disk
            with run(
                system, threads=1, key=point.key, record="trajectories", estimate_error=False, on_progress=look
            ) as ensemble:
                values = summarise(ensemble, system)
    except (KeyboardInterrupt, InterruptedRunError):
        raise
    except Exception as error:
        if stop.asked.is_set():
            raise KeyboardInterrupt from error  # what a second signal can do to any code; the point may be sound
        text = " ".join(str(error).split())
        if not isinstance(error, DribletError):
            text = f"{type(error).__name__}: {text}"
        return Result(point.number, point.key, {}, text[:_LONGEST_ERROR], time.monotonic() - started)
    return Result(point.number, point.key, values, "", time.monotonic() - started, image)


def record_of(system: System) -> str:
    """What a kept run file records: trajectories, and events where the system asks for them."""
    return "events" if system.settings.record == "events" else "trajectories"


class Worker:
    """Works on some shards of a plan until nothing is free there.

    report : is told what is safely written; waiting : is told in words what is waited for.
    """

    def __init__(
        self,
        plan: Plan,
        shards: Sequence[int],
        stop: Stop,
        report: Callable[[Written], None],
        retry: bool = False,
        waiting: Callable[[str], None] | None = None,
    ) -> None:
        self.plan, self.shards, self.stop, self.report, self.retry = plan, shards, stop, report, retry
        self.waiting = waiting or (lambda _: None)
        self._retried: set[int] = set()
        self._pulse = Pulse()

    def run(self) -> None:
        """Take and do shards. Raises InputError when the directory cannot be written."""
        while not self.stop.asked.is_set():
            free, doubtful = self._look()
            for shard, standing in free:
                if self.stop.asked.is_set():
                    return
                claim = take(self.plan.directory, shard, standing, reopen=self.retry)
                if claim is not None:
                    with claim:
                        self.do(claim)
            if not free:
                if not doubtful:
                    return
                self.waiting(in_doubt(doubtful))
                self.stop.asked.wait(_WAIT_SECONDS)

    def _look(self) -> tuple[list[tuple[int, Standing | None]], int]:
        """Shards that can be taken, and how many more there may be once dead workers elsewhere are known to be dead."""
        files, claimed = shard_files(self.plan), standings(self.plan.directory)
        fresh: list[tuple[int, Standing | None]] = []
        resumed: list[tuple[int, Standing | None]] = []
        suspect: list[tuple[int, Standing | None]] = []
        doubtful = 0
        for shard in self.shards:
            standing = claimed.get(shard)
            if is_complete(self.plan, shard, files.get(shard, ())) and not self._to_retry(shard):
                continue
            if standing is None:
                fresh.append((shard, standing))
            elif standing.state == "free" or (standing.state == "done" and self.retry):
                (suspect if standing.suspects else resumed).append((shard, standing))
            else:
                doubtful += self._pulse.doubtful(shard, standing)
        return [*fresh, *resumed, *suspect], doubtful

    def _to_retry(self, shard: int) -> bool:
        if not self.retry or shard in self._retried:
            return False
        results, _, _ = union(self.plan, shard, runs=False)
        if any(r.error for r in results.values()):
            return True
        self._retried.add(shard)
        return False

    def do(self, claim: Claim) -> None:
        """Do what is left of a claimed shard."""
        shard = claim.shard
        self._retried.add(shard)
        results, read, _ = union(self.plan, shard)
        points = self.plan.read(self.plan.shard(shard))
        left = [p for p in points if p.number not in results or (self.retry and results[p.number].error)]
        left.sort(key=lambda p: p.number in claim.suspects)  # a point at which workers died waits for the others
        pending: list[Result] = []
        flushed = time.monotonic()
        try:
            for point in left:
                if self.stop.asked.is_set() or claim.lost():
                    break
                if pending and (point.number in claim.suspects or time.monotonic() - flushed > FLUSH_SECONDS):
                    read = self._write(shard, results, pending, read)
                    flushed = time.monotonic()
                claim.at(point.number)
                pending.append(simulate(self.plan, point, self.stop))
        except (KeyboardInterrupt, InterruptedRunError):
            self.stop.asked.set()
        if pending:
            self._write(shard, results, pending, read)
        if len(results) == len(points):
            claim.complete()

    def _write(
        self, shard: int, results: dict[int, Result], pending: list[Result], read: list[ShardFile]
    ) -> list[ShardFile]:
        """Make pending results safe, then drop the files that hold nothing else. Returns the files that now hold the shard."""
        new = {r.number: r for r in pending}
        # by its own listing this worker may not know what another has added: what it read is what it may remove
        written = write_results(self.plan, shard, {**results, **new})
        results.update(new)
        for file in read:
            file.path.unlink(missing_ok=True)
        self.report(Written(shard, sum(not r.error for r in pending), sum(bool(r.error) for r in pending)))
        pending.clear()
        return [written]


def do_shard(plan: Plan, shard: int, stop: Stop, report: Callable[[Written], None], retry: bool = False) -> bool:
    """Do one shard if it is free. Returns False when another worker holds it."""
    standing = standing_of(plan.directory, shard)
    if is_complete(plan, shard, shard_files(plan).get(shard, ())) and not retry:
        return True
    claim = take(plan.directory, shard, standing, reopen=True)
    if claim is None:
        return False
    with claim:
        Worker(plan, [shard], stop, report, retry).do(claim)
    return True


def warm_up(plan: Plan) -> None:
    """Compile what the points need, so that many workers starting together find it compiled.

    Simulates the first point as it will be simulated, but for a few seconds at most.
    """
    system = plan.system(plan.read(range(1))[0])
    begun: list[float] = []

    def enough(progress: Progress) -> None:
        if progress.events and not begun:
            begun.append(progress.seconds)
        if begun and progress.seconds - begun[0] > _WARM_SECONDS:
            raise KeyboardInterrupt

    # an error of this point is told when it is worked on
    with (
        suppress(KeyboardInterrupt, Exception),
        run(system, threads=1, record=record_of(system), on_progress=enough) as ensemble,
    ):
        summarise(ensemble, system)
