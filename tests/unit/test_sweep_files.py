"""Shards and tables: what is written reads back, what is damaged counts as absent, tables open in general-purpose readers."""

from __future__ import annotations

import csv
import math
from pathlib import Path

import h5py
import numpy as np
import pytest
import xarray

from driblet_analysis.sweep import collect, make_plan, read_plan, read_status, read_table, work_locally
from driblet_analysis.sweep.directory import Plan
from driblet_analysis.sweep.shards import (
    DamagedShardError,
    Result,
    is_complete,
    read_results,
    shard_files,
    union,
    write_results,
)
from driblet_analysis.sweep.summary import SummaryColumn
from driblet_analysis.sweep.table import is_table
from tests.sweep_texts import POINTS, SWEEP, write_sweep

COLUMN = SummaryColumn("A.mean", "copies")


@pytest.fixture
def plan(tmp_path: Path) -> Plan:
    text = SWEEP.replace("[0.5, 1, 2, 4]", "{ from = 1, to = 2, points = 100 }")
    return make_plan(write_sweep(tmp_path, text), tmp_path / "sweep").plan


def some(plan: Plan, shard: int, numbers: list[int], value: float = 1.0) -> dict[int, Result]:
    keys = {p.number: p.key for p in plan.read(plan.shard(shard))}
    return {n: Result(n, keys[n], {COLUMN: value + n}, "", 0.1) for n in numbers}


def test_results_read_back(plan: Plan) -> None:
    first, *_, last = plan.shard(2)
    results = some(plan, 2, [first, last])
    results[last] = Result(last, results[last].key, {}, "it broke", 0.5)
    file = write_results(plan, 2, results)
    assert read_results(plan, file) == results
    assert shard_files(plan) == {2: [file]}
    assert not is_complete(plan, 2, [file])


def test_a_run_kept_inside_reads_back_to_the_byte(plan: Plan) -> None:
    image = bytes(range(256)) * 40
    number = plan.shard(0)[0]
    results = {number: some(plan, 0, [number])[number]}
    results[number] = Result(number, results[number].key, {COLUMN: 2.0}, "", 0.1, image)
    file = write_results(plan, 0, results)
    assert read_results(plan, file)[number].run == image
    assert read_results(plan, file, runs=False)[number].run is None


def test_a_shard_is_the_union_of_its_files(plan: Plan) -> None:
    numbers = list(plan.shard(1))
    half = len(numbers) // 2
    write_results(plan, 1, some(plan, 1, numbers[: half + 1]))
    write_results(plan, 1, some(plan, 1, numbers[half:]))
    results, read, damaged = union(plan, 1)
    assert sorted(results) == numbers
    assert len(read) == 2
    assert damaged == []


def test_a_result_goes_before_an_error(plan: Plan) -> None:
    number = plan.shard(0)[0]
    good = some(plan, 0, [number])
    bad = {number: Result(number, good[number].key, {}, "out of memory", 0.1)}
    for order in ([good, bad], [bad, good]):
        for results in order:
            write_results(plan, 0, results)
        assert union(plan, 0)[0][number].error == ""
        for file in shard_files(plan)[0]:
            file.path.unlink()


