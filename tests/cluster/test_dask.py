"""A sweep on a real Dask cluster of two processes; skipped where dask is not installed."""

from __future__ import annotations

import json
import os
import signal
import threading
import time
from collections.abc import Iterator
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
