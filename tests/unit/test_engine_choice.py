"""Which engine a run takes, and what it says about that."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

import driblet
from driblet.commands.main import main
from driblet.engine_choice import stiffness_for

CONFIGS = Path(__file__).parents[2] / "configs"
VESICLE = CONFIGS / "lumped_vesicle.toml"
FEW = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "1 aL"
[species]
A = "12 copies"
B = "0 copies"
[reactions.turn]
equation = "A <=> B"
K = 2
forward = "1 /s"
[run]
engine = "ENGINE"
replicates = 20
duration = "10 s"
"""


@pytest.mark.parametrize("engine", ["leap", "auto"])
def test_twelve_molecules_run_exactly_to_the_same_bits(engine: str) -> None:
    run = driblet.run(driblet.loads(FEW.replace("ENGINE", engine)))
    assert run.engine == "exact"
    assert run.leaping == {}
    assert "no leap would have held 10 of its" in run.provenance["engine_why"]
    exact = driblet.run(driblet.loads(FEW.replace("ENGINE", "exact")))
    assert "engine_why" not in exact.provenance
    assert (run.counts == exact.counts).all()


def test_auto_lumps_and_leaps_and_says_why() -> None:
    system = driblet.load(VESICLE)
    run = driblet.run(system, replicates=2, duration=600.0, statistics=False)
    assert run.engine == "leap"
    assert run.treatments == {"CK": "lumped", "kinase": "lumped"}
    facts = json.loads(run.provenance["engine_pilot"])
    assert run.provenance["engine_why"].startswith("leaps: 600 s of one compartment took ")
    assert facts["simulated_s"] == 600.0
    assert facts["firings"] > 1000 * facts["leaps"] > 0
    assert (run.leaping["leaps"] > 0).all()
    again = driblet.run(system, replicates=2, duration=600.0, statistics=False)
    assert (again.counts == run.counts).all()


def test_leaps_that_cost_more_are_not_taken_and_the_remedy_is_named() -> None:
    run = driblet.run(
        driblet.load(VESICLE),
        replicates=2,
        duration=0.01,
        sample_every=0.01,
        engine="leap",
        treatment="elementary",
        statistics=False,
    )
    assert run.engine == "exact"
    assert (
        "times the work of exact events; lumped, CK, kinase would let leaps be longer" in run.provenance["engine_why"]
    )


def test_requirements_keep_leaps_within_a_relaxation_time() -> None:
    system = driblet.load(VESICLE)
    assert stiffness_for(system) == 5.0
    text = system.text + '\n[requirements.powered]\nmust = "ATP > 100"\nwhen = "throughout"\n'
    asked = driblet.loads(text)
    assert stiffness_for(asked) == 1.0
    run = driblet.run(asked, replicates=2, duration=600.0, statistics=False, estimate_error=False)
    assert run.leaping["longest_leap_in_relaxation_times"].max() <= 1.0


def test_events_are_refused_to_leaps_and_given_exactly_to_auto() -> None:
    with pytest.raises(driblet.InputError, match="a leap has no single events to record"):
        driblet.run(driblet.loads(FEW.replace("ENGINE", "leap")), record="events")
    run = driblet.run(driblet.loads(FEW.replace("ENGINE", "auto")), record="events")
    assert run.engine == "exact"
    assert run.provenance["engine_why"] == "exact: single events are recorded"


def test_bad_tolerances_are_told_where_they_stand(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "few.toml"
    file.write_text(FEW.replace("ENGINE", "leap").replace('duration = "10 s"', 'duration = "10 s"\nleap_tolerance = 2'))
    assert main(["run", str(file), "-o", str(tmp_path / "x.h5")]) == 2
    assert f"{file}: run.leap_tolerance: 2 will not do: a plain number from 0.001 to 0.3" in capsys.readouterr().err
    file.write_text(FEW.replace("ENGINE", "quick"))
    assert main(["audit", str(file)]) == 2
    assert 'run.engine: "quick" is not an engine: "exact", "leap" or "auto" is' in capsys.readouterr().err
    with pytest.raises(driblet.InputError, match=r"leap_tolerance: 0\.9 will not do"):
        driblet.run(driblet.loads(FEW.replace("ENGINE", "leap")), leap_tolerance=0.9)


def test_screens_tell_of_leaps(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "v.h5"
    assert main(["run", str(VESICLE), "--replicates", "4", "--duration", "10 min", "-o", str(path)]) == 0
    told = " ".join(capsys.readouterr().out.split())
    for text in (
        "(leap, leaps)",
        "leaps: 600 s of one compartment took",
        "net firings are exact, gross ones estimates where leaped",
        "estimated error of means, in standard deviations between compartments: lumping at most",
    ):
        assert text in told
    assert main(["show", str(path), "--json"]) == 0
    shown = json.loads(capsys.readouterr().out)
    assert shown["engine"] == "leap"
    assert shown["leaping"]["leaps"] > 10
    assert main(["audit", str(VESICLE), "--json"]) == 0
    engine = json.loads(capsys.readouterr().out)["engine"]
    assert engine["taken"] == "leap"
    assert engine["estimated_core_seconds"] < 60
    assert main(["run", str(VESICLE), "--replicates", "4", "--duration", "10 min", "-o", str(path), "--resume"]) == 0
    assert "complete already" in capsys.readouterr().out


def test_a_pilot_out_of_work_before_an_addition_says_how_far_it_came(monkeypatch: pytest.MonkeyPatch) -> None:
    from driblet import engine_choice
    from driblet.network import Network
    from driblet.treatments import with_treatments

    late = '\n[additions.more]\nat = "50 min"\nspecies = "ATP"\namount = "1 mM"\n'
    system, _ = with_treatments(driblet.loads(driblet.load(VESICLE).text + late))
    monkeypatch.setattr(engine_choice, "_PILOT_BUDGET", 1 << 10)
    monkeypatch.setattr(engine_choice, "_PILOT_CALL", 1 << 10)
    choice = engine_choice.choose_engine(system, Network.of(system), system.settings)
    assert choice.facts["leaps"] > 0
    assert 0.0 < choice.facts["simulated_s"] < 3000.0
