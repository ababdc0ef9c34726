"""The run file: what is in it, shards and their merge, resuming, and what RunWriter refuses."""

from __future__ import annotations

import errno
import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

import driblet
from driblet import ensemble, store
from driblet.errors import InputError
from driblet.results import Run
from driblet.run_file import Block, Layout
from driblet.store import RunWriter, open_file, open_run, parts_folder
from tests.texts import MIXED, SMALL, changed

SERIES = ("counts", "firings_forward", "firings_backward", "readout_part")


def layout(replicates: int = 10, unit: int = 3, identity: str = "one", **changes: Any) -> Layout:
    given: dict[str, Any] = {
        "species": ("A", "B"), "reactions": ("turn",), "readouts": ("part",), "readout_units": ("1",),
        "time_s": np.array([0.0, 1.0, 2.5]), "replicates": replicates, "unit": unit, "identity": identity,
        "system_text": SMALL, "provenance": {"seed": 3, "engine": "exact"},
    }  # fmt: skip
    return Layout(**{**given, **changes})


def block(plan: Layout, unit: int) -> Block:
    """A block whose every number says where it belongs."""
    rows = np.arange(unit * plan.unit, min((unit + 1) * plan.unit, plan.replicates))
    times, species, reactions = len(plan.time_s), len(plan.species), len(plan.reactions)

    def filled(width: int, offset: int) -> np.ndarray:
        t, i = np.arange(times)[None, :, None], np.arange(width)[None, None, :]
        return rows[:, None, None] * 10_000 + t * 100 + i * 10 + offset

    series = {
        "counts": filled(species, 0), "firings_forward": filled(reactions, 1), "firings_backward": filled(reactions, 2),
        **{f"readout_{r}": filled(1, 3)[..., 0] / 7 for r in plan.readouts},
    }  # fmt: skip
    return Block(unit, rows, rows * 1e-18, np.ones(len(rows), dtype=np.int64), rows * 5, series)


def held(path: Path) -> dict[str, np.ndarray]:
    with Run(path) as run:
        assert run.complete
        return {
            "replicate": run.replicate, "counts": run.counts, "firings_forward": run.firings_forward,
            "firings_backward": run.firings_backward, "volume": run.volume_L, "events": run.events,
            "reason": run.end_reason, **{f"readout_{n}": run.readout(n) for n in run.readout_units},
        }  # fmt: skip


def same(one: dict[str, np.ndarray], other: dict[str, np.ndarray]) -> bool:
    return one.keys() == other.keys() and all(np.array_equal(one[k], other[k], equal_nan=True) for k in one)


def expected(plan: Layout) -> dict[str, np.ndarray]:
    blocks = [block(plan, u) for u in range(plan.units)]
    joined = {name: np.concatenate([b.series[name] for b in blocks]) for name in blocks[0].series}
    return {
        **joined, "replicate": np.arange(plan.replicates), "volume": np.concatenate([b.volume_L for b in blocks]),
        "events": np.concatenate([b.events for b in blocks]), "reason": np.concatenate([b.reason for b in blocks]),
    }  # fmt: skip


@pytest.mark.parametrize("flush_after", [(), (0,), (0, 1, 2, 3), (1,), (2, 3)])
@pytest.mark.parametrize("order", [(0, 1, 2, 3), (3, 1, 0, 2)])
def test_blocks_come_out_as_they_went_in_however_they_were_written(
    tmp_path: Path, order: tuple[int, ...], flush_after: tuple[int, ...]
) -> None:
    """Four units, the last one short; in any order; as one file or as shards that are merged."""
    plan, path = layout(), tmp_path / "run.h5"
    writer = RunWriter(path, plan)
    for k, unit in enumerate(order):
        writer.add(block(plan, unit))
        if k in flush_after:
            writer.flush()
    writer.finish({"wall_time_s": 1.5})
    assert same(held(path), expected(plan))
    assert [p.name for p in tmp_path.iterdir()] == ["run.h5"], "no shard and no unfinished file is left"
    with Run(path) as run:
        assert run.provenance["wall_time_s"] == 1.5
        assert run.provenance["seed"] == 3


