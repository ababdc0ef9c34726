"""A sweep on a real Dask cluster of two processes; skipped where dask is not installed."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from driblet.commands.main import main
from driblet_analysis.sweep import collect, make_plan, read_status, work_locally
from tests.sweep_texts import POINTS, write_sweep
from tests.texts import SMALL, changed

distributed = pytest.importorskip("distributed", reason='needs dask and distributed: pip install "driblet[dask]"')


@pytest.fixture
def cluster() -> Iterator[Any]:
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None) as running:
        yield running


def table_of(directory: Path) -> bytes:
    path = directory.parent / f"{directory.name}.csv"
    collect(directory, path, force=True)
    return path.read_bytes()


def test_a_sweep_end_to_end(cluster: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = write_sweep(tmp_path)
    for name in ("address", "file", "here"):
        make_plan(path, tmp_path / name)
    assert main(["sweep", "work", str(tmp_path / "address"), "--dask", cluster.scheduler_address]) == 0
    assert "12 points written" in capsys.readouterr().out
    scheduler_file = tmp_path / "scheduler.json"
    scheduler_file.write_text(json.dumps({"type": "Scheduler", "address": cluster.scheduler_address, "workers": {}}))
    assert main(["sweep", "work", str(tmp_path / "file"), "--dask", str(scheduler_file)]) == 0
    work_locally(tmp_path / "here", workers=1)
    assert table_of(tmp_path / "address") == table_of(tmp_path / "here")
    assert table_of(tmp_path / "file") == table_of(tmp_path / "here")
    capsys.readouterr()
    assert main(["sweep", "work", str(tmp_path / "address"), "--dask", cluster.scheduler_address]) == 0
    assert "0 points written" in capsys.readouterr().out


def test_a_killed_worker_costs_nothing_that_was_reported(cluster: Any, tmp_path: Path) -> None:
    base = changed(SMALL, ('forward = "1 /s"', 'forward = "2e4 /s"'))
    text = 'system = "base.toml"\nreplicates = 4\n[axes]\n"run.seed" = { from = 1, to = 24, points = 24 }\n'
    path = write_sweep(tmp_path, text, base)
    for name in ("sweep", "here"):
        make_plan(path, tmp_path / name)
    pids = [w.pid for w in cluster.workers.values()]
    children = [int(p) for pid in pids for p in Path(f"/proc/{pid}/task/{pid}/children").read_text().split()] or pids

    def kill() -> None:
        limit = time.monotonic() + 60
        while read_status(tmp_path / "sweep").done < 2 and time.monotonic() < limit:
            time.sleep(0.1)
        os.kill(children[0], signal.SIGKILL)

    thread = threading.Thread(target=kill)
    thread.start()
    assert main(["sweep", "work", str(tmp_path / "sweep"), "--dask", cluster.scheduler_address]) == 0
    thread.join()
    work_locally(tmp_path / "here", workers=1)
    assert table_of(tmp_path / "sweep") == table_of(tmp_path / "here")


def test_a_cluster_without_workers(tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: Any) -> None:
    from driblet_analysis.sweep import dask_cluster

    monkeypatch.setattr(dask_cluster, "_CONNECT_SECONDS", 2)
    make_plan(write_sweep(tmp_path), tmp_path / "sweep")
    with distributed.LocalCluster(n_workers=0, processes=True, dashboard_address=None) as empty:
        assert main(["sweep", "work", str(tmp_path / "sweep"), "--dask", empty.scheduler_address]) == 2
    assert "has no workers" in capsys.readouterr().err
    assert read_status(tmp_path / "sweep").left == POINTS


def test_what_workers_find_wrong_is_one_line(
    cluster: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: Any
) -> None:
    """The directory is not there for the workers, as when a cluster does not share the file system."""
    from driblet_analysis.sweep import dask_cluster

    make_plan(write_sweep(tmp_path), tmp_path / "sweep")
    driver = dask_cluster._Driver.__init__

    def elsewhere(self: Any, *arguments: Any) -> None:
        driver(self, *arguments)
        self.directory = "/nowhere/sweep"

    monkeypatch.setattr(dask_cluster._Driver, "__init__", elsewhere)
    assert main(["sweep", "work", str(tmp_path / "sweep"), "--dask", cluster.scheduler_address]) == 2
    error = capsys.readouterr().err
    assert "does not exist" in error
    assert "on Dask worker" in error


ENDLESS = changed(
    SMALL,
    ('forward = "1 /s"', 'forward = "1e6 /s"'),
    ('duration = "2 s"', 'duration = "1 h"'),
    ('sample_every = "0.5 s"', 'sample_every = "1 min"'),
)


class Running:
    """A scheduler and two workers as a cluster starts them, and `sweep work` on them, each a process of its own."""

    def __init__(self, folder: Path, base: str) -> None:
        self.file, self.directory, self.folder = folder / "scheduler.json", folder / "sweep", folder
        text = 'system = "base.toml"\nreplicates = 4\n[axes]\n"run.seed" = { from = 1, to = 40, points = 40 }\n'
        make_plan(write_sweep(folder, text, base), self.directory)
        self.processes: list[subprocess.Popen[str]] = []
        options = ("--no-dashboard", "--scheduler-file", str(self.file))
        self.scheduler = self.start("scheduler", "distributed.cli.dask_scheduler", "--port", "0", *options)
        self.until(self.file.exists)
        self.workers = [
            self.start(f"worker-{k}", "distributed.cli.dask_worker", "--nthreads", "1", "--no-nanny", *options)
            for k in range(2)
        ]
        self.sweep = self.start("sweep", "driblet", "sweep", "work", str(self.directory), "--dask", str(self.file))

    def start(self, name: str, *command: str) -> subprocess.Popen[str]:
        with (self.folder / f"{name}.log").open("w") as log:
            process = subprocess.Popen(
                [sys.executable, "-m", *command], stdout=log, stderr=subprocess.STDOUT, text=True, cwd=self.folder
            )
        self.processes.append(process)
        return process

    def until(self, reached: Callable[[], bool]) -> None:
        limit = time.monotonic() + 120
        while not reached():
            assert time.monotonic() < limit, self.log()
            time.sleep(0.1)

    def log(self) -> str:
        return " ".join((self.folder / "sweep.log").read_text().split())

    def ended(self, seconds: float) -> int:
        """Exit status of the sweep, which must end within some seconds."""
        return self.sweep.wait(timeout=seconds)

    def close(self) -> None:
        for process in self.processes:
            process.kill()
            process.wait()


@pytest.fixture
def running(tmp_path: Path) -> Iterator[Callable[[str], Running]]:
    started: list[Running] = []

    def start(base: str) -> Running:
        started.append(Running(tmp_path, base))
        return started[-1]

    yield start
    for one in started:
        one.close()


def test_ctrl_c_stops_tasks_in_the_middle_of_endless_points(running: Callable[[str], Running]) -> None:
    run = running(ENDLESS)
    run.until(lambda: read_status(run.directory).workers == 2)
    run.sweep.send_signal(signal.SIGINT)
    assert run.ended(50) == 130, run.log()
    assert "stopped when asked; what is finished is kept" in run.log()
    assert "fault" not in run.log()
    run.until(lambda: read_status(run.directory).workers == 0)  # the tasks have ended too, and given their claims back


def test_a_scheduler_that_dies_is_told_and_costs_nothing_that_was_written(running: Callable[[str], Running]) -> None:
    run = running(changed(SMALL, ('forward = "1 /s"', 'forward = "5e4 /s"')))
    run.until(lambda: read_status(run.directory).done >= 2)
    run.scheduler.kill()
    assert run.ended(60) == 3, run.log()
    assert "note: the Dask scheduler went away" in run.log()
    assert "goes on" in run.log()
    assert "Traceback" not in run.log()
    for worker in run.workers:
        worker.kill()
        worker.wait()
    done = read_status(run.directory).done
    assert 2 <= done < 40
    assert work_locally(run.directory, workers=2).written == 40 - done


def test_a_cluster_that_loses_its_workers_is_given_up_after_a_while(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from driblet_analysis.sweep import dask_cluster

    monkeypatch.setattr(dask_cluster, "_PATIENCE_SECONDS", 3.0)
    make_plan(write_sweep(tmp_path, base=ENDLESS), tmp_path / "sweep")
    with distributed.LocalCluster(n_workers=1, threads_per_worker=1, processes=True, dashboard_address=None) as cluster:

        def lose() -> None:
            limit = time.monotonic() + 60
            while read_status(tmp_path / "sweep").workers == 0 and time.monotonic() < limit:
                time.sleep(0.1)
            cluster.scale(0)

        thread = threading.Thread(target=lose)
        thread.start()
        assert main(["sweep", "work", str(tmp_path / "sweep"), "--dask", cluster.scheduler_address]) == 3
        thread.join()
    told = capsys.readouterr()
    assert "note: the Dask cluster had no workers for 3 s; what is written is kept" in " ".join(told.out.split())
    assert told.err.count("waiting: the Dask cluster has lost its workers") == 1