@pytest.mark.parametrize("spoil", ["truncate", "empty", "flip", "identity", "version", "keys"])
def test_spoilt_files_count_as_absent(plan: Plan, spoil: str) -> None:
    numbers = list(plan.shard(0))
    results = some(plan, 0, numbers)
    if spoil == "keys":
        results = {n: Result(n, r.key + 1, r.values, "", 0.1) for n, r in results.items()}
    file = write_results(plan, 0, results)
    data = file.path.read_bytes()
    if spoil == "truncate":
        file.path.write_bytes(data[: len(data) // 2])
    elif spoil == "empty":
        file.path.write_bytes(b"")
    elif spoil == "flip":  # within the numbers, which carry a checksum
        at = data.index(np.array([r.values[COLUMN] for r in results.values()]).tobytes())
        file.path.write_bytes(data[:at] + bytes([data[at] ^ 1]) + data[at + 1 :])
    elif spoil in ("identity", "version"):
        with h5py.File(file.path, "r+") as opened:
            opened.attrs["identity" if spoil == "identity" else "driblet_sweep_shard"] = 99
    with pytest.raises(DamagedShardError):
        read_results(plan, file)
    assert union(plan, 0)[0] == {}
    assert len(union(plan, 0)[2]) == 1


@pytest.fixture(scope="module")
def swept(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("swept")
    make_plan(write_sweep(folder), folder / "sweep")
    work_locally(folder / "sweep", workers=1)
    collect(folder / "sweep", folder / "table")
    return folder


def test_both_tables_hold_the_same(swept: Path) -> None:
    one, other = read_table(swept / "table.csv"), read_table(swept / "table.h5")
    assert [(c.head, c.role) for c in one.columns] == [(c.head, c.role) for c in other.columns]
    for column in one.columns:
        np.testing.assert_array_equal(one.values[column.name], other.values[column.name])
    assert len(one.values["point"]) == POINTS


def test_the_csv_is_plain_to_pythons_own_reader(swept: Path) -> None:
    lines = (swept / "table.csv").read_text("utf-8").splitlines()
    body = [line for line in lines if not line.startswith("#")]
    rows = list(csv.DictReader(body))
    assert len(rows) == POINTS
    assert [float(r["species.A (copies)"]) for r in rows] == [10.0] * 4 + [20.0] * 4 + [40.0] * 4
    assert [float(r["reactions.turn.K"]) for r in rows] == [0.5, 1, 2, 4] * 3
    assert [float(r["species.B (copies)"]) for r in rows] == [5.0] * 4 + [10.0] * 4 + [20.0] * 4
    assert all(math.isfinite(float(r["A.mean (copies)"])) for r in rows)
    assert lines[0].startswith("# sweep: ")
    assert "# axes: species.A, reactions.turn.K" in lines


def test_the_hdf5_table_opens_in_xarray_with_units(swept: Path) -> None:
    with xarray.open_dataset(swept / "table.h5", engine="h5netcdf") as data:
        assert data["A.mean"].dims == ("point",)
        assert data["A.mean"].attrs["units"] == "copies"
        assert data["species.A"].attrs["role"] == "axis"
        assert data.sizes["point"] == POINTS
    with h5py.File(swept / "table.h5") as file:
        assert "A <=> B" in file["provenance/system_file"].asstr()[()]


def test_the_summary_is_what_numpy_makes_of_the_run(swept: Path) -> None:
    """Against the run file of one point, simulated again: means over the second half, the spread between replicates."""
    import driblet
    from driblet_analysis.sweep import collect_run

    assert collect_run(swept / "sweep", 9, swept / "nine.h5") is False
    table = read_table(swept / "table.h5")
    with driblet.Run(swept / "nine.h5") as run:
        assert len(run.replicate) == 5
        assert run.counts[:, 0, :].tolist() == [[40, 20]] * 5
        end = run.counts[:, -1, 1].astype(float)
        assert table.values["B.end_mean"][9] == end.mean()
        assert table.values["B.end_sd"][9] == end.std(ddof=1)
        assert table.values["part.end_q50"][9] == np.quantile(run.readout("part")[:, -1], 0.5)
        half = run.readout("part")[:, run.time_s >= run.time_s[-1] / 2]
        assert table.values["part.mean"][9] == pytest.approx(half.mean(axis=1).mean(), rel=1e-12)
        assert table.values["part.se"][9] == pytest.approx(half.mean(axis=1).std(ddof=1) / np.sqrt(5), rel=1e-12)
        assert table.values["part.sd_within"][9] == pytest.approx(np.sqrt(half.var(axis=1).mean()), rel=1e-12)


def test_status_and_collect_hold_little_in_memory(plan: Plan) -> None:
    """A shard at a time: what is held at once does not grow with the number of shards."""
    import tracemalloc

    for shard in range(plan.shards):
        write_results(plan, shard, some(plan, shard, list(plan.shard(shard))))
    peaks = []
    for directory in (plan.directory, _shortened(plan)):
        tracemalloc.start()
        read_status(directory)
        collect(directory, directory.with_suffix(".csv"), force=True)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    assert peaks[0] < 1.5 * peaks[1] + 100_000


def _shortened(plan: Plan) -> Path:
    """The same sweep with a few shards."""
    from dataclasses import replace

    from driblet_analysis.sweep.directory import read_values, write_plan

    values, hashes = read_values(plan)
    small = replace(plan, directory=plan.directory.with_name("small"), first=plan.first[:6])
    write_plan(small, values[: small.points], hashes[: small.points])
    for shard in range(small.shards):
        write_results(small, shard, some(small, shard, list(small.shard(shard))))
    return small.directory


def test_what_is_a_table(swept: Path, tmp_path: Path) -> None:
    assert is_table(swept / "table.h5")
    assert is_table(swept / "table.csv")
    assert not is_table(swept / "base.toml")
    assert not is_table(tmp_path / "absent.h5")
    assert not is_table(swept / "sweep" / "plan.h5")


def test_the_plan_reads_back_in_parts(plan: Plan) -> None:
    again = read_plan(plan.directory)
    assert again.points == 300
    assert [again.first[0], again.first[-1]] == [0, 300]
    point = again.read(range(101, 102))[0]
    assert point.number == 101
    assert point.changes == {"species.A": "20 copies", "reactions.turn.K": 1.01010101, "species.B": "10 copies"}
    assert again.system(point).species[1].copies == 10
