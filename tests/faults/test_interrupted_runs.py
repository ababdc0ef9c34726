"""Killed at random instants, interrupted by Ctrl-C, out of disk: what was reported as written opens plainly, and a resumed
run ends in the same bits as an undisturbed one."""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

import driblet
from driblet import ensemble, store
from driblet.results import Run
from driblet.store import parts_folder
from tests.texts import MIXED, changed

TEXT = changed(MIXED, ("replicates = 12", "replicates = 60"))
NAMES = ("counts", "firings_forward", "firings_backward", "volume", "events", "end_reason", "readout_pull")

pytestmark = pytest.mark.skipif(not hasattr(os, "fork"), reason="kills forked children")


def many_small_shards() -> None:
    """Settings that make a shard of every unit and a unit of every replicate, to give a kill many places to strike."""
    store._FLUSH_SECONDS = 0.0
    ensemble._UNIT_BYTES = 1


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory: pytest.TempPathFactory) -> dict[str, np.ndarray]:
    path = tmp_path_factory.mktemp("undisturbed") / "run.h5"
    driblet.run(driblet.loads(TEXT), path).close()
    return contents(path)


def contents(path: Path) -> dict[str, np.ndarray]:
    with h5py.File(path) as file:
        return {name: file[name][:] for name in NAMES}


def check_what_is_there(folder: Path, undisturbed: dict[str, np.ndarray]) -> int:
    """Every file but unfinished scraps opens plainly and holds rows of the undisturbed run; returns the rows in shards."""
    rows = 0
    for path in sorted(folder.rglob("*")):
        if path.is_dir():
            assert path.name == "run.h5.parts"
            continue
        if path.suffix == ".tmp":
            assert path.parent.name == "run.h5.parts", "scraps lie in the parts folder only"
            continue
        with h5py.File(path) as file:
            replicate = file["replicate"][:]
            assert len(replicate) > 0
            for name in NAMES:
                np.testing.assert_array_equal(file[name][:], undisturbed[name][replicate])
            if path.name == "run.h5":
                assert replicate.tolist() == list(range(60))
            else:
                rows += len(replicate)
    return rows


def child(path: Path) -> None:
    many_small_shards()
    driblet.run(driblet.loads(TEXT), path, resume=True, threads=2).close()
    os._exit(0)


def kill_until_done(
    folder: Path, undisturbed: dict[str, np.ndarray], kills: int, rng: random.Random
) -> tuple[int, int]:
    """Run to the end again and again with at most one kill a start; returns how many kills struck a run at work, and how
    many of them left shards."""
    context = multiprocessing.get_context("fork")
    struck = with_shards = 0
    whole = 0.5  # seconds; measured anew by each run that gets through
    path = folder / "run.h5"
    while struck < kills:
        started = time.monotonic()
        process = context.Process(target=child, args=(path,))
        process.start()
        process.join(rng.uniform(0, 1.1) * whole)
        if process.is_alive():
            process.kill()
        process.join()
        if process.exitcode == 0:
            whole = max(0.05, time.monotonic() - started)
            assert check_what_is_there(folder, undisturbed) == 0
            assert [p.name for p in folder.iterdir()] == ["run.h5"], "nothing but the run file is left"
            path.unlink()
            continue
        assert process.exitcode == -signal.SIGKILL
        struck += 1
        with_shards += check_what_is_there(folder, undisturbed) > 0
    driblet.run(driblet.loads(TEXT), path, resume=True).close()
    assert check_what_is_there(folder, undisturbed) == 0
    assert {p.name for p in folder.iterdir()} == {"run.h5"}
    return struck, with_shards


def test_kills_lose_nothing_that_was_written(tmp_path: Path, undisturbed: dict[str, np.ndarray]) -> None:
    struck, with_shards = kill_until_done(tmp_path, undisturbed, 8, random.Random(1))
    assert struck == 8
    assert with_shards > 0


@pytest.mark.long
def test_two_hundred_kills_lose_nothing_that_was_written(tmp_path: Path, undisturbed: dict[str, np.ndarray]) -> None:
    struck, with_shards = kill_until_done(tmp_path, undisturbed, 200, random.Random(2))
    assert struck == 200
    assert with_shards > 50


def test_a_check_of_lost_rows_would_fail(tmp_path: Path, undisturbed: dict[str, np.ndarray]) -> None:
    """The broken twin: a run of another seed is not taken for this one."""
    driblet.run(driblet.loads(TEXT), tmp_path / "run.h5", seed=12).close()
    with pytest.raises(AssertionError):
        check_what_is_there(tmp_path, undisturbed)


