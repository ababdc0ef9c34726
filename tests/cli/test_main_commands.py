"""The commands as a user types them: what they print, what they write, how they end."""

import json
from pathlib import Path

import h5py
import numpy as np
import pytest

from driblet.commands.main import main

CONFIGS = Path(__file__).parents[2] / "configs"
SYSTEM = CONFIGS / "six_and_six.toml"


@pytest.fixture(scope="module")
def run_file(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("runs") / "six.h5"
    assert main(["run", str(SYSTEM), "-o", str(path), "--replicates", "120", "--threads", "1"]) == 0
    return path


def facts(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, dict]:
    status = main([str(w) for w in words])
    return status, json.loads(capsys.readouterr().out)


def test_help_names_every_command(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--help"]) == 0
    out = capsys.readouterr().out
    for name in ("new", "audit", "reconcile", "run", "show", "check", "plot", "export"):
        assert f"  {name} " in out
    assert "no basis for medical or dosing decisions" in " ".join(out.split())
    assert main([]) in (0, 2)


def test_a_mistyped_command_names_the_right_one(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["chek"]) == 2
    assert 'did you mean "check"?' in capsys.readouterr().err


def test_audit_tells_the_facts_of_the_file(capsys: pytest.CaptureFixture[str]) -> None:
    status, found = facts(capsys, "audit", str(SYSTEM), "--json")
    assert status == 0
    transfer = found["reactions"][0]
    assert transfer["name"] == "transfer"
    assert transfer["K"] == pytest.approx(10.0)
    assert transfer["dG0_kJ_per_mol"] == pytest.approx(-5.708, abs=1e-3)  # -RT ln 10 at 298.15 K
    assert transfer["dG_kJ_per_mol"] is None
    assert transfer["forward_constant"] == 5000.0
    assert transfer["backward_constant"] == pytest.approx(500.0)
    assert found["driven"] is False
    assert len(found["conservation_laws"]) == 4
    assert found["equilibrium"]["macroscopic"]["open"] == pytest.approx(12 * 10 / 11)
    assert found["equilibrium"]["finite_count_mean"]["open"] == pytest.approx(12 * 10 / 11)
    assert found["equilibrium"]["finite_count_mean"]["ADP"] == pytest.approx(4.709, abs=1e-3)
    assert main(["audit", str(SYSTEM)]) == 0
    assert "1 mM = 30.11 copies" in capsys.readouterr().out


def test_copies_in_a_millimolar(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    """4.19 aL, a sphere of 200 nm: 1 mM is N_A V = 2,523 copies (common practice; N_A from CODATA)."""
    path = tmp_path / "v.toml"
    path.write_text(SYSTEM.read_text("utf-8").replace('volume = "0.05 aL"', 'volume = "4.19 aL"'))
    assert main(["audit", str(path)]) == 0
    assert "1 mM = 2523 copies" in capsys.readouterr().out


def test_audit_of_a_driven_system(capsys: pytest.CaptureFixture[str]) -> None:
    _, found = facts(capsys, "audit", str(CONFIGS / "driven_cycle.toml"), "--json")
    assert found["driven"] is True
    assert found["equilibrium"]["macroscopic"] is None
    # -30.5 kJ/mol at 3 mM ATP, 0.3 mM ADP, 5 mM Pi and 310.15 K: 30.5 + RT ln(3e-3 / (0.3e-3 * 5e-3)), by hand
    by_hand = 30.5 + 8.314462618e-3 * 310.15 * np.log(3e-3 / (0.3e-3 * 5e-3))
    assert found["emergent_cycles"][0]["affinity_kJ_per_mol"] == pytest.approx(by_hand, abs=1e-6)


def test_run_refuses_to_overwrite_and_force_replaces(
    run_file: Path, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    before = run_file.read_bytes()
    assert main(["run", str(SYSTEM), "-o", str(run_file)]) == 2
    assert "exists already; --force replaces it" in capsys.readouterr().err
    assert run_file.read_bytes() == before
    other = tmp_path / "other.h5"
    words = ["run", str(SYSTEM), "-o", str(other), "--replicates", "3", "--duration", "1 s", "--sample-every", "0.5 s"]
    assert main(words) == 0
    assert main([*words, "--force"]) == 0
    with h5py.File(other) as file:
        assert file["counts"].shape == (3, 3, 6)
    assert main([*words, "--resume"]) == 0
    assert "complete already" in capsys.readouterr().out
    for method in ("lanes", "scalar"):
        assert main([*words, "--force", "--method", method]) == 0
        assert f"(exact, {method})" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["run", "no.toml"], "no.toml: cannot be read"),
        (["run", str(SYSTEM), "--replicates", "0"], "0 is not in the range"),
        (["run", str(SYSTEM), "--duration", "5"], "has no unit"),
        (["run", str(SYSTEM), "--duration", "5 mM"], "a time is needed"),
        (["run", str(SYSTEM), "--engine", "quick", "-o", "x.h5"], '"quick" is not an engine'),
        (["run", str(SYSTEM), "--method", "quick", "-o", "x.h5"], '"quick" is not a method: "lanes" or "scalar" is'),
        (["run", str(SYSTEM), "--force", "--resume"], "give one of them"),
        (["check", str(SYSTEM)], "is a system file, not a run file: `driblet run"),
        (["show", "missing.h5"], "missing.h5: cannot be read"),
        (["plot", "missing.h5"], "missing.h5: cannot be read"),
        (["export", str(SYSTEM)], "--as"),
        (["audit"], "Missing argument"),
        (["new"], "a FILE to write is needed"),
        (["new", "x.toml", "--like", "nothing_like_it"], "is not a ready system"),
    ],
)
def test_bad_use_is_one_line_and_status_2(
    words: list[str], message: str, capsys: pytest.CaptureFixture[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(words) == 2
    captured = capsys.readouterr()
    assert message in captured.err
    assert captured.err.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


def test_audit_of_a_run_file_names_the_right_command(run_file: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["audit", str(run_file)]) == 2
    assert f"`driblet show {run_file}`" in capsys.readouterr().err


def test_check_gives_verdict_tests_and_status(
    run_file: Path, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    status, found = facts(capsys, "check", run_file, "--json")
    assert (status, found["verdict"]) == (0, "consistent")
    assert {"name", "statistic", "p", "samples"} <= set(found["tests"][0])
    assert found["reactions"][0]["detectable_kJ_per_mol"] > 0
    other = tmp_path / "other.toml"
    other.write_text(SYSTEM.read_text("utf-8").replace('K        = 10\nforward  = "1 /s"', 'K = 15\nforward = "1 /s"'))
    status, found = facts(capsys, "check", run_file, "--against", other, "--json")
    assert (status, found["verdict"]) == (1, "inconsistent")
    figure = tmp_path / "check.svg"
    assert main(["check", str(run_file), "-o", str(figure)]) == 0
    assert figure.read_text("utf-8").startswith("<?xml")


def test_check_that_cannot_answer_is_status_3(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "short.h5"
    assert main(["run", str(SYSTEM), "-o", str(path), "--replicates", "30", "--duration", "0.5 s"]) == 0
    capsys.readouterr()
    assert main(["check", str(path)]) == 3
    assert "too short" in capsys.readouterr().out


@pytest.mark.parametrize("ending", ["png", "pdf", "svg"])
def test_plot_writes_the_figure(run_file: Path, ending: str, tmp_path: Path) -> None:
    figure = tmp_path / f"fig.{ending}"
    assert main(["plot", str(run_file), "-o", str(figure)]) == 0
    assert figure.stat().st_size > 5000
    assert [p.name for p in tmp_path.iterdir()] == [figure.name]


def test_plot_refuses_another_ending(run_file: Path, capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    assert main(["plot", str(run_file), "-o", str(tmp_path / "fig.gif")]) == 2
    assert ".png, .pdf, .svg" in capsys.readouterr().err


def test_show(run_file: Path, capsys: pytest.CaptureFixture[str]) -> None:
    status, found = facts(capsys, "show", run_file, "--json")
    assert status == 0
    assert (found["replicates"], found["complete"], found["provenance"]["seed"]) == (120, True, 3)
    assert main(["show", str(run_file)]) == 0
    assert "120 compartments (complete)" in capsys.readouterr().out
    assert main(["show", str(run_file), "--system"]) == 0
    assert capsys.readouterr().out == SYSTEM.read_text("utf-8")


def test_export_of_a_network(capsys: pytest.CaptureFixture[str]) -> None:
    """Propensity = rate times falling factorials: 5000 /M/s among 6 + 6 in 0.05 aL is 5000 / (N_A V) * 36, by hand."""
    _, found = facts(capsys, "export", "--as", "json", SYSTEM)
    assert found["species"] == ["ATP", "sugar", "ADP", "sugarP", "closed", "open"]
    assert found["initial"] == [6, 6, 0, 0, 12, 0]
    channel = found["channels"][0]
    assert channel["rate"] == pytest.approx(5000 / (6.02214076e23 * 0.05e-18))
    assert channel["reactants"] == {"ATP": 1, "sugar": 1}
    assert channel["change"] == {"ATP": -1, "sugar": -1, "ADP": 1, "sugarP": 1}
    assert [c["direction"] for c in found["channels"]] == ["forward", "backward"] * 2


def test_export_of_trajectories(run_file: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    table = tmp_path / "t.csv"
    assert main(["export", "--as", "csv", str(run_file), "-o", str(table)]) == 0
    lines = table.read_text("utf-8").splitlines()
    assert lines[0] == "replicate,time (s),ATP,sugar,ADP,sugarP,closed,open,charged"
    assert lines[1].startswith("0,0.0,6,6,0,0,12,0,0.0")
    assert len(lines) == 1 + 120 * 201
    assert main(["export", "--as", "csv", str(run_file), "-o", str(table)]) == 2
    assert "exists already" in capsys.readouterr().err


def test_new_writes_a_file_that_runs(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "mine.toml"
    assert main(["new", str(path)]) == 0
    assert main(["audit", str(path)]) == 0
    assert main(["run", str(path), "-o", str(tmp_path / "mine.h5"), "--replicates", "4"]) == 0
    assert main(["new", str(path)]) == 2
    assert "exists already" in capsys.readouterr().err
    assert main(["new", str(tmp_path / "copy.toml"), "--like", "dimer"]) == 0
    assert (tmp_path / "copy.toml").read_bytes() == (CONFIGS / "dimer.toml").read_bytes()
    assert main(["new", "--list"]) == 0
    assert "six_and_six" in capsys.readouterr().out


def test_reconcile_closes_what_audit_refuses(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Three isomerisations round a triangle, 0.9 kJ/mol too much: shared in proportion to sd^2, 1 : 1 : 4, by hand."""
    path = tmp_path / "triangle.toml"
    path.write_text(
        '[conditions]\ntemperature = "25 degC"\n[compartments.v]\nvolume = "1 aL"\n[species]\nA = "9 copies"\nB = "0 copies"\n'
        'C = "0 copies"\n'
        + "".join(
            f'[reactions.{n}]\nequation = "{e}"\nenergy = {{ value = "{v} kJ/mol", sd = "{s} kJ/mol" }}\nforward = "1 /s"\n'
            for n, e, v, s in (("ab", "A <=> B", -1, 1), ("bc", "B <=> C", -2, 1), ("ca", "C <=> A", 3.9, 2))
        )
    )
    assert main(["audit", str(path)]) == 2
    err = capsys.readouterr().err
    assert "ab + bc + ca sum to +0.9 kJ/mol" in err
    assert "driblet reconcile" in err
    status, found = facts(capsys, "reconcile", path, "--json")
    assert status == 0
    closed = [row["closed_kJ_per_mol"] for row in found["energies"]]
    assert closed == pytest.approx([-1.15, -2.15, 3.3])
