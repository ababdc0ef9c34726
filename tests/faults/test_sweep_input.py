"""Every fault a sweep can have: one clear line each, exit status 2, and nothing lost or half-written."""

from __future__ import annotations

from pathlib import Path

import h5py
import pytest

from driblet.commands.main import main
from driblet_analysis.sweep import make_plan, read_plan
from tests.sweep_texts import SWEEP, write_sweep
from tests.texts import SMALL

AXIS = '"species.A" = ["10 copies", "20 copies", "40 copies"]'
K = '"reactions.turn.K" = [0.5, 1, 2, 4]'
DERIVED = '"species.B" = "0.5 * species.A"'

# what is replaced, by what, pieces of the one line
FAULTS: list[tuple[str, str, tuple[str, ...]]] = [
    ('system = "base.toml"', "", ("sweep.toml: system: is missing",)),
    ('system = "base.toml"', 'system = "absent.toml"', ("absent.toml: cannot be read",)),
    ('system = "base.toml"', "system = 3", ("sweep.toml: system: is missing",)),
    ("replicates = 5", "replicates = 0", ("run.replicates: 0 will not do",)),
    ("replicates = 5", "replicas = 5", ('replicas: "replicas" is not a key here; did you mean "replicates"?',)),
    ("replicates = 5", 'combine = "product"', ('combine: "product" is not known: "crossed", "zipped" or "sobol"',)),
    ("replicates = 5", "points = 9", ('points: goes with combine = "sobol"',)),
    ("replicates = 5", 'combine = "sobol"', ("points: a whole number from 1",)),
    (
        "replicates = 5",
        'combine = "zipped"',
        ("axes: zipped axes need the same number of values: species.A 3, reactions",),
    ),
    ("replicates = 5", 'keep = "everything"', ('keep: "everything" is not known: "summary" or "trajectories"',)),
    ("replicates = 5", "shared_streams = 1", ("shared_streams: 1 will not do: true or false",)),
    ("replicates = 5", 'points_from = "points.csv"', ("axes: does not go with points_from",)),
    ("replicates = 5", "title = 3", ("title: a text in quotes",)),
    (
        AXIS,
        '"conditions.temperature" = ["20 degC", "37 degC"]',
        ('axes."conditions.temperature": moves the equilibrium constants and not the rate constants',),
    ),
    (
        AXIS,
        '"species.C" = ["1 mM"]',
        ('axes."species.C": is no key path of the system file; the nearest are species.',),
    ),
    (AXIS, '"specie.A" = ["1 mM"]', ('axes."specie.A": is no key path', "species.A")),
    (
        AXIS,
        '"run.duraton" = ["1 s"]\n"species.A" = ["2 copies"]',
        ('"duraton" is not a key here; did you mean "duration"?',),
    ),
    (AXIS, '"species.A" = ["10 s", "20 s"]', ('axes."species.A": "10 s" is no amount',)),
    (
        AXIS,
        '"species.A" = ["10 copies", "20 s"]',
        ('axes."species.A": "20 s" is no amount', "in point 4 (species.A = 20 s, reactions.turn.K = 0.5) and 3 more"),
    ),
    (AXIS, '"species.A" = ["10 copies", "1 uM"]', ('axes."species.A": mixes values in "copies" and values in "uM"',)),
    (AXIS, '"species.A" = ["10 copies", "10 copies"]', ("axes: points 0 and 4 are the same", "3 more such pairs")),
    (AXIS, '"species.A" = ["-10 copies"]', ("an amount cannot be",)),
    (AXIS, '"species.A" = [10]', ("a bare number 10 has no unit",)),
    (AXIS, '"species.A" = []', ('axes."species.A": is empty',)),
    (AXIS, '"species.A" = { from = "1 mM", to = "2 mM" }', ('axes."species.A": needs points',)),
    (AXIS, '"species.A" = { from = "1 mM", to = "2 nm", points = 3 }', ("are of different kinds",)),
    (
        AXIS,
        '"species.A" = ["15 copies"]',
        ('derived."species.B": "7.5 copies" is fractional', "in point 0 (species.A = 15 copies"),
    ),
    (AXIS, '"run.replicates" = [3, 4]\n"species.A" = ["2 copies"]', ("replicates: is an axis too (run.replicates)",)),
    (AXIS, '"species.A" = { from = "1 copies", to = "2e6 copies", points = 300000 }', ("at most 1000000 are planned",)),
    (K, '"reactions.turn.K" = [0.5, -1]', ('axes."reactions.turn.K"', "above zero")),
    (DERIVED, '"species.A" = "2 * species.A"', ('derived."species.A": is an axis too',)),
    (DERIVED, '"species.B" = "0.5 * species.Z"', ('derived."species.B"', "is no key path")),
    (DERIVED, '"species.Z" = "0.5 * species.A"', ('derived."species.Z": is no key path',)),
    (DERIVED, '"species.B" = "species.A + 1 nm"', ("adds or subtracts quantities of different units",)),
    (DERIVED, '"species.B" = "2 ^ species.A"', ("outside the grammar",)),
    (DERIVED, '"species.B" = 3', ("a formula in quotes is needed",)),
    (DERIVED, '"species.B" = "run.duration"', ('derived."species.B": "2 s" is no amount',)),
]