WORKER = """\
import sys, driblet
from driblet import ensemble, packs, store
store._FLUSH_SECONDS, ensemble._UNIT_BYTES, packs._BUDGET = 0.0, 1, 2000
system = driblet.loads(sys.stdin.read())
def told(progress):
    if progress.finished >= 5:
        print("some", flush=True)
try:
    driblet.run(system, sys.argv[1], resume=True, threads=1, method="scalar", on_progress=told)
except driblet.InterruptedRunError as error:
    print(error, flush=True)
    sys.exit(error.exit_status)
"""


def test_ctrl_c_leaves_readable_shards(tmp_path: Path, undisturbed: dict[str, np.ndarray]) -> None:
    """SIGINT to a process of its own, once some replicates are finished; then resumed to the same bits."""
    slow = changed(
        TEXT, ('duration = "4 s"', 'duration = "500 s"'), ('sample_every = "0.5 s"', 'sample_every = "100 s"')
    )
    path = tmp_path / "run.h5"
    process = subprocess.Popen(
        [sys.executable, "-c", WORKER, str(path)],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    assert process.stdin is not None
    assert process.stdout is not None
    process.stdin.write(slow)
    process.stdin.close()
    assert process.stdout.readline() == "some\n"
    process.send_signal(signal.SIGINT)
    output, errors = process.stdout.read(), process.stderr.read() if process.stderr else ""
    assert (process.wait(), errors) == (130, "")
    message = output.strip().split("\n")[-1]
    assert message.startswith("interrupted: ")
    assert f"replicates are kept in {path}.parts, which every command reads; go on with --resume" in message
    with Run(path) as run:
        kept = len(run.replicate)
        assert 5 <= kept < 60
        assert message.startswith(f"interrupted: {kept} of 60")
        assert not run.complete
        rows = run.replicate
        counts = run.counts
    resumed = driblet.run(driblet.loads(slow), path, resume=True)
    assert resumed.complete
    np.testing.assert_array_equal(resumed.counts[rows], counts)
    sample = driblet.run(driblet.loads(slow), replicates=3)
    np.testing.assert_array_equal(resumed.counts[:3], sample.counts)


def interrupting(at: int) -> Any:
    def told(progress: driblet.Progress) -> None:
        if progress.finished >= at:
            raise KeyboardInterrupt

    return told


@pytest.mark.parametrize("at", [0, 1, 30, 60])
def test_an_interrupt_at_any_progress_is_resumed(tmp_path: Path, undisturbed: dict[str, np.ndarray], at: int) -> None:
    path, system = tmp_path / "run.h5", driblet.loads(TEXT)
    with pytest.raises(driblet.InterruptedRunError) as caught:
        driblet.run(system, path, on_progress=interrupting(at))
    assert caught.value.exit_status == 130
    assert not path.exists()
    kept = check_what_is_there(tmp_path, undisturbed)
    assert kept >= at
    if kept:
        assert f"{kept} of 60 replicates are kept" in str(caught.value)
        with pytest.raises(driblet.InputError, match="go on with --resume, or discard it with --force"):
            driblet.run(system, path)
    else:
        assert "nothing was kept" in str(caught.value)
    driblet.run(system, path, resume=True).close()
    assert check_what_is_there(tmp_path, undisturbed) == 0
    assert [p.name for p in tmp_path.iterdir()] == ["run.h5"]


def test_an_interrupt_while_the_file_is_made(
    tmp_path: Path, undisturbed: dict[str, np.ndarray], monkeypatch: pytest.MonkeyPatch
) -> None:
    path, system = tmp_path / "run.h5", driblet.loads(TEXT)
    replace, strikes = os.replace, [0]

    def struck(source: Any, target: Any) -> None:
        if Path(target).name == "run.h5" and strikes[0] == 0:
            strikes[0] = 1
            raise KeyboardInterrupt
        replace(source, target)

    monkeypatch.setattr(os, "replace", struck)
    with pytest.raises(driblet.InterruptedRunError, match="60 of 60 replicates are kept"):
        driblet.run(system, path)
    assert check_what_is_there(tmp_path, undisturbed) == 60
    driblet.run(system, path, resume=True).close()
    assert [p.name for p in tmp_path.iterdir()] == ["run.h5"]
    check_what_is_there(tmp_path, undisturbed)


def test_a_run_in_memory_says_that_nothing_is_left() -> None:
    with pytest.raises(driblet.InterruptedRunError, match="a run in memory leaves nothing"):
        driblet.run(driblet.loads(TEXT), on_progress=interrupting(0))


def test_resuming_with_other_settings_is_refused(tmp_path: Path) -> None:
    path, system = tmp_path / "run.h5", driblet.loads(TEXT)
    with pytest.raises(driblet.InterruptedRunError):
        driblet.run(system, path, on_progress=interrupting(1))
    before = sorted(p.name for p in parts_folder(path).iterdir())
    for changes in ({"seed": 3}, {"replicates": 70}, {"duration": 5.0}, {"sample_every": 1.0}):
        with pytest.raises(driblet.InputError, match="holds parts of another run; --force discards them"):
            driblet.run(system, path, resume=True, **changes)  # type: ignore[arg-type]
    assert sorted(p.name for p in parts_folder(path).iterdir()) == before


FULL = """\
import resource, signal, sys, driblet
from driblet import ensemble, store
path, limit, small = sys.argv[1], int(sys.argv[2]), sys.argv[3] == "small"
system = driblet.loads(sys.stdin.read())
driblet.run(system, replicates=1)
if small:
    store._FLUSH_SECONDS, ensemble._UNIT_BYTES = 0.0, 1
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))
try:
    driblet.run(system, path)
except driblet.InputError as error:
    print(error, flush=True)
    sys.exit(error.exit_status)
"""


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="a limit on file sizes as Linux enforces it")
@pytest.mark.parametrize(("limit", "shards"), [(5_000, "one"), (5_000, "small"), (60_000, "small")])
def test_a_file_that_cannot_grow_ends_in_one_line(
    tmp_path: Path, undisturbed: dict[str, np.ndarray], limit: int, shards: str
) -> None:
    """A limit on the size of files stands for a full disk: the system refuses the write in the same way. What fits before
    is kept; the last limit lets small shards through and not the merged file."""
    path = tmp_path / "run.h5"
    command = [sys.executable, "-c", FULL, str(path), str(limit), shards]
    done = subprocess.run(command, input=TEXT, capture_output=True, text=True, timeout=300)
    assert done.stderr == ""
    assert done.stdout == f"{path}: cannot be written: file too large\n"
    assert done.returncode == 2
    assert not path.exists()
    check_what_is_there(tmp_path, undisturbed)
    driblet.run(driblet.loads(TEXT), path, resume=True).close()
    assert check_what_is_there(tmp_path, undisturbed) == 0
    assert [p.name for p in tmp_path.iterdir()] == ["run.h5"]


