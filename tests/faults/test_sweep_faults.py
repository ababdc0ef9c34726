"""What goes wrong while a sweep is worked on: kills, full disks, failing points, signals; then `work` again does the rest."""

from __future__ import annotations

import os
import random
import re
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from driblet.commands.main import main
from driblet_analysis.sweep import collect, make_plan, read_plan, read_status, work_locally
from driblet_analysis.sweep.shards import shard_files
from tests.sweep_texts import POINTS, SWEEP, write_sweep
from tests.texts import SMALL, changed

# about a tenth of a second a point
SLOW = changed(SMALL, ('forward = "1 /s"', 'forward = "2e4 /s"'), ("replicates = 3", "replicates = 4"))
LONG = changed(SMALL, ('forward = "1 /s"', 'forward = "1e6 /s"'), ('duration = "2 s"', 'duration = "1 h"'))


def sweep_of(points: int, replicates: int = 4) -> str:
    axis = f'"run.seed" = {{ from = 1, to = {points}, points = {points} }}'
    return f'system = "base.toml"\nreplicates = {replicates}\n[axes]\n{axis}\n'


def start(directory: Path, *options: str) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-m", "driblet", "sweep", "work", str(directory), *options],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        start_new_session=True,
    )


def workers_of(parent: int) -> list[int]:
    found = []
    for path in Path("/proc").glob("[0-9]*/stat"):
        try:
            if int(path.read_text().rpartition(")")[2].split()[1]) == parent:
                found.append(int(path.parent.name))
        except (OSError, ValueError):
            continue
    return found


def table_of(directory: Path) -> str:
    path = directory.parent / f"{directory.name}.csv"
    collect(directory, path, force=True)
    return path.read_text("utf-8")


def kill_at_random(directory: Path, kills: int, seed: int, longest: float) -> int:
    """SIGKILL workers, and now and then their parent, until `kills` were killed or all is done. Returns how many."""
    draw = random.Random(seed)
    killed = 0
    process = start(directory, "--workers", "2")
    try:
        while killed < kills:
            time.sleep(draw.uniform(0.3, longest))
            if process.poll() is not None:
                if read_status(directory).left == 0:
                    break
                process = start(directory, "--workers", "2")
                continue
            if draw.random() < 0.15:
                process.kill()
                process.wait()
                killed += 1
                continue
            victims = workers_of(process.pid)
            if victims:
                os.kill(draw.choice(victims), signal.SIGKILL)
                killed += 1
    finally:
        process.kill()
        process.wait()
    return killed


def _killed_and_undisturbed(
    tmp_path: Path, points: int, kills: int, seed: int, longest: float, base: str = SLOW
) -> int:
    path = write_sweep(tmp_path, sweep_of(points), base)
    for name in ("disturbed", "undisturbed"):
        make_plan(path, tmp_path / name)
    killed = kill_at_random(tmp_path / "disturbed", kills, seed, longest)
    seen = read_status(tmp_path / "disturbed")
    assert work_locally(tmp_path / "disturbed", workers=2).left == 0
    after = read_status(tmp_path / "disturbed")
    assert after.done == points
    assert after.failed == 0
    assert seen.done <= after.done
    work_locally(tmp_path / "undisturbed", workers=1)
    assert table_of(tmp_path / "disturbed") == table_of(tmp_path / "undisturbed")
    leftovers = [p.name for p in (tmp_path / "disturbed" / "shards").iterdir() if p.suffix != ".h5"]
    assert len(leftovers) <= killed  # at most an unfinished file for each kill, which nothing reads
    return killed


def test_a_few_random_kills_change_nothing(tmp_path: Path) -> None:
    assert _killed_and_undisturbed(tmp_path, points=20, kills=3, seed=5, longest=2.0) >= 1


@pytest.mark.long
def test_fifty_random_kills_change_nothing(tmp_path: Path) -> None:
    base = changed(
        SLOW, ('forward = "2e4 /s"', 'forward = "8e4 /s"')
    )  # so that work is left after fifty on any machine
    assert _killed_and_undisturbed(tmp_path, points=200, kills=50, seed=11, longest=1.2, base=base) == 50


