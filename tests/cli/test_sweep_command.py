"""`driblet sweep` from plan to table and figure, and the same bits whichever way points are worked on."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

import driblet
from driblet.commands.main import main
from driblet_analysis.sweep import collect, extend_plan, make_plan, read_plan, read_table, work_locally
from tests.sweep_texts import POINTS, SWEEP, write_sweep
from tests.texts import SMALL, changed


def results(directory: Path) -> dict[tuple[float, ...], tuple[float, ...]]:
    """What was found at each point, by the values of its axes."""
    collect(directory, directory.parent / "t.h5", force=True)
    table = read_table(directory.parent / "t.h5")
    axes = [table.values[c.name] for c in table.columns if c.role == "axis"]
    found = [table.values[c.name] for c in table.columns if c.role == "result" and c.kind != "text"]
    return dict(zip(zip(*axes, strict=True), zip(*found, strict=True), strict=True))


def same(one: dict, other: dict) -> bool:
    """Equal to the bit, NaN like NaN."""
    return one.keys() == other.keys() and all(
        np.array_equal(np.array(one[k]), np.array(other[k]), equal_nan=True) for k in one
    )


@pytest.fixture(scope="module")
def swept(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("swept")
    make_plan(write_sweep(folder), folder / "sweep")
    work_locally(folder / "sweep", workers=1)
    return folder / "sweep"


def test_from_plan_to_figure(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    directory, table = str(tmp_path / "sweep"), str(tmp_path / "table")
    assert main(["sweep", "plan", str(write_sweep(tmp_path)), "-o", directory]) == 0
    out = " ".join(capsys.readouterr().out.split())
    for piece in (
        "12 points of 5 compartments",
        "reaction events",
        "on one core",
        "of disk",
        "species.B derived copies",
    ):
        assert piece in out
    assert main(["sweep", "status", directory, "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert (facts["points"], facts["done"], facts["left"]) == (POINTS, 0, POINTS)
    assert main(["sweep", "work", directory, "--workers", "1"]) == 0
    assert "12 points written" in capsys.readouterr().out
    assert main(["sweep", "status", directory, "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert (facts["done"], facts["failed"], facts["left"], facts["workers"]) == (POINTS, 0, 0, 0)
    assert facts["seconds_per_point"] > 0
    assert main(["sweep", "collect", directory, "-o", table]) == 0
    assert "written: " in capsys.readouterr().out
    for ending in ("h5", "csv"):
        assert main(["plot", f"{table}.{ending}", "-o", str(tmp_path / f"{ending}.png")]) == 0
        assert (tmp_path / f"{ending}.png").stat().st_size > 5000


def test_parts_make_up_the_whole(swept: Path, tmp_path: Path) -> None:
    make_plan(swept.parent / "sweep.toml", tmp_path / "sweep")
    written = [work_locally(tmp_path / "sweep", workers=1, part=(k, 5)).written for k in range(1, 6)]
    assert sum(written) == POINTS
    assert min(written) >= 2
    assert same(results(tmp_path / "sweep"), results(swept))
    assert work_locally(tmp_path / "sweep", part=(40, 40)).written == 0


def test_processes_give_the_same_bits(swept: Path, tmp_path: Path) -> None:
    make_plan(swept.parent / "sweep.toml", tmp_path / "sweep")
    assert work_locally(tmp_path / "sweep", workers=2).written == POINTS
    assert same(results(tmp_path / "sweep"), results(swept))


def test_adding_points_changes_no_other(swept: Path, tmp_path: Path) -> None:
    few, many = SWEEP.replace("[0.5, 1, 2, 4]", "[2]"), SWEEP
    make_plan(write_sweep(tmp_path / "few", few), tmp_path / "sweep")
    assert work_locally(tmp_path / "sweep", workers=1).written == 3
    before = results(tmp_path / "sweep")
    report = extend_plan(tmp_path / "sweep", write_sweep(tmp_path / "many", many))
    assert report.added == 9
    assert extend_plan(tmp_path / "sweep", tmp_path / "many" / "sweep.toml").added == 0
    assert work_locally(tmp_path / "sweep", workers=1).written == 9
    after = results(tmp_path / "sweep")
    assert all(np.array_equal(before[k], after[k], equal_nan=True) for k in before)
    assert same(after, results(swept))


def test_how_a_value_is_written_and_the_order_of_axes_change_nothing(swept: Path, tmp_path: Path) -> None:
    text = """
system = "base.toml"
replicates = 5
[axes]
"reactions.turn.K" = ["4", 2.0, "1", "0.5"]
"species.A" = ["1e1 copies", "20 copies", "40.0 copies"]
[derived]
"species.B" = "species.A / 2"
"""
    make_plan(write_sweep(tmp_path, text), tmp_path / "sweep")
    work_locally(tmp_path / "sweep", workers=1)
    found = {(a, k): v for (k, a), v in results(tmp_path / "sweep").items()}
    assert same(found, results(swept))


def test_a_point_is_what_run_makes_of_its_system(swept: Path) -> None:
    """By the public function alone: the system of the point and the key of its values."""
    plan = read_plan(swept)
    point = plan.read(range(7, 8))[0]
    again = driblet.run(driblet.loads(plan.system(point).text), key=point.key)
    found = results(swept)[(20.0, 4.0)]
    collect(swept, swept.parent / "t.h5", force=True)
    names = [c.name for c in read_table(swept.parent / "t.h5").columns if c.role == "result" and c.kind != "text"]
    assert found[names.index("A.end_mean")] == again.final_counts()[:, 0].mean()
    other = driblet.run(plan.system(point), key=point.key ^ 2)
    assert not np.array_equal(other.counts, again.counts)


def test_shared_streams_pair_points(tmp_path: Path) -> None:
    """With common random numbers two points that differ in nothing that matters give the same numbers."""
    text = """
