"""`driblet lifetime` and what `run` and `plot` say of requirements: output, figure, JSON, exit status."""

from __future__ import annotations

import json
from pathlib import Path

import h5py
import pytest

from driblet.commands.main import main

SYSTEM = """\
title = "Twelve copies that decay"

[conditions]
temperature = "25 degC"

[compartments.drop]
volume = "0.1 fL"

[species]
A = { amount = "12 copies", loading = "poisson" }
B = "3 copies"

[reactions.decay]
equation = "A -> nothing"
one_way = "leaves through a pore"
forward = "0.5 /s"

[reactions.turn]
equation = "nothing <=> B"
K = "5e-8 M"
forward = "5e-9 M/s"

[readouts]
per_copy = "B / A"

[requirements.alive]
must = "A > 0"
when = "throughout"
during = ["0 s", "4 s"]
share = SHARE

[requirements.rich]
must = "per_copy < 1"
when = "at end"

[requirements.much]
must = "conc(A) > 0.05 uM"
when = "on average"

[run]
replicates = 150
duration = "6 s"
sample_every = "0.5 s"
seed = 3
"""


@pytest.fixture(scope="module")
def runs(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    folder = tmp_path_factory.mktemp("lifetimes")
    files = {}
    for share in ("0.7", "0.999"):
        file = folder / f"s{share}.toml"
        file.write_text(SYSTEM.replace("SHARE", share))
        files[share] = folder / f"s{share}.h5"
        assert main(["run", str(file), "-o", str(files[share]), "--threads", "1"]) == 0
    return files


def test_exit_status_tells_whether_every_stated_share_is_reached(
    runs: dict[str, Path], capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["lifetime", str(runs["0.7"])]) == 0
    out = capsys.readouterr().out
    for words in (
        "reached",
        "every event",
        "all of them at once",
        "failed first in",
        "confirm by experiment",
        "A (copies)",
    ):
        assert words in out
    assert "inf" not in out
    assert "nan" not in out
    assert main(["lifetime", str(runs["0.999"])]) == 1
    assert "missed" in capsys.readouterr().out


def test_json(runs: dict[str, Path], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["lifetime", str(runs["0.999"]), "--json"]) == 1
    facts = json.loads(capsys.readouterr().out)
    assert facts["compartments"] == 150
    alive, rich, much = facts["requirements"]
    assert alive["name"] == "alive"
    assert alive["low"] <= alive["share"] <= alive["high"]
    assert alive["met"] is False
    assert alive["asked"] == 0.999
    assert alive["during_s"] == [0.0, 4.0]
    assert alive["failing"] == round(150 * (1 - alive["share"]))
    assert alive["in_common"][0]["quantity"] == "A"
    assert alive["in_common"][0]["effect"] < 0  # those that fail began with fewer copies
    assert len(alive["survival"]["time_s"]) == alive["failing"]
    assert rich["met"] is None
    assert rich["survival"] is None
    assert much["looked_at"] == "event"
    assert facts["reached"] is False


def test_the_run_file_keeps_outcomes_beside_the_trajectories(runs: dict[str, Path]) -> None:
    with h5py.File(runs["0.7"]) as file:
        met = file["requirements/met"]
        assert met.shape == (150, 3)
        assert file["requirements/first_failure_s"].attrs["units"] == "s"
        assert json.loads(file["provenance"].attrs["requirements_looked_at"]) == dict.fromkeys(
            ("alive", "rich", "much"), "event"
        )


def test_the_figure_is_written(runs: dict[str, Path], tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    figure = tmp_path / "life.svg"
    assert main(["lifetime", str(runs["0.7"]), "-o", str(figure)]) == 0
    drawn = figure.read_text()
    assert "<svg" in drawn
    assert str(figure) in capsys.readouterr().out.replace("\n", "")
    assert main(["lifetime", str(runs["0.7"]), "-o", str(tmp_path / "life.gif")]) == 2


def test_plot_draws_the_thresholds(runs: dict[str, Path], tmp_path: Path) -> None:
    from driblet.results import Run
    from driblet_analysis.figures import overview
    from driblet_analysis.thresholds import thresholds

    with Run(runs["0.7"]) as run:
        found = {(t.requirement, t.row, t.below): t.value for t in thresholds(run.system)}
        assert found[("alive", "A", False)] == 0.0
        assert found[("rich", "per_copy", True)] == 1.0
        assert found[("much", "A", False)] == pytest.approx(5e-8 * run.system.compartment.omega)
        texts = [t.get_text() for ax in overview(run).axes for t in ax.texts]
    assert any(t.startswith("alive: above") for t in texts)
    assert any(t.startswith("rich: below") for t in texts)


def test_run_prints_requirements_and_says_where_a_readout_is_undefined(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "a.toml"
    file.write_text(SYSTEM.replace("SHARE", "0.7"))
    assert main(["run", str(file), "-o", str(tmp_path / "a.h5"), "--replicates", "40", "--threads", "1"]) == 0
    out = capsys.readouterr().out
    assert "requirements, % of compartments that meet them" in out
    assert "per_copy: undefined in" in out
    assert "it divides by zero" in out


def test_stopping_early_ends_compartments_and_keeps_outcomes(
    runs: dict[str, Path], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "a.toml"
    kept = SYSTEM.replace("SHARE", "0.7").split("[requirements.rich]")[0] + "[run]" + SYSTEM.split("[run]")[1]
    file.write_text(kept)
    early, whole = tmp_path / "early.h5", tmp_path / "whole.h5"
    assert main(["run", str(file), "-o", str(early), "--threads", "1", "--stop-when-decided"]) == 0
    assert main(["run", str(file), "-o", str(whole), "--threads", "1"]) == 0
    capsys.readouterr()
    assert main(["show", str(early), "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert facts["ended"]["stop condition met, or every requirement decided"] > 0
    with h5py.File(early) as a, h5py.File(whole) as b:
        assert (a["requirements/met"][:] == b["requirements/met"][:]).all()
        assert a["events"][:].sum() < b["events"][:].sum()
    # another run than the whole one: it must not be taken for it
    assert main(["run", str(file), "-o", str(early), "--threads", "1", "--resume"]) == 2


def test_a_run_without_requirements_cannot_answer(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "plain.toml"
    file.write_text(SYSTEM.split("[requirements.alive]")[0] + "[run]" + SYSTEM.split("[run]")[1])
    run_file = tmp_path / "plain.h5"
    assert main(["run", str(file), "-o", str(run_file), "--replicates", "5", "--threads", "1"]) == 0
    capsys.readouterr()
    assert main(["lifetime", str(run_file)]) == 3
    assert "states no requirement" in capsys.readouterr().err
    assert main(["run", str(file), "-o", str(tmp_path / "x.h5"), "--stop-when-decided"]) == 2
    assert "there is no requirement to decide" in capsys.readouterr().err


def test_audit_tells_where_a_requirement_will_be_judged(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "a.toml"
    product = " * ".join(["A"] * 7)
    file.write_text(SYSTEM.replace("SHARE", "0.7").replace('"per_copy < 1"', f'"{product} > 5"'))
    assert main(["audit", str(file), "--json"]) == 0
    alive, rich, _ = json.loads(capsys.readouterr().out)["requirements"]
    assert (alive["looked_at"], alive["reason"]) == ("event", None)
    assert rich["looked_at"] == "grid"
    assert "more than 6 counts" in rich["reason"]
    assert main(["audit", str(file)]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "requirement alive: A > 0, throughout, in 70 % of compartments; judged after every event" in out
    assert "judged on samples only (more than 6 counts multiply)" in out


def test_check_does_not_judge_compartments_that_stopped_early(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file, run_file = tmp_path / "a.toml", tmp_path / "a.h5"
    text = SYSTEM.replace("SHARE", "0.7")
    file.write_text(text.split("[requirements.rich]")[0] + "[run]" + text.split("[run]")[1])
    assert main(["run", str(file), "-o", str(run_file), "--stop-when-decided", "--threads", "1"]) == 0
    capsys.readouterr()
    assert main(["check", str(run_file)]) == 3
    assert "without --stop-when-decided" in " ".join(capsys.readouterr().out.split())


def test_the_starter_holds_a_requirement_to_uncomment(tmp_path: Path) -> None:
    import driblet
    from driblet.commands.new import STARTER

    lines = STARTER.split("\n")
    start = lines.index(next(line for line in lines if line.startswith("# [requirements")))
    lines[start : start + 4] = [line.removeprefix("# ") for line in lines[start : start + 4]]
    (requirement,) = driblet.loads("\n".join(lines)).requirements
    assert (requirement.name, requirement.share) == ("enough", 0.95)


def test_from_python(runs: dict[str, Path]) -> None:
    xarray = pytest.importorskip("xarray")
    from driblet.results import Run

    with Run(runs["0.7"]) as run:
        data = run.to_xarray()
        assert list(data["requirement"].values) == ["alive", "rich", "much"]
        assert data["requirement_met"].dims == ("replicate", "requirement")
        assert data["requirement_first_failure_s"].attrs["units"] == "s"
        assert run.readout("A_per_B").shape == run.readout("per_copy").shape
        with pytest.raises(KeyError):
            run.readout("energy_charge")
    with xarray.open_dataset(runs["0.7"], engine="h5netcdf") as opened:
        assert "counts" in opened
    with xarray.open_dataset(runs["0.7"], engine="h5netcdf", group="requirements", phony_dims="sort") as opened:
        assert opened["met"].shape == (150, 3)


def test_where_few_fail_there_is_no_table_of_times(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Copies only leave, so whoever has more than 20 has them at the start: a Poisson number of mean 12 does in 1.2 %."""
    file, run = tmp_path / "s.toml", tmp_path / "s.h5"
    file.write_text(SYSTEM.replace("SHARE", "0.5").replace('must = "A > 0"', 'must = "A <= 20"'))
    assert main(["run", str(file), "-o", str(run), "--threads", "1", "--replicates", "600"]) == 0
    capsys.readouterr()
    assert main(["lifetime", str(run)]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "alive: fewer than 5 % of compartments failed in its span" in out
    assert "alive: time by which" not in out