@pytest.mark.parametrize(
    "changes",
    [
        {"species": ()},
        {"reactions": ()},
        {"readouts": (), "readout_units": ()},
        {"time_s": np.array([0.0])},
        {"time_s": np.linspace(0, 1, 5000), "unit": 7},
        {"replicates": 1, "unit": 1},
        {"species": tuple(f"S{i}" for i in range(40))},
        {"unit": 100},
    ],
    ids=lambda c: ",".join(c),
)
@pytest.mark.parametrize("sharded", [False, True])
def test_odd_shapes(tmp_path: Path, changes: dict[str, Any], sharded: bool) -> None:
    plan, path = layout(**changes), tmp_path / "run.h5"
    writer = RunWriter(path, plan)
    for unit in range(plan.units):
        writer.add(block(plan, unit))
        if sharded:
            writer.flush()
    writer.finish({})
    assert same(held(path), expected(plan))


def test_readers_open_the_shards_of_an_unfinished_run(tmp_path: Path) -> None:
    plan, path = layout(), tmp_path / "run.h5"
    writer = RunWriter(path, plan)
    for unit in (2, 0):
        writer.add(block(plan, unit))
        writer.flush()
    assert not path.exists()
    for name in (path, parts_folder(path)):
        with Run(name) as run:
            assert not run.complete
            assert run.replicates_planned == 10
            assert run.replicate.tolist() == [0, 1, 2, 6, 7, 8]
            np.testing.assert_array_equal(run.counts, expected(plan)["counts"][[0, 1, 2, 6, 7, 8]])
            np.testing.assert_array_equal(run.final_counts(), run.counts[:, -1])
            np.testing.assert_array_equal(run.initial_counts(), run.counts[:, 0])
            assert "interrupted" in repr(run)


def test_resuming_keeps_what_is_there(tmp_path: Path) -> None:
    plan, path = layout(), tmp_path / "run.h5"
    first = RunWriter(path, plan)
    first.add(block(plan, 1))
    first.flush()
    second = RunWriter(path, plan, resume=True)
    assert second.done == {1}
    for unit in (0, 2, 3):
        second.add(block(plan, unit))
    second.finish({})
    assert same(held(path), expected(plan))
    assert not parts_folder(path).exists()


