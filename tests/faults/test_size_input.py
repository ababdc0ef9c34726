"""What is wrong with a question to `driblet size` is told in one line each, exit status 2, and nothing is written."""

from __future__ import annotations

from pathlib import Path

import pytest

from driblet.commands.main import main
from driblet.errors import CannotAnswerError
from driblet_analysis.sizing import size
from driblet_analysis.sizing_question import read_question
from tests.size_texts import ONE_INSIDE
from tests.texts import changed


@pytest.fixture
def system(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    path = tmp_path / "one.toml"
    path.write_text(ONE_INSIDE, "utf-8")
    monkeypatch.chdir(tmp_path)
    return path


@pytest.mark.parametrize(
    ("path", "low", "high", "requirement", "said"),
    [
        ("species.X", "1 copies", "9 copies", "inside", "--vary species.X: is no key path of the system file"),
        ("species.E.loading", "1 copies", "9 copies", "inside", "'poisson' is no quantity"),
        ("reactions.turn.equation", "1 /s", "9 /s", "inside", "is no quantity"),
        ("conditions.temperature", "20 degC", "37 degC", "inside", "rate constants do not follow it: turn, loss"),
        ("run.seed", "1", "9", "inside", "shapes the question"),
        ("requirements.inside.share", "0.1", "0.9", "inside", "shapes the question"),
        ("species.E", "1 copies", "9 copies", "insid", "--requirement insid: is no requirement of this file"),
        ("species.E", "1 copies", "9 copies", "loose", "requirements.loose.share: states no share"),
        ("species.E", "1 copies", "9 copies", "surely", "no sample can show that"),
        ("species.E", "9 copies", "1 copies", "inside", '"9 copies" and "1 copies" are reversed'),
        ("species.E", "9 copies", "9 copies", "inside", "are the same value"),
        ("species.E", "1 copies", "9 mM", "inside", "are of different kinds"),
        ("species.E", "1 nm", "9 nm", "inside", "--between 1 nm: species.E.amount"),
        ("species.E", "-1 copies", "9 copies", "inside", "--between -1 copies: species.E"),
        ("species.E", "one", "9 copies", "inside", '--between: "one"'),
        ("species.E", "1,5 copies", "9 copies", "inside", "decimals take a point"),
    ],
)
def test_bad_questions(
    system: Path,
    capsys: pytest.CaptureFixture[str],
    path: str,
    low: str,
    high: str,
    requirement: str,
    said: str,
) -> None:
    status = main(["size", str(system), "--vary", path, "--between", low, high, "--requirement", requirement])
    error = capsys.readouterr().err
    assert status == 2, error
    assert said in error
    assert len(error.strip().splitlines()) <= 2
    assert [p.name for p in system.parent.iterdir()] == ["one.toml"]


def test_all_problems_at_once(system: Path, capsys: pytest.CaptureFixture[str]) -> None:
    asked = ["--vary", "species.X", "--between", "3 copies", "1 copies", "--requirement", "none"]
    assert main(["size", str(system), *asked]) == 2
    assert len(capsys.readouterr().err.strip().splitlines()) == 3


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (["--resume", "--force"], "give one of them"),
        (["--slurm", "--dask", "x"], "different ways"),
        (["--partition", "long", "--setup", "module load python"], "--partition, --setup: goes with --slurm"),
        (["--slurm", "--time", "1", "--memory", "2 GB"], '"1" is too short'),
        (["--slurm", "--time", "1", "--memory", "2 GB"], '"2 GB" will not do'),
        (["--within", "2"], "--within"),
        (["--budget", "3"], "--budget"),
        (["--between", "1 copies"], "--between"),
    ],
)
def test_bad_options(system: Path, capsys: pytest.CaptureFixture[str], options: list[str], said: str) -> None:
    asked = ["--vary", "species.E", "--requirement", "inside"]
    if "--between" not in options:
        asked += ["--between", "1 copies", "9 copies"]
    assert main(["size", str(system), *asked, *options]) == 2
    assert said in capsys.readouterr().err


def test_folders_that_are_taken(system: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    asked = [
        "size",
        str(system),
        "--vary",
        "species.E",
        "--between",
        "0.1 copies",
        "1 copies",
        "--requirement",
        "inside",
    ]
    other = tmp_path / "other"
    other.mkdir()
    (other / "mine.txt").write_text("mine", "utf-8")
    assert main([*asked, "-o", str(other)]) == 2
    assert "holds no sizing" in capsys.readouterr().err
    assert main([*asked, "-o", str(system)]) == 2
    assert "is a file" in capsys.readouterr().err
    assert main([*asked, "-o", "sized", "--threads", "1"]) == 1
    capsys.readouterr()
    assert main([*asked, "-o", "sized"]) == 2
    assert "holds a sizing already" in capsys.readouterr().err
    assert main([*asked, "-o", "sized", "--seed", "77", "--resume"]) == 2
    assert "another sizing" in capsys.readouterr().err
    assert main([*asked, "-o", "sized", "--seed", "77", "--force", "--threads", "1"]) == 1
    assert (other / "mine.txt").read_text("utf-8") == "mine"


def test_a_span_beyond_the_run_cannot_be_decided(system: Path, capsys: pytest.CaptureFixture[str]) -> None:
    system.write_text(changed(ONE_INSIDE, ("share = 0.95\n", 'share = 0.95\nduring = ["0 s", "5 s"]\n')), "utf-8")
    asked = ["--vary", "species.E", "--between", "1 copies", "9 copies", "--requirement", "inside"]
    assert main(["size", str(system), *asked]) == 2
    assert "beyond the run" in capsys.readouterr().err


def test_a_requirement_that_no_compartment_decides(system: Path, tmp_path: Path) -> None:
    import numpy as np

    asked = read_question(system, "species.E", "1 copies", "9 copies", "inside")

    def undecided(_question, batches, done) -> None:  # type: ignore[no-untyped-def]
        for batch in batches:
            done(batch, np.full(batch.replicates, -1, dtype=np.int8))

    with pytest.raises(CannotAnswerError, match="long enough to decide"):
        size(asked, tmp_path / "s", simulate=undecided)