@pytest.mark.parametrize("signal_number", [signal.SIGTERM, signal.SIGUSR1, signal.SIGINT])
@pytest.mark.parametrize("workers", ["1", "2"])
def test_a_signal_stops_at_a_clean_place(signal_number: signal.Signals, workers: str, tmp_path: Path) -> None:
    """In the middle of a point that would take hours: what is finished is kept, the claim is given back, no child is left."""
    text = sweep_of(4).replace('"run.seed"', '"run.duration" = ["1 s", "1 h"]\n"run.seed"')
    base = changed(SLOW, ('duration = "2 s"', 'duration = "1 s"'), ('sample_every = "0.5 s"', 'sample_every = "1 s"'))
    directory = tmp_path / "sweep"
    make_plan(write_sweep(tmp_path, text, base), directory)
    process = start(directory, "--workers", workers)
    limit = time.monotonic() + 60
    while time.monotonic() < limit and (read_status(directory).done < 4 or not _deep_in(directory)):
        assert process.poll() is None, process.communicate()[0]
        time.sleep(0.2)
    children = workers_of(process.pid)
    process.send_signal(signal_number)
    out, _ = process.communicate(timeout=30)
    assert process.returncode == 130, out
    assert "stopped when asked; what is finished is kept" in out
    assert not [pid for pid in children if Path(f"/proc/{pid}").exists()]
    status = read_status(directory)
    assert (status.done, status.failed, status.left) == (4, 0, 4)
    assert status.workers == 0
    assert status.suspects == []