@pytest.fixture
def tiny_disk(tmp_path: Path) -> Any:
    disk = tmp_path / "disk"
    disk.mkdir()
    mounted = hasattr(os, "geteuid") and os.geteuid() == 0 and sys.platform.startswith("linux")
    command = ["mount", "-t", "tmpfs", "-o", "size=120k", "tmpfs", str(disk)]
    try:
        mounted = mounted and subprocess.run(command, capture_output=True).returncode == 0
    except OSError:
        mounted = False
    if not mounted:
        pytest.skip("only root may mount a disk of 120 kB")
    yield disk
    subprocess.run(["umount", "-l", str(disk)], check=True)


def test_a_full_disk_ends_in_one_line(
    tiny_disk: Path, undisturbed: dict[str, np.ndarray], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(store, "_FLUSH_SECONDS", 0.0)
    path, system = tiny_disk / "run.h5", driblet.loads(TEXT)
    with pytest.raises(driblet.InputError) as caught:
        driblet.run(system, path)
    assert caught.value.lines() == [f"{path}: cannot be written: no space left on device"]
    assert not path.exists()
    with contextlib.suppress(FileNotFoundError):
        check_what_is_there(tiny_disk, undisturbed)


def test_parts_of_other_units_are_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A version that packs otherwise must not take rows for others."""
    system = driblet.loads(TEXT)
    path = tmp_path / "run.h5"
    monkeypatch.setattr(ensemble, "_UNIT_BYTES", 1)
    monkeypatch.setattr(store.RunWriter, "finish", lambda *_: (_ for _ in ()).throw(KeyboardInterrupt))
    with pytest.raises(driblet.InterruptedRunError):
        driblet.run(system, path, replicates=200, duration=1.0)
    monkeypatch.undo()
    with pytest.raises(driblet.InputError, match="holds parts made by another version"):
        driblet.run(system, path, replicates=200, duration=1.0, resume=True)
    assert driblet.run(system, path, replicates=200, duration=1.0, force=True).complete
