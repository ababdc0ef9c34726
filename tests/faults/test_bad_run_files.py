"""Run files that are none, or are damaged, cut short, of another version: one line each, and never a wrong number."""

from __future__ import annotations

import random
import shutil
from contextlib import suppress
from pathlib import Path

import h5py
import numpy as np
import pytest

import driblet
from driblet import ensemble, store
from driblet.results import Run
from driblet.store import parts_folder
from tests.texts import MIXED, SMALL


@pytest.fixture(scope="module")
def good(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("good") / "run.h5"
    driblet.run(driblet.loads(MIXED), path, replicates=5).close()
    return path


def complaint(path: Path) -> str:
    with pytest.raises(driblet.InputError) as caught:
        Run(path)
    (line,) = caught.value.lines()
    assert line.startswith(f"{path}: ")
    assert caught.value.exit_status == 2
    return line


def everything(path: Path) -> list[np.ndarray]:
    with Run(path) as run:
        run.system  # noqa: B018
        assert run.provenance
        found = [
            run.counts,
            run.firings_forward,
            run.firings_backward,
            run.volume_L,
            run.events,
            run.end_reason,
            run.time_s,
        ]
        return [*found, *(run.readout(name) for name in run.readout_units)]


def test_what_is_no_run_file(tmp_path: Path) -> None:
    (tmp_path / "text.h5").write_text("not HDF5")
    (tmp_path / "empty.h5").write_bytes(b"")
    (tmp_path / "folder.h5").mkdir()
    (tmp_path / "system.toml").write_text(SMALL)
    with h5py.File(tmp_path / "other.h5", "w") as file:
        file["x"] = 1
    assert "is not HDF5, so it is no run file" in complaint(tmp_path / "text.h5")
    assert "is empty, so it is no run file" in complaint(tmp_path / "empty.h5")
    assert "is a directory, not a run file" in complaint(tmp_path / "folder.h5")
    assert "cannot be read: no such file or directory" in complaint(tmp_path / "missing.h5")
    assert "is HDF5 but not a driblet run file" in complaint(tmp_path / "other.h5")
    system = complaint(tmp_path / "system.toml")
    assert "is a system file, not a run file: `driblet run" in system
    assert "-o RUN.h5` makes one" in system
    (tmp_path / "nothing.h5.parts").mkdir()
    assert "cannot be read" in complaint(tmp_path / "nothing.h5")


@pytest.mark.parametrize("version", [0, store.FORMAT + 1, -1, 2**40, "two", 1.5, [1, 2]])
def test_another_version(good: Path, tmp_path: Path, version: object) -> None:
    path = shutil.copy(good, tmp_path / "run.h5")
    with h5py.File(path, "r+") as file:
        file.attrs["driblet_format"] = version
    line = complaint(Path(path))
    assert "version" in line or "damaged" in line


@pytest.mark.parametrize(
    "name",
    [
        "replicate", "time", "species", "reaction", "provenance", "provenance/system_file", "counts", "volume",
        "readout_pairs", "events",
    ],
)  # fmt: skip
def test_a_missing_piece(good: Path, tmp_path: Path, name: str) -> None:
    path = Path(shutil.copy(good, tmp_path / "run.h5"))
    with h5py.File(path, "r+") as file:
        del file[name]
    with pytest.raises(driblet.InputError, match="is a damaged run file"):
        everything(path)


@pytest.mark.parametrize("name", ["identity", "replicates_planned"])
def test_a_missing_attribute(good: Path, tmp_path: Path, name: str) -> None:
    path = Path(shutil.copy(good, tmp_path / "run.h5"))
    with h5py.File(path, "r+") as file:
        del file.attrs[name]
    with pytest.raises(driblet.InputError, match="is a damaged run file"):
        Run(path)


def test_a_file_cut_short_anywhere(good: Path, tmp_path: Path) -> None:
    data = good.read_bytes()
    path = tmp_path / "run.h5"
    rng = random.Random(1)
    for length in [1, 4, 8, 9, 16, 100, 512, 1000, len(data) - 1, *(rng.randrange(len(data)) for _ in range(40))]:
        path.write_bytes(data[:length])
        with pytest.raises(driblet.InputError) as caught:
            everything(path)
        assert len(caught.value.lines()) == 1


def test_flipped_bits_never_change_the_trajectories_unnoticed(good: Path, tmp_path: Path) -> None:
    """One bit flipped at 120 random places: either one line, or the recorded series are what they were (checksummed
    chunks); nothing else is raised."""
    data = bytearray(good.read_bytes())
    path = tmp_path / "run.h5"
    with Run(good) as run:
        counts, forward, backward = run.counts, run.firings_forward, run.firings_backward
    rng = random.Random(2)
    caught = 0
    for _ in range(120):
        at, bit = rng.randrange(len(data)), 1 << rng.randrange(8)
        data[at] ^= bit
        path.write_bytes(data)
        data[at] ^= bit
        told = 0
        with suppress(driblet.InputError):
            told = 1
            everything(path)
            with Run(path) as run:
                if run.counts.shape == counts.shape:
                    np.testing.assert_array_equal(run.counts, counts)
                    np.testing.assert_array_equal(run.firings_forward, forward)
                    np.testing.assert_array_equal(run.firings_backward, backward)
            told = 0
        caught += told
    assert caught > 0


def test_a_damaged_shard_is_named_and_can_be_discarded(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(store, "_FLUSH_SECONDS", 0.0)
    monkeypatch.setattr(ensemble, "_UNIT_BYTES", 1)
    path, system = tmp_path / "run.h5", driblet.loads(MIXED)
    monkeypatch.setattr(store.RunWriter, "finish", stop_before_the_end)
    with pytest.raises(driblet.InterruptedRunError):
        driblet.run(system, path)
    monkeypatch.undo()
    shards = sorted(parts_folder(path).iterdir())
    assert len(shards) > 3
    shards[1].write_bytes(shards[1].read_bytes()[:700])
    with pytest.raises(driblet.InputError) as caught:
        Run(path)
    assert str(shards[1]) in caught.value.lines()[0]
    with pytest.raises(driblet.InputError) as caught:
        driblet.run(system, path, resume=True)
    assert str(shards[1]) in caught.value.lines()[0]
    shards[1].unlink()
    resumed = driblet.run(system, path, resume=True)
    np.testing.assert_array_equal(resumed.counts, driblet.run(system).counts)


def stop_before_the_end(writer: store.RunWriter, closing: object) -> None:
    writer.flush()
    raise KeyboardInterrupt