def test_a_stop_is_never_taken_for_an_error_of_the_point(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """An impatient user's second signal strikes anywhere, such as between the two halves of giving up a lock."""
    from driblet_analysis.sweep import work

    plain = work.run
    calls = []

    def struck(*arguments: Any, **options: Any) -> Any:
        calls.append(1)
        if len(calls) < 3:
            return plain(*arguments, **options)
        try:
            signal.raise_signal(signal.SIGINT)
            signal.raise_signal(signal.SIGINT)
        except KeyboardInterrupt:
            raise RuntimeError("release unlocked lock") from None
        raise AssertionError("the second signal strikes")

    make_plan(write_sweep(tmp_path), tmp_path / "sweep")
    monkeypatch.setattr(work, "run", struck)
    with work.stopping_on_signals() as stop:
        outcome = work_locally(tmp_path / "sweep", workers=1, stop=stop)
    assert (outcome.written, outcome.failed, outcome.stopped) == (2, 0, True)
    status = read_status(tmp_path / "sweep")
    assert (status.done, status.failed, status.left) == (2, 0, POINTS - 2)


def _deep_in(directory: Path) -> bool:
    """Whether a worker is at one of the points that never end."""
    claims = [p.read_text() for p in (directory / "claims").iterdir() if re.fullmatch(r"\d+\.\d+", p.name)]
    return any(re.search(rf'"at": {n}\b', text) for text in claims for n in range(4, 8))


def test_workers_end_when_their_parent_is_killed(tmp_path: Path) -> None:
    base = changed(LONG, ('sample_every = "0.5 s"', 'sample_every = "1 min"'))
    make_plan(write_sweep(tmp_path, sweep_of(2), base), tmp_path / "sweep")
    process = start(tmp_path / "sweep", "--workers", "2")
    limit = time.monotonic() + 60
    children: list[int] = []
    while time.monotonic() < limit:
        children = workers_of(process.pid)
        if len(children) == 2 and read_status(tmp_path / "sweep").workers == 2:
            break
        time.sleep(0.1)
    assert len(children) == 2
    process.kill()
    process.wait()
    limit = time.monotonic() + 30
    while any(_runs(pid) for pid in children) and time.monotonic() < limit:
        time.sleep(0.1)
    assert not any(_runs(pid) for pid in children)
    assert read_status(tmp_path / "sweep").workers == 0


def _runs(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False


def test_two_workers_on_one_directory_do_every_point_once(tmp_path: Path) -> None:
    make_plan(write_sweep(tmp_path, sweep_of(24), SLOW), tmp_path / "sweep")
    processes = [start(tmp_path / "sweep", "--workers", "1") for _ in range(3)]
    outputs = [p.communicate(timeout=120)[0] for p in processes]
    assert [p.returncode for p in processes] == [0, 0, 0], outputs
    written = [int(re.search(r"(\d+) points written", out)[1]) for out in outputs]
    assert sum(written) == 24
    assert read_status(tmp_path / "sweep").done == 24


def test_a_failing_point_stops_no_other_and_is_told(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A population that doubles passes 2^53 copies at the points where it is given the time."""
    base = changed(
        SMALL,
        ('equation = "A <=> B"\nK = 2', 'equation = "A -> 2 A"\none_way = "grows"'),
        ('duration = "2 s"', 'duration = "0.1 s"'),
        ('sample_every = "0.5 s"', 'sample_every = "0.05 s"'),
        ('A = "10 copies"', 'A = "9e15 copies"'),
    )
    text = (
        'system = "base.toml"\nreplicates = 2\n[axes]\n"species.A" = ["1 copies", "9.00719924e15 copies", "2 copies"]\n'
    )
    directory = tmp_path / "sweep"
    make_plan(write_sweep(tmp_path, text, base), directory)
    assert main(["sweep", "work", str(directory), "--workers", "1"]) == 3
    assert "1 of them ended with an error" in capsys.readouterr().out
    status = read_status(directory)
    assert (status.done, status.failed, status.left) == (2, 1, 0)
    assert status.failures[0][0] == 1
    assert "2^53" in status.failures[0][1]
    assert main(["sweep", "status", str(directory)]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "2 of 3 points done, 1 failed, 0 left" in out
    assert "1 failed, such as point 1" in out
    table = table_of(directory).splitlines()
    assert table[-2].startswith("1,9007199240000000,,,")
    assert "2^53" in table[-2]
    assert main(["sweep", "work", str(directory), "--workers", "1"]) == 0
    assert "0 points written" in capsys.readouterr().out
    assert main(["sweep", "work", str(directory), "--workers", "1", "--retry-failed"]) == 3
    assert "1 points written" in capsys.readouterr().out


def test_a_point_that_kills_its_worker_stops_no_other(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """As the system does when memory runs out: the others are done, the deadly one is named."""
    make_plan(write_sweep(tmp_path), tmp_path / "sweep")
    (tmp_path / "sitecustomize.py").write_text(
        "import os, signal\n"
        "import driblet_analysis.sweep.work as work\n"
        "plain = work.simulate\n"
        "def simulate(plan, point, stop):\n"
        "    if point.number == 5:\n"
        "        os.kill(os.getpid(), signal.SIGKILL)\n"
        "    return plain(plan, point, stop)\n"
        "work.simulate = simulate\n"
    )
    monkeypatch.setenv("PYTHONPATH", str(tmp_path))
    outcome = work_locally(tmp_path / "sweep", workers=2)
    assert outcome.left == 1
    assert outcome.written == POINTS - 1
    assert "killed by signal 9 at point 5, after" in outcome.notes[-1]
    status = read_status(tmp_path / "sweep")
    assert (status.done, status.left, status.suspects) == (POINTS - 1, 1, [5])
    monkeypatch.delenv("PYTHONPATH")
    assert work_locally(tmp_path / "sweep", workers=2).left == 0


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of four megabytes."""
    folder = tmp_path / "disk"
    folder.mkdir()
    if os.geteuid() != 0 or shutil.which("mount") is None:
        pytest.skip("needs root and mount for a small file system")
    made = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=4m", "tmpfs", str(folder)], capture_output=True, check=False
    )
    if made.returncode != 0:
        pytest.skip("needs the right to mount a small file system")
    yield folder
    subprocess.run(["umount", str(folder)], check=True)


@pytest.mark.parametrize("workers", ["1", "2"])
def test_a_full_disk_costs_nothing_that_was_reported(
    workers: str, small_disk: Path, tmp_path: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    directory = small_disk / "sweep"
    make_plan(write_sweep(tmp_path), directory)
    assert main(["sweep", "work", str(directory), "--workers", "1", "--part", "1/2"]) == 0
    before = read_status(directory).done
    assert before == 6
    filler = small_disk / "filler"
    with filler.open("wb", buffering=0) as stream:
        try:
            while True:
                stream.write(bytes(4096))
        except OSError:
            pass
    capfd.readouterr()
    assert main(["sweep", "work", str(directory), "--workers", workers]) == 2
    error = capfd.readouterr().err
    assert error.count("\n") == 1, error
    assert "no space left on device" in error
    assert read_status(directory).done == before
    filler.unlink()
    assert main(["sweep", "work", str(directory), "--workers", workers]) == 0
    assert read_status(directory).done == POINTS
    make_plan(tmp_path / "sweep.toml", tmp_path / "roomy")
    work_locally(tmp_path / "roomy", workers=1)
    assert table_of(directory) == table_of(tmp_path / "roomy")


def test_a_half_written_shard_is_done_again(tmp_path: Path) -> None:
    directory = tmp_path / "sweep"
    make_plan(write_sweep(tmp_path), directory)
    work_locally(directory, workers=1)
    whole = table_of(directory)
    files = [files[0].path for files in shard_files(read_plan(directory)).values()]
    files[2].write_bytes(files[2].read_bytes()[:1000])
    files[4].write_bytes(b"")
    (directory / "shards" / "000007-0001-00000000.h5.1234.tmp").write_bytes(b"half")
    assert len(read_status(directory).damaged) == 2
    outcome = work_locally(directory, workers=1)
    assert outcome.written == 2
    assert len(outcome.notes) == 2
    assert table_of(directory) == whole


def test_a_directory_that_may_only_be_read_still_tells(tmp_path: Path) -> None:
    directory = tmp_path / "sweep"
    make_plan(write_sweep(tmp_path, SWEEP), directory)
    work_locally(directory, workers=1, part=(1, 3))
    before = sorted(str(p) for p in directory.rglob("*"))
    read_status(directory)
    collect(directory, tmp_path / "t.csv")
    assert sorted(str(p) for p in directory.rglob("*")) == before