@pytest.mark.skipif(not hasattr(os, "posix_fallocate"), reason="room is tried for with posix_fallocate")
def test_no_room_for_the_merged_file_keeps_the_shards(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    plan, path = layout(), tmp_path / "run.h5"
    writer = RunWriter(path, plan)
    for unit in range(plan.units):
        writer.add(block(plan, unit))
        writer.flush()
    asked = []

    def refuse(_: int, start: int, size: int) -> None:
        asked.append(size)
        raise OSError(errno.ENOSPC, "the disk of this test is full")

    monkeypatch.setattr(os, "posix_fallocate", refuse)
    with pytest.raises(InputError) as caught:
        writer.finish({})
    assert caught.value.lines() == [f"{path}: cannot be written: no space left on device"]
    assert asked[0] > sum(p.stat().st_size for p in parts_folder(path).iterdir())
    assert not path.exists()
    monkeypatch.undo()
    resumed = RunWriter(path, plan, resume=True)
    assert resumed.done == {0, 1, 2, 3}
    resumed.finish({})
    assert same(held(path), expected(plan))


def test_a_unit_written_twice_counts_once(tmp_path: Path) -> None:
    """Ctrl-C between renaming a shard and noting it writes the same unit again."""
    plan, path = layout(), tmp_path / "run.h5"
    writer = RunWriter(path, plan)
    writer.add(block(plan, 1))
    writer.flush()
    writer.add(block(plan, 1))
    writer.add(block(plan, 0))
    writer.flush()
    with Run(path) as run:
        assert run.replicate.tolist() == [0, 1, 2, 3, 4, 5]
        np.testing.assert_array_equal(run.counts, expected(plan)["counts"][:6])


def test_a_taken_name_is_refused_and_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "run.h5"
    path.write_text("mine")
    with pytest.raises(InputError, match="exists already; --force replaces it"):
        RunWriter(path, layout())
    assert path.read_text() == "mine"
    assert [p.name for p in tmp_path.iterdir()] == ["run.h5"]


def test_parts_of_an_interrupted_run_are_not_overwritten(tmp_path: Path) -> None:
    plan, path = layout(), tmp_path / "run.h5"
    writer = RunWriter(path, plan)
    writer.add(block(plan, 0))
    writer.flush()
    with pytest.raises(InputError, match=r"an interrupted run is kept in run\.h5\.parts; go on with --resume"):
        RunWriter(path, plan)
    with pytest.raises(InputError, match="parts of another run"):
        RunWriter(path, layout(identity="other"), resume=True)
    RunWriter(path, layout(identity="other"), force=True)
    assert not parts_folder(path).exists()


def test_a_killed_writers_scraps_are_no_interrupted_run(tmp_path: Path) -> None:
    """An unfinished file alone in the parts folder holds nothing: a new run starts and clears it away."""
    plan, path = layout(), tmp_path / "run.h5"
    parts_folder(path).mkdir()
    (parts_folder(path) / "shard.12345.tmp").write_bytes(b"half a file")
    writer = RunWriter(path, plan)
    for unit in range(plan.units):
        writer.add(block(plan, unit))
    writer.finish({})
    assert [p.name for p in tmp_path.iterdir()] == ["run.h5"]


def test_force_replaces_the_old_run_only_when_something_takes_its_place(tmp_path: Path) -> None:
    plan, path = layout(), tmp_path / "run.h5"
    path.write_text("old")
    writer = RunWriter(path, plan, force=True)
    writer.add(block(plan, 0))
    assert path.read_text() == "old"
    writer.flush()
    assert not path.exists(), "readers would take the old file for the new run"
    with Run(path) as run:
        assert run.replicate.tolist() == [0, 1, 2]
    assert RunWriter(path, plan, resume=True).done == {0}


@pytest.mark.parametrize(
    ("name", "complaint"),
    [
        (".", "is a directory"),
        ("no/such/run.h5", "does not exist"),
        ("file/run.h5", "does not exist"),
        ("n" * 300, "file name too long"),
        ("a\0b", "null byte"),
        ("blocked.h5", "is in the way"),
    ],
)
def test_places_that_cannot_hold_a_run_file(tmp_path: Path, name: str, complaint: str) -> None:
    (tmp_path / "file").write_text("")
    (tmp_path / "blocked.h5.parts").write_text("")
    before = sorted(tmp_path.iterdir())
    for force in (False, True):
        with pytest.raises(InputError) as caught:
            RunWriter(tmp_path / name, layout(), force=force)
        assert complaint in str(caught.value)
        assert len(caught.value.lines()) == 1
    assert sorted(tmp_path.iterdir()) == before


@pytest.mark.parametrize("name", ["/dev/null", "/proc/run.h5"])
def test_places_outside_that_cannot_hold_a_run_file(name: str) -> None:
    for force in (False, True):
        with pytest.raises(InputError, match=r"no ordinary file|cannot be written"):
            RunWriter(Path(name), layout(), force=force)
    assert Path("/dev/null").is_char_device()


def test_the_layout_opens_in_xarray_with_names_and_units(tmp_path: Path) -> None:
    xarray = pytest.importorskip("xarray")
    path = tmp_path / "run.h5"
    system = driblet.loads(MIXED)
    run = driblet.run(system, path, replicates=4)
    with xarray.open_dataset(path, engine="h5netcdf") as data:
        assert dict(data.sizes) == {"replicate": 4, "time": 9, "species": 5, "reaction": 6}
        assert data.counts.dims == ("replicate", "time", "species")
        assert data.firings_forward.dims == data.firings_backward.dims == ("replicate", "time", "reaction")
        assert data.readout_level.dims == ("replicate", "time")
        assert data.species.values.tolist() == ["A", "B", "C", "D", "E"]
        assert data.reaction.values.tolist() == ["supply", "turn", "pair", "triple", "meet", "leak"]
        assert data.counts.attrs["units"] == "1"
        assert data.readout_level.attrs["units"] == "M"
        assert data.readout_pull.attrs["units"] == "kJ/mol"
        assert data.volume.attrs["units"] == "L"
        np.testing.assert_array_equal(data.counts.sel(species="C").values, run.counts[..., 2])
        np.testing.assert_allclose(data.readout_pairs, 2 * run.counts[..., 2])
        np.testing.assert_allclose(data.readout_level, run.counts[..., 0] / (6.02214076e23 * run.volume_L)[:, None])
    in_memory = run.to_xarray()
    with xarray.open_dataset(path, engine="h5netcdf") as data:
        for name in ("counts", "firings_forward", "firings_backward", "readout_pairs", "volume"):
            np.testing.assert_array_equal(data[name].values, in_memory[name].values)
            assert data[name].dims == in_memory[name].dims
            assert data[name].attrs["units"] == in_memory[name].attrs["units"]


def test_plain_h5py_finds_dimension_scales_and_provenance(tmp_path: Path) -> None:
    path = tmp_path / "run.h5"
    driblet.run(driblet.loads(MIXED), path, replicates=2)
    with h5py.File(path) as file:
        assert file.attrs["driblet_format"] == store.FORMAT
        for axis, scale in enumerate(("replicate", "time", "species")):
            assert file["counts"].dims[axis][0].name == f"/{scale}"
        assert file["time"].attrs["units"] == "s"
        assert file["provenance/system_file"].asstr()[()] == MIXED
        facts = dict(file["provenance"].attrs)
        assert facts["seed"] == 11
        assert facts["engine"] == "exact"
        assert {
            "driblet_version",
            "numpy_version",
            "numba_version",
            "host_cpu",
            "started",
            "wall_time_s",
        } <= facts.keys()
        assert json.loads(facts["readout_units"]) == {"pairs": "1", "level": "M", "pull": "kJ/mol"}


def test_the_record_is_good_enough_to_run_again(tmp_path: Path) -> None:
    path = tmp_path / "run.h5"
    run = driblet.run(driblet.loads(MIXED), path, replicates=3, seed=99, duration=1.0, sample_every=0.25)
    facts = run.provenance
    again = driblet.run(
        run.system,
        replicates=facts["replicates"], duration=facts["duration_s"], sample_every=facts["sample_every_s"],
        seed=facts["seed"], engine=facts["engine"],
    )  # fmt: skip
    np.testing.assert_array_equal(again.counts, run.counts)
    assert again.identity == run.identity


def test_identity_changes_with_whatever_changes_the_bits(tmp_path: Path) -> None:
    system = driblet.loads(SMALL)
    base = driblet.run(system).identity
    assert driblet.run(system, threads=3).identity == base
    for changes in ({"seed": 2}, {"replicates": 4}, {"duration": 1.5}, {"sample_every": 0.25}):
        assert driblet.run(system, **changes).identity != base  # type: ignore[arg-type]
    assert driblet.run(driblet.loads(changed(SMALL, ("K = 2", "K = 3")))).identity != base


def test_a_complete_run_is_resumed_as_it_is_and_another_is_refused(tmp_path: Path) -> None:
    path, system = tmp_path / "run.h5", driblet.loads(SMALL)
    driblet.run(system, path).close()
    before = path.stat()
    driblet.run(system, path, resume=True).close()
    assert path.stat().st_mtime_ns == before.st_mtime_ns
    with pytest.raises(InputError, match="another run"):
        driblet.run(system, path, resume=True, seed=5)
    with pytest.raises(InputError, match="exists already"):
        driblet.run(system, path)
    driblet.run(system, path, force=True, seed=5).close()
    with Run(path) as run:
        assert run.provenance["seed"] == 5


def test_a_complete_run_is_resumed_without_a_compiler(tmp_path: Path) -> None:
    file = tmp_path / "system.toml"
    file.write_text(MIXED)
    driblet.run(driblet.load(file), tmp_path / "run.h5").close()
    code = (
        "import sys, driblet\n"
        "driblet.run(driblet.load(sys.argv[1]), sys.argv[2], resume=True).close()\n"
        "print([name for name in ('numba', 'pint', 'scipy.optimize', 'matplotlib') if name in sys.modules])\n"
    )
    command = [sys.executable, "-c", code, str(file), str(tmp_path / "run.h5")]
    assert subprocess.run(command, capture_output=True, text=True, check=True).stdout.strip() == "[]"


def test_shards_and_one_file_hold_the_same_bits(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    system = driblet.loads(MIXED)
    driblet.run(system, tmp_path / "one.h5").close()
    monkeypatch.setattr(store, "_FLUSH_SECONDS", 0.0)
    monkeypatch.setattr(ensemble, "_UNIT_BYTES", 1)
    driblet.run(system, tmp_path / "many.h5").close()
    assert same(held(tmp_path / "one.h5"), held(tmp_path / "many.h5"))
    with h5py.File(tmp_path / "many.h5") as file:
        assert file["counts"].chunks[0] == 1
        assert file["counts"].compression == "gzip"
        assert file["counts"].shuffle
        assert file["counts"].fletcher32


def test_a_run_in_memory_is_the_same_in_one_piece_and_in_many(monkeypatch: pytest.MonkeyPatch) -> None:
    system = driblet.loads(MIXED)
    whole = driblet.run(system, replicates=70, threads=2)
    monkeypatch.setattr(store, "WRITE_BYTES", 1)
    many = driblet.run(system, replicates=70, threads=2)
    np.testing.assert_array_equal(many.replicate, np.arange(70))
    for name in ("counts", "firings_forward", "firings_backward", "volume_L", "events", "end_reason"):
        np.testing.assert_array_equal(getattr(many, name), getattr(whole, name))
    assert many.sums is not None
    assert whole.sums is not None
    np.testing.assert_array_equal(many.sums.monomial_time, whole.sums.monomial_time)


def test_covariances_are_those_of_the_samples_after_the_burn_in() -> None:
    system = driblet.loads(MIXED)
    run = driblet.run(system, replicates=5, burn_in=1.0)
    part = run.counts[:, run.time_s >= 1.0]
    assert run.covariance is not None
    for r in range(5):
        np.testing.assert_allclose(run.covariance[r], np.cov(part[r].T, bias=True), rtol=1e-9, atol=1e-12)
    kept = driblet.run(system, replicates=5, burn_in=1.0, record="summary").covariance
    assert kept is not None
    assert kept.shape == run.covariance.shape
    assert np.isfinite(kept).all()
    assert driblet.run(system, replicates=2, statistics=False).covariance is None


def test_memory_runs_do_not_disturb_each_other() -> None:
    system = driblet.loads(SMALL)
    one, other = driblet.run(system, seed=1), driblet.run(system, seed=2)
    assert one.provenance["seed"] == 1
    assert other.provenance["seed"] == 2
    assert not np.array_equal(one.counts, other.counts)


def test_the_caller_never_gets_more_than_one_line(tmp_path: Path) -> None:
    plan, path = layout(), tmp_path / "run.h5"
    writer = RunWriter(path, plan)
    tmp_path.joinpath("run.h5.parts").write_text("a file in the way")
    writer.add(block(plan, 0))
    with pytest.raises(InputError) as caught:
        writer.flush()
    assert caught.value.lines() == [f"{path}: cannot be written: file exists"]


def test_opening_shards_of_two_runs_together_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "run.h5"
    for identity, unit in (("one", 0), ("two", 1)):
        plan = layout(identity=identity)
        writer = RunWriter(path, plan, resume=identity == "one")
        if identity == "one":
            writer.add(block(plan, unit))
            writer.flush()
            for shard in parts_folder(path).iterdir():
                shard.rename(tmp_path / "kept.h5")
            parts_folder(path).rmdir()
        else:
            writer.add(block(plan, unit))
            writer.flush()
            (tmp_path / "kept.h5").rename(parts_folder(path) / "units-000000-0001-1.h5")
    with pytest.raises(InputError, match="mixes parts of different runs"):
        open_run(path)


def test_open_file_gives_a_readable_file(tmp_path: Path) -> None:
    path = tmp_path / "run.h5"
    driblet.run(driblet.loads(SMALL), path).close()
    with open_file(path) as file:
        assert set(SERIES) <= set(file)