def one_line(capsys: pytest.CaptureFixture[str]) -> str:
    lines = capsys.readouterr().err.splitlines()
    assert len(lines) == 1, lines
    return lines[0]


@pytest.mark.parametrize(("old", "new", "pieces"), FAULTS)
def test_a_fault_of_the_sweep_file(
    old: str, new: str, pieces: tuple[str, ...], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert SWEEP.count(old) == 1
    path = write_sweep(tmp_path, SWEEP.replace(old, new))
    before = sorted(p.name for p in tmp_path.iterdir())
    assert main(["sweep", "plan", str(path), "-o", str(tmp_path / "sweep")]) == 2
    line = one_line(capsys)
    for piece in pieces:
        assert piece in line
    assert sorted(p.name for p in tmp_path.iterdir()) == before


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("", "is empty"),
        ("axes = [", "is not valid TOML"),
        (SMALL, "is a system file; a sweep file names it"),
        ('system = "base.toml"', "axes: is missing"),
        ('system = "base.toml"\naxes = 3', "axes: is missing"),
        ('system = "base.toml"\nderived = 3\n[axes]\n"species.A" = ["1 mM"]', "derived: a table of formulas"),
    ],
)
def test_files_that_are_no_sweep(text: str, complaint: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = write_sweep(tmp_path, text)
    assert main(["sweep", "plan", str(path), "-o", str(tmp_path / "sweep")]) == 2
    assert complaint in one_line(capsys)
    assert not (tmp_path / "sweep").exists()


def test_all_faults_of_a_file_are_told_at_once(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = (
        SWEEP.replace(AXIS, '"species.C" = ["1 mM"]').replace(DERIVED, '"species.Z" = "1 +"').replace("replicates", "x")
    )
    assert main(["sweep", "plan", str(write_sweep(tmp_path, text)), "-o", str(tmp_path / "sweep")]) == 2
    error = capsys.readouterr().err
    assert error.count("\n") == 3
    for piece in ('"x" is not a key', 'axes."species.C"', 'derived."species.Z"'):
        assert piece in error


@pytest.mark.parametrize(
    ("csv", "complaint"),
    [
        ("", "holds no points"),
        ("species.A\n", "holds no points"),
        ("species.A (copies),reactions.turn.K\n10\n", "line 2: has 1 cells where 2 are needed"),
        ("species.A (copies),species.A\n10,11 copies\n", "species.A is given in two columns"),
        ("species.A (copies)\n10\n1e1\n", "points 0 and 1 are the same"),
        ("species.A (copies)\n10\nten\n", 'line 3: "ten" is not a number'),
        ("species.A\n10 copies\n\n20 copies,1\n", "line 4: has 2 cells"),
        ("species.A,run.seed\n10 copies,\n", "line 2: an empty cell"),
        ("species.Q (copies)\n10\n", 'points_from."species.Q": is no key path'),
        ("species.A (s)\n10\n", 'points_from."species.A": "10 s" is no amount'),
        ("(mM)\n10\n", "is not a key path"),
    ],
)
def test_points_that_cannot_be_read(
    csv: str, complaint: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = write_sweep(tmp_path, 'system = "base.toml"\npoints_from = "points.csv"\n')
    (tmp_path / "points.csv").write_text(csv)
    assert main(["sweep", "plan", str(path), "-o", str(tmp_path / "sweep")]) == 2
    assert complaint in one_line(capsys)
    assert not (tmp_path / "sweep").exists()


def test_a_points_file_that_is_absent(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = write_sweep(tmp_path, 'system = "base.toml"\npoints_from = "points.csv"\n')
    assert main(["sweep", "plan", str(path), "-o", str(tmp_path / "sweep")]) == 2
    assert "points.csv: cannot be read: no such file" in one_line(capsys)


@pytest.fixture
def planned(tmp_path: Path) -> Path:
    make_plan(write_sweep(tmp_path), tmp_path / "sweep")
    return tmp_path / "sweep"


def test_a_directory_that_is_taken(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = write_sweep(tmp_path)
    for name, complaint in (("base.toml", "is a file"), (".", "is not empty"), ("no/where", "does not exist")):
        assert main(["sweep", "plan", str(path), "-o", str(tmp_path / name)]) == 2
        assert complaint in one_line(capsys)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["base.toml", "sweep.toml"]


@pytest.mark.parametrize(
    "command", [["work"], ["status"], ["collect", "-o", "t.csv"], ["work", "--slurm"], ["work", "--dask", "x:1"]]
)
def test_directories_that_hold_no_sweep(
    command: list[str], tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "empty").mkdir()
    (tmp_path / "other").mkdir()
    (tmp_path / "other" / "plan.h5").write_bytes(b"not HDF5")
    (tmp_path / "hdf").mkdir()
    with h5py.File(tmp_path / "hdf" / "plan.h5", "w") as file:
        file["x"] = 1
    name, *options = command
    for where, complaint in (
        ("absent", "absent: does not exist"),
        ("empty", "empty: holds no sweep"),
        ("other", "cannot be read"),
        ("hdf", "is HDF5 but no plan"),
    ):
        assert main(["sweep", name, where, *options]) == 2
        assert complaint in one_line(capsys)
    assert not (tmp_path / "t.csv").exists()


@pytest.mark.parametrize("name", ["driblet_sweep", "driblet_version"])
def test_a_directory_of_another_version(name: str, planned: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with h5py.File(planned / "plan.h5", "r+") as file:
        file.attrs[name] = 99 if name == "driblet_sweep" else "99.0"
    assert main(["sweep", "work", str(planned)]) == 2
    assert "version 99" in one_line(capsys) or name == "driblet_version"
    assert not (planned / "shards").exists()


def test_shards_of_another_sweep_are_set_aside(planned: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["sweep", "work", str(planned), "--workers", "1"]) == 0
    victim = sorted((planned / "shards").iterdir())[3]
    with h5py.File(victim, "r+") as file:
        file.attrs["identity"] = "of another"
    capsys.readouterr()
    assert main(["sweep", "status", str(planned)]) == 0
    assert "belongs to another sweep or version" in capsys.readouterr().out
    assert main(["sweep", "work", str(planned), "--workers", "1"]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "set aside, its points are done again" in out
    assert "1 points written" in out
    assert victim.with_suffix(".damaged").exists()


def test_a_plan_that_changed_after_work_began(planned: Path, capsys: pytest.CaptureFixture[str]) -> None:
    sweep = planned.parent / "sweep.toml"
    assert main(["sweep", "plan", str(sweep), "-o", str(planned)]) == 0
    assert "nothing changed" in capsys.readouterr().out
    assert main(["sweep", "work", str(planned), "--workers", "1"]) == 0
    assert main(["sweep", "plan", str(sweep), "-o", str(planned)]) == 0
    capsys.readouterr()
    before = (planned / "plan.h5").read_bytes()
    sweep.write_text(SWEEP.replace("4]", "4, 8]"))
    assert main(["sweep", "plan", str(sweep), "-o", str(planned)]) == 2
    assert "work has begun on another plan here; `driblet sweep extend` adds points" in one_line(capsys)
    assert (planned / "plan.h5").read_bytes() == before


def test_a_plan_may_change_before_work_begins(planned: Path) -> None:
    sweep = planned.parent / "sweep.toml"
    sweep.write_text(SWEEP.replace("4]", "4, 8]"))
    assert main(["sweep", "plan", str(sweep), "-o", str(planned)]) == 0
    assert read_plan(planned).points == 15


@pytest.mark.parametrize(
    ("old", "new", "complaint"),
    [
        ("replicates = 5", "replicates = 6", "replicates or seed differ"),
        ("replicates = 5", "replicates = 5\nseed = 9", "replicates or seed differ"),
        ("replicates = 5", 'replicates = 5\nkeep = "trajectories"', "keep or shared_streams differ"),
        (K, '"run.seed" = [1, 2]', "its axes are species.A, run.seed, those there are species.A, reactions.turn.K"),
        (DERIVED, '"species.B" = "0.1 * species.A"', "its [derived] values differ"),
        (AXIS, '"species.A" = ["2 mM"]', 'mixes values in "copies" and values in "mM"'),
    ],
)
def test_extending_by_another_sweep(
    old: str, new: str, complaint: str, planned: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    before = (planned / "plan.h5").read_bytes()
    other = write_sweep(planned.parent / "other", SWEEP.replace(old, new))
    assert main(["sweep", "extend", str(planned), str(other)]) == 2
    assert complaint in one_line(capsys)
    assert (planned / "plan.h5").read_bytes() == before


@pytest.mark.parametrize("part", ["5/4", "0/4", "4", "a/b", "1/0", "-1/3", "1/2/3", "1.0/2", ""])
def test_parts_that_are_none(part: str, planned: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["sweep", "work", str(planned), "--part", part]) == 2
    assert f'--part: "{part}" is no part: write K/N' in one_line(capsys)


def test_ways_of_working_that_do_not_go_together(planned: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for options, complaint in (
        (["--slurm", "--dask", "x"], "--slurm and --dask are different ways"),
        (["--slurm", "--part", "1/2"], "different ways"),
        (["--memory", "2G"], "--memory: goes with --slurm"),
        (["--workers", "2", "--dask", "x"], "--workers counts processes here"),
        (["--workers", "0"], "--workers"),
        (["--throttle", "0", "--slurm"], "--throttle"),
    ):
        assert main(["sweep", "work", str(planned), *options]) == 2
        assert complaint in one_line(capsys)


def test_slurm_is_absent(planned: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("PATH", str(planned))
    assert main(["sweep", "work", str(planned), "--slurm"]) == 2
    assert "sbatch is not on this machine" in one_line(capsys)


SBATCH = """#!/bin/sh
echo "sbatch: error: invalid partition specified: nowhere" >&2
echo "sbatch: error: Batch job submission failed: Invalid partition name specified" >&2
exit 1
"""


def fake(folder: Path, monkeypatch: pytest.MonkeyPatch, **programs: str) -> None:
    """Programs that stand in for Slurm's clients, first on the path."""
    folder.mkdir()
    for name, text in programs.items():
        (folder / name).write_text(text)
        (folder / name).chmod(0o755)
    monkeypatch.setenv("PATH", f"{folder}:/usr/bin:/bin")


def test_slurm_refuses(
    planned: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    fake(tmp_path / "bin", monkeypatch, sbatch=SBATCH, scontrol="#!/bin/sh\nexit 1\n")
    assert main(["sweep", "work", str(planned), "--slurm", "--partition", "nowhere"]) == 2
    line = one_line(capsys)
    assert "Slurm refuses: invalid partition specified: nowhere" in line
    assert (planned / "slurm" / "sweep-001.sh").exists()  # to be read and submitted by hand
    assert not (planned / "slurm" / "jobs.json").exists()


def test_slurm_does_not_answer(
    planned: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    from driblet_analysis.sweep import slurm

    monkeypatch.setattr(slurm, "_TIMEOUT_SECONDS", 0.2)
    fake(tmp_path / "bin", monkeypatch, sbatch="#!/bin/sh\nsleep 5\n", scontrol="#!/bin/sh\nexit 1\n")
    assert main(["sweep", "work", str(planned), "--slurm"]) == 2
    assert "sbatch did not answer within 0.2 s" in one_line(capsys)


@pytest.mark.parametrize(
    ("option", "value", "complaint"),
    [
        ("--time", "1", "is too short"),
        ("--time", "3:59", "is too short"),
        ("--partition", "a b", "will not do"),
        ("--memory", "2G\n#SBATCH --uid=0", "will not do"),
    ],
)
def test_slurm_options_that_cannot_be(
    option: str, value: str, complaint: str, planned: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["sweep", "work", str(planned), "--slurm", option, value]) == 2
    assert complaint in one_line(capsys)
    assert not (planned / "slurm").exists()


def test_dask_is_absent(planned: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    import sys

    monkeypatch.setitem(sys.modules, "distributed", None)
    assert main(["sweep", "work", str(planned), "--dask", "tcp://127.0.0.1:9"]) == 2
    assert 'needs dask: pip install "driblet[dask]"' in one_line(capsys)


def test_no_scheduler_answers(
    planned: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    pytest.importorskip("distributed", reason='needs dask: pip install "driblet[dask]"')
    from driblet_analysis.sweep import dask_cluster

    monkeypatch.setattr(dask_cluster, "_CONNECT_SECONDS", 2)
    (planned / "no.json").write_text('{"addresses": []}', "utf-8")
    for address, complaint in (
        ("tcp://127.0.0.1:9", "no Dask scheduler answers"),
        ("127.0.0.1:9", "no Dask scheduler answers"),
        ("nonsense", "no address such as tcp://"),
        ("nothere.json", "is no scheduler file that is here"),
        (str(planned / "plan.h5"), "it names no address"),
        (str(planned / "no.json"), "it names no address"),
    ):
        assert main(["sweep", "work", str(planned), "--dask", address]) == 2
        assert complaint in one_line(capsys)


def test_tables_that_cannot_be_written(planned: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["sweep", "work", str(planned), "--workers", "1"]) == 0
    taken = planned.parent / "taken.csv"
    taken.write_text("mine")
    capsys.readouterr()
    for output, complaint in (
        (str(taken), "exists already; --force replaces it"),
        ("table.xlsx", "ends in .csv or .h5"),
        (str(planned.parent / "no" / "t.csv"), "does not exist"),
    ):
        assert main(["sweep", "collect", str(planned), "-o", output]) == 2
        assert complaint in one_line(capsys)
    assert taken.read_text() == "mine"
    assert main(["sweep", "collect", str(planned), "-o", str(taken), "--force"]) == 0
    capsys.readouterr()
    assert main(["sweep", "collect", str(planned), "-o", "x.h5", "--point", "12"]) == 2
    assert "there is no point 12; points go from 0 to 11" in one_line(capsys)


def test_tables_that_cannot_be_drawn(planned: Path, capsys: pytest.CaptureFixture[str]) -> None:
    table, figure = planned.parent / "t.h5", str(planned.parent / "f.png")
    assert main(["sweep", "collect", str(planned), "-o", str(table)]) == 0
    capsys.readouterr()
    assert main(["plot", str(table), "-o", figure]) == 2
    assert "t.h5: " in one_line(capsys)
    assert main(["sweep", "work", str(planned), "--workers", "1"]) == 0
    assert main(["sweep", "collect", str(planned), "-o", str(table), "--force"]) == 0
    capsys.readouterr()
    for options, complaint in (
        (["--show", "C"], '"C" is nothing this table holds'),
        (["--along", "run.seed"], "is no axis that varies here"),
        (["--by", "run.seed"], "is no axis that varies here"),
        (["--at", "species.A"], "is not KEY=VALUE"),
        (["--at", "species.Z=3"], "is no axis of this sweep"),
        (["--at", "species.A=3"], "no point has species.A = 3"),
        (["--at", "species.A=3 nm"], "does not fit species.A (copies)"),
        (["--along", "species.A", "--by", "species.A"], "is the axis of --along already"),
        (["--at", "species.A=10", "--at", "reactions.turn.K=1"], "nothing varies"),
    ):
        assert main(["plot", str(table), "-o", figure, *options]) == 2
        assert complaint in one_line(capsys)
    assert not Path(figure).exists()
    damaged = planned.parent / "d.h5"
    damaged.write_bytes(table.read_bytes()[:3000])
    assert main(["plot", str(damaged), "-o", figure]) == 2
    one_line(capsys)
    (planned.parent / "d.csv").write_text("point,A\n0\n")
    assert main(["plot", str(planned.parent / "d.csv"), "-o", figure]) == 2
    assert "is no table of a sweep" in one_line(capsys)