system = "base.toml"
replicates = 40
[axes]
"conditions.pH" = [7.0, 7.5]
"""
    base = changed(SMALL, ('temperature = "25 degC"', 'temperature = "25 degC"\npH = 7.0'))
    for name, more in (("own", ""), ("shared", "shared_streams = true\n")):
        make_plan(write_sweep(tmp_path / name, more + text, base), tmp_path / name / "sweep")
        work_locally(tmp_path / name / "sweep", workers=1)
    one, other = results(tmp_path / "shared" / "sweep").values()
    assert np.array_equal(one, other, equal_nan=True)
    one, other = results(tmp_path / "own" / "sweep").values()
    assert not np.array_equal(one, other, equal_nan=True)
    plain = driblet.run(driblet.loads(base), replicates=40)
    collect(tmp_path / "shared" / "sweep", tmp_path / "shared.h5")
    assert read_table(tmp_path / "shared.h5").values["A.end_mean"][0] == plain.final_counts()[:, 0].mean()


def test_points_from_a_file_zipped_and_sobol(tmp_path: Path) -> None:
    head = 'system = "base.toml"\n'
    (tmp_path / "points.csv").write_text("species.A (copies),reactions.turn.K\n10,0.5\n20,2\n")
    zipped = 'combine = "zipped"\n[axes]\n"species.A" = ["10 copies", "20 copies"]\n"reactions.turn.K" = [0.5, 2]\n'
    found = []
    for name, text in (("file", 'points_from = "points.csv"\n'), ("zipped", zipped)):
        plan = make_plan(write_sweep(tmp_path, head + text), tmp_path / name).plan
        found.append([tuple(map(str, p.changes.values())) for p in plan.read(range(plan.points))])
        assert work_locally(tmp_path / name, workers=1).written == 2
    assert found == [[("10 copies", "0.5"), ("20 copies", "2")]] * 2
    assert same(results(tmp_path / "file"), results(tmp_path / "zipped"))
    span = '"run.duration" = { from = "1 s", to = "100 s", spacing = "log" }\n"species.A" = ["1 copies", "2 copies"]\n'
    for points in (8, 16):
        text = f'{head}combine = "sobol"\npoints = {points}\n[axes]\n{span}'
        if points == 8:
            plan = make_plan(write_sweep(tmp_path, text), tmp_path / "sobol").plan
            first = [p.changes for p in plan.read(range(8))]
        else:
            assert extend_plan(tmp_path / "sobol", write_sweep(tmp_path, text)).added == 8
    plan = read_plan(tmp_path / "sobol")
    assert plan.points == 16
    assert [p.changes for p in plan.read(range(8))] == first
    assert {p.changes["species.A"] for p in plan.read(range(16))} == {"1 copies", "2 copies"}


def test_trajectories_are_kept_and_come_out_as_run_files(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = SWEEP.replace("replicates = 5", 'replicates = 5\nkeep = "trajectories"')
    directory = tmp_path / "sweep"
    make_plan(write_sweep(tmp_path, text), directory)
    work_locally(directory, workers=1)
    assert main(["sweep", "collect", str(directory), "--point", "6", "-o", str(tmp_path / "six.h5")]) == 0
    assert "point 6, as kept" in capsys.readouterr().out
    make_plan(write_sweep(tmp_path / "plain"), tmp_path / "plain" / "sweep")
    assert (
        main(["sweep", "collect", str(tmp_path / "plain" / "sweep"), "--point", "6", "-o", str(tmp_path / "again.h5")])
        == 0
    )
    assert "simulated again" in capsys.readouterr().out
    with driblet.Run(tmp_path / "six.h5") as kept, driblet.Run(tmp_path / "again.h5") as again:
        assert np.array_equal(kept.counts, again.counts)
        assert kept.system.species[0].copies == 20
        assert kept.system.reactions[0].dG0_kJ_per_mol == again.system.reactions[0].dG0_kJ_per_mol
    assert main(["show", str(tmp_path / "six.h5")]) == 0


def test_a_system_without_a_title_has_the_name_of_its_file(tmp_path: Path) -> None:
    base = SMALL.replace('title = "small"\n', "")
    plan = make_plan(write_sweep(tmp_path, SWEEP, base), tmp_path / "sweep").plan
    assert plan.system(plan.read(range(1))[0]).title == "base"
    assert work_locally(tmp_path / "sweep", workers=1, part=(1, 6)).failed == 0


def test_a_long_plan_is_cut_into_few_files(tmp_path: Path) -> None:
    text = 'system = "base.toml"\n[axes]\n"run.seed" = { from = 1, to = 3000, points = 3000 }\n'
    plan = make_plan(write_sweep(tmp_path, text), tmp_path / "sweep").plan
    assert plan.points == 3000
    assert plan.shards <= 1000
    assert sorted(n for s in range(plan.shards) for n in plan.shard(s)) == list(range(3000))


def test_help_and_unknown_subcommands(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["sweep", "--help"]) == 0
    out = capsys.readouterr().out
    for name in ("plan", "work", "status", "extend", "collect"):
        assert name in out
    assert main(["sweep", "wrok", "x"]) == 2
    assert "No such command" in capsys.readouterr().err
