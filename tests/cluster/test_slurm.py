"""A sweep on a real Slurm of one node; skipped where Slurm's programs or the right to start them are missing."""

from __future__ import annotations

import re
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from driblet_analysis.sweep import collect, make_plan, read_plan, read_status, work_locally
from driblet_analysis.sweep.slurm import Options, _ranges, _seconds, script_text
from tests.cluster.slurm_node import SlurmNode, missing
from tests.sweep_texts import POINTS, write_sweep
from tests.texts import SMALL, changed

needs_slurm = pytest.mark.skipif(missing() is not None, reason=missing() or "")


@pytest.fixture(scope="module")
def node(tmp_path_factory: pytest.TempPathFactory) -> Iterator[SlurmNode]:
    with SlurmNode(tmp_path_factory.mktemp("slurm")) as running:
        yield running


def sweep(node: SlurmNode, *arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "driblet", "sweep", *arguments],
        env=node.environment,
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )


def job_of(output: str) -> str:
    match = re.search(r"job array (\d+)", output)
    assert match, output
    return match[1]


@needs_slurm
def test_a_sweep_end_to_end_as_a_job_array(node: SlurmNode, tmp_path: Path) -> None:
    directory = tmp_path / "a folder" / "sweep"
    directory.parent.mkdir()
    make_plan(write_sweep(tmp_path), directory)
    options = ["--points-per-task", "3", "--time", "10", "--memory", "300M", "--throttle", "2", "--partition", "main"]
    done = sweep(node, "work", str(directory), "--slurm", *options, "--setup", "export GREETING='good morning'")
    assert done.returncode == 0, done.stderr
    assert "4 of 4 tasks (1-4%2), after warm-up job" in " ".join(done.stdout.split())
    again = sweep(node, "work", str(directory), "--slurm")
    assert again.returncode == 2
    assert "tasks of this sweep are in Slurm's queue already" in again.stderr
    assert "Slurm: " in sweep(node, "status", str(directory)).stdout
    node.wait_until_empty(job_of(done.stdout))
    logs = {p.name: p.read_text() for p in (directory / "slurm").glob("*.log")}
    status = read_status(directory)
    assert (status.done, status.failed, status.left) == (POINTS, 0, 0), logs
    assert len(logs) == 5
    nothing = sweep(node, "work", str(directory), "--slurm")
    assert nothing.returncode == 0
    assert "nothing is left to do" in nothing.stdout
    make_plan(tmp_path / "sweep.toml", tmp_path / "here")
    work_locally(tmp_path / "here", workers=1)
    collect(directory, tmp_path / "slurm.csv")
    collect(tmp_path / "here", tmp_path / "here.csv")
    assert (tmp_path / "slurm.csv").read_bytes() == (tmp_path / "here.csv").read_bytes()


@needs_slurm
def test_what_slurm_refuses_is_one_line(node: SlurmNode, tmp_path: Path) -> None:
    make_plan(write_sweep(tmp_path), tmp_path / "sweep")
    done = sweep(node, "work", str(tmp_path / "sweep"), "--slurm", "--partition", "nowhere")
    assert done.returncode == 2
    assert done.stderr.count("\n") == 1
    assert "Slurm refuses: invalid partition specified: nowhere" in done.stderr
    assert read_status(tmp_path / "sweep").left == POINTS


@needs_slurm
def test_a_warned_task_stops_at_a_clean_place_and_a_lost_one_costs_nothing(node: SlurmNode, tmp_path: Path) -> None:
    """One task gets the warning signal in the middle of a point without end, another is cancelled: work does the rest."""
    base = changed(SMALL, ('forward = "1 /s"', 'forward = "1e4 /s"'), ('duration = "2 s"', 'duration = "1 s"'))
    base = changed(base, ('sample_every = "0.5 s"', 'sample_every = "1 s"'))
    text = 'system = "base.toml"\nreplicates = 2\n[axes]\n"run.duration" = ["1 s", "100 h"]\n"run.seed" = [1, 2]\n'
    directory = tmp_path / "sweep"
    plan = make_plan(write_sweep(tmp_path, text, base), directory).plan
    assert plan.shards == 4
    done = sweep(node, "work", str(directory), "--slurm", "--points-per-task", "2")
    assert done.returncode == 0, done.stderr
    job = job_of(done.stdout)
    limit = time.monotonic() + 90
    while read_status(directory).workers < 2 or read_status(directory).done < 2:
        assert time.monotonic() < limit, sweep(node, "status", str(directory)).stdout
        time.sleep(0.3)
    node.call("scancel", "--signal=USR1", "--batch", f"{job}_1")
    node.call("scancel", f"{job}_2")
    node.wait_until_empty(job)
    log = (directory / "slurm" / f"{job}_1.log").read_text()
    assert "stopped when asked; what is finished is kept" in log
    status = read_status(directory)
    assert (status.done, status.left, status.workers) == (2, 2, 0)


def test_the_script_is_readable_and_says_how_to_submit_it(tmp_path: Path) -> None:
    plan = make_plan(write_sweep(tmp_path), tmp_path / "my sweep").plan
    options = Options(
        "long", "grant-7", "2:00:00", "2G", 4, 10, None, ("module load python", "source env/bin/activate")
    )
    script = script_text(read_plan(plan.directory), options, 7, retry=False)
    for line in (
        "#SBATCH --job-name=driblet-my-sweep",
        "#SBATCH --cpus-per-task=4",
        "#SBATCH --signal=B:USR1@60",
        "#SBATCH --partition=long",
        "#SBATCH --account=grant-7",
        "#SBATCH --time=2:00:00",
        "#SBATCH --mem=2G",
        "module load python",
        "source env/bin/activate",
    ):
        assert line in script.splitlines()
    assert script.index("activate") < script.index("--part ")
    assert "sbatch --array=1-7" in script
    assert '--part "$SLURM_ARRAY_TASK_ID/7"' in script
    assert subprocess.run(["bash", "-n"], input=script, text=True, check=False).returncode == 0


def test_ranges_and_time_limits_as_slurm_writes_them() -> None:
    assert _ranges([1, 2, 3, 7, 9, 10]) == "1-3,7,9-10"
    assert _ranges([5]) == "5"
    # sbatch(1): minutes, minutes:seconds, hours:minutes:seconds, days-hours, days-hours:minutes, days-hours:minutes:seconds
    limits = {"10": 600, "10:30": 630, "2:00:00": 7200, "1-12": 129600, "1-12:30": 131400, "1-12:30:15": 131415}
    assert {text: _seconds(text) for text in limits} == limits
    assert _seconds("UNLIMITED") is None
