"""Treatments of enzymes: what file and caller ask for, what the criteria say, what counts and readouts then mean."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import driblet
from driblet.commands.main import main
from driblet.free_counts import estimated_names, free_counts
from driblet.lumping import treated
from driblet.network import Network
from driblet.requirements import CompiledRequirements
from driblet.treatments import lumping_facts, read_treatments, with_treatments
from driblet_analysis.references.count_equilibrium import count_law
from driblet_analysis.run_check import check_run

TEXT = """
[conditions]
temperature = "30 degC"
[compartments.v]
volume = "20 aL"
[species]
ATP = "2 mM"
ADP = "0.5 mM"
sugar = "3 mM"
sugarP = "0.2 mM"
drug = { amount = "10 uM", held = true }
[reactions.relay]
equation = "ATP + sugar <=> ADP + sugarP"
K = 12
[reactions.back]
equation = "sugarP <=> sugar"
energy = "-6 kJ/mol"
forward = "0.5 /s"
[enzymes.kinase]
amount = "5 copies"
catalyses = "relay"
mechanism = "ordered bi bi"
kcat = "120 /s"
KM = { ATP = "0.2 mM", sugar = "0.1 mM" }
inhibitors.drug = "20 uM"
[enzymes.other]
amount = "400 copies"
catalyses = "relay"
mechanism = "random bi bi"
kcat = "10 /s"
KM = { ATP = "0.1 mM", sugar = "0.4 mM" }
half_life = "1 h"
[readouts]
all = "total(ATP)"
free = "ATP"
charge = "total(ATP) / (total(ATP) + total(ADP))"
active = "kinase"
drive = "gibbs(relay)"
[requirements.some]
must = "total(ATP) > 100"
when = "throughout"
[requirements.unbound]
must = "ATP > 100"
when = "throughout"
[run]
duration = "4 s"
sample_every = "0.5 s"
replicates = 20
seed = 9
"""
IN_RUN = "seed = 9\n"


def test_the_file_may_say_it_for_all_or_for_one() -> None:
    both = driblet.loads(TEXT.replace(IN_RUN, IN_RUN + 'treatment = "lumped"\n'))
    assert dict(both.treatments) == {"kinase": "lumped", "other": "lumped"}
    one = driblet.loads(TEXT.replace('half_life = "1 h"', 'half_life = "1 h"\ntreatment = "auto"'))
    assert dict(one.treatments) == {"other": "auto"}
    made, choices = with_treatments(one, None, 0.5)
    assert [(c.asked, c.taken) for c in choices] == [("elementary", "elementary"), ("auto", "elementary")]
    assert choices[1].why.startswith("other stays elementary: ")
    assert "it is 17 % of sugarP, where 5 % are the most" in choices[1].why
    assert made.species == one.species


def test_the_caller_goes_before_the_file() -> None:
    system = driblet.loads(TEXT.replace(IN_RUN, IN_RUN + 'treatment = "lumped"\n'))
    made, choices = with_treatments(system, {"other": "elementary"}, 0.5)
    assert [c.taken for c in choices] == ["lumped", "elementary"]
    assert [s.name for s in made.species if s.enzyme == "kinase"] == ["kinase"]
    assert sum(s.enzyme == "other" for s in made.species) > 1
    assert [r.name for r in made.reactions if r.enzyme == "kinase"] == ["kinase.relay"]


def test_a_lumping_that_the_criteria_advise_against_warns_with_the_number() -> None:
    made, _ = with_treatments(driblet.loads(TEXT), "lumped", 0.5)
    doubts = [line for line in made.warnings if "expect a bias" in line]
    assert any(d.startswith("other is lumped as asked, though ") and "it is 17 % of sugarP" in d for d in doubts)
    again, _ = with_treatments(made, None, 0.5)
    assert again == made


def test_facts_of_an_enzyme_far_from_equilibrium() -> None:
    facts = lumping_facts(driblet.loads(TEXT), 1e-3)["kinase"]
    assert facts.settling_s is not None
    assert 1e-3 < facts.settling_s < 1e-1
    assert facts.rarest == "sugarP"
    assert any("before 10 settling times" in line for line in facts.failures)
    (fano,), (shown,) = dict(facts.fano).values(), dict(facts.firing_fano).values()
    assert fano is not None
    assert shown is not None
    assert fano < shown


def test_binding_that_is_fast_makes_rapid_equilibrium_right() -> None:
    system = driblet.loads(TEXT)
    error = dict(lumping_facts(system)["kinase"].rapid_equilibrium)["relay"]
    assert error is not None
    assert abs(error) > 0.1
    (kinase, other) = system.enzymes
    steps = tuple(
        replace(s, forward=1e4 * s.forward, backward=1e4 * s.backward) if s.ligand is not None else s
        for s in kinase.steps
    )
    fast = replace(system, enzymes=(replace(kinase, steps=steps), other))
    error = dict(lumping_facts(fast)["kinase"].rapid_equilibrium)["relay"]
    assert error == pytest.approx(0.0, abs=1e-2)


def test_a_run_keeps_its_treatments_and_its_system_has_them(tmp_path: Path) -> None:
    system = driblet.loads(TEXT)
    run = driblet.run(system, tmp_path / "a.h5", treatment="lumped")
    assert run.treatments == {"kinase": "lumped", "other": "lumped"}
    assert "kinase.ATP" not in run.species
    assert run.system.free_species[-1].name == "other"
    np.testing.assert_array_equal(run.readout("all"), run.counts[..., 0])
    assert (run.readout("free") < run.readout("all")).all()
    relay = run.turnovers("relay")
    assert (relay == run.turnovers("relay", "kinase") + run.turnovers("relay", "other")).all()
    moved = relay + run.counts[..., run.species.index("ATP")]
    assert (moved == moved[:, :1]).all()
    assert driblet.run(system, tmp_path / "a.h5", treatment="lumped", resume=True).identity == run.identity
    with pytest.raises(driblet.InputError, match="holds another run"):
        driblet.run(system, tmp_path / "a.h5", resume=True)


def test_a_run_against_what_its_file_says_keeps_its_own_system(tmp_path: Path) -> None:
    system = driblet.loads(TEXT.replace(IN_RUN, IN_RUN + 'treatment = "lumped"\n'))
    run = driblet.run(system, tmp_path / "a.h5", treatment={"kinase": "elementary"})
    assert run.treatments == {"kinase": "elementary", "other": "lumped"}
    assert [s.name for s in run.system.free_species] == list(run.species)


def test_requirements_on_totals_are_judged_at_every_event_and_on_free_counts_on_the_grid() -> None:
    system = driblet.loads(TEXT)
    lumped = treated(system, {"kinase": "lumped"})
    compiled = CompiledRequirements.of(lumped, Network.of(lumped), 4.0)
    assert compiled.resolutions() == ("event", "grid")
    assert compiled.by_grid[1].startswith("the free count of ATP is estimated, its enzyme being lumped")
    assert CompiledRequirements.of(system, Network.of(system), 4.0).resolutions() == ("event", "event")


CLOSED = """
[conditions]
temperature = "30 degC"
[compartments.v]
volume = "0.05 aL"
[species]
A = "20 copies"
B = "15 copies"
P = "10 copies"
Q = "0 copies"
[reactions.r]
equation = "A + B <=> P + Q"
K = 2
[enzymes.e]
amount = "1 copies"
catalyses = "r"
mechanism = "random bi bi"
[enzymes.e.steps]
binds_A = { forward = "1e7 /M/s", backward = "1e3 /s" }
binds_B = { forward = "1e7 /M/s", backward = "4e3 /s" }
binds_B_with_A = { forward = "1e7 /M/s", backward = "2e3 /s" }
binds_A_with_B = { forward = "1e7 /M/s" }
r = { forward = "RATE /s" }
releases_P = { forward = "3e3 /s", backward = "1e7 /M/s" }
releases_Q = { forward = "1e3 /s", backward = "1e7 /M/s" }
releases_P_with_Q = { forward = "2e3 /s", backward = "1e7 /M/s" }
releases_Q_with_P = { backward = "1e7 /M/s" }
[run]
duration = "60 s"
replicates = 80
seed = 4
"""


def test_check_takes_a_lumped_run_as_it_takes_any() -> None:
    """False-alarm rate of a check: 5 %. The twin holds the run against other energies, which check must see."""
    run = driblet.run(driblet.loads(CLOSED.replace("RATE", "50")), treatment="lumped")
    assert check_run(run).verdict == "consistent"
    other = driblet.loads(CLOSED.replace("RATE", "50").replace("K = 2", "K = 6"))
    assert check_run(run, other).verdict == "inconsistent"


def test_free_counts_are_those_of_one_copy_step_by_step() -> None:
    """One enzyme that binds far faster than it works: given the totals, its states have their equilibrium weights."""
    system = driblet.loads(CLOSED.replace("RATE", "1e-6"))
    lumped = treated(system, {"e": "lumped"})
    omega = system.compartment.omega
    law = count_law(system, [s.copies for s in system.free_species], omega)
    assert law is not None
    names = [s.name for s in lumped.free_species]
    column = {s.name: i for i, s in enumerate(system.free_species)}
    holds = np.array([[dict(s.holds).get(n, 0) for s in system.free_species] for n in names[:4]])
    total = law.states[:, [column[n] for n in names[:4]]] + law.states @ holds.T
    free = law.states[:, [column[n] for n in names]]
    rows = np.unique(total, axis=0)
    assert len(rows) > 10
    for row in rows:
        here = (total == row).all(axis=1)
        mean = law.probability[here] @ free[here] / law.probability[here].sum()
        found = free_counts(lumped, np.append(row, 1), np.array(omega))
        np.testing.assert_allclose(found, mean, rtol=1e-6, atol=1e-6)


def test_what_is_estimated() -> None:
    system = driblet.loads(TEXT)
    assert estimated_names(system) == frozenset()
    assert estimated_names(treated(system, {"kinase": "lumped"})) == {"kinase", "ATP", "ADP", "sugar", "sugarP"}
    made, _ = with_treatments(system, {"kinase": "lumped"})
    assert any(line.startswith("readout free: free ATP estimated from the states of kinase") for line in made.warnings)
    assert not any(line.startswith("readout all") for line in made.warnings)
    note = "readout drive: gibbs(relay) takes ADP, ATP, sugar, sugarP as counted, free and bound together, kinase being lumped"
    assert note in made.warnings
    assert not any("as counted" in line for line in system.warnings)


@pytest.mark.parametrize(
    ("asked", "message"),
    [
        ("slow", 'treatment: "slow" is not a treatment; known: elementary, lumped, auto'),
        ({"kinase": "slow"}, 'treatment: "slow" is not a treatment'),
        ({"kinas": "lumped"}, 'treatment: "kinas" is not an enzyme of this system; did you mean "kinase"?'),
    ],
)
def test_bad_treatments(asked: str | dict[str, str], message: str) -> None:
    with pytest.raises(driblet.InputError) as caught:
        driblet.run(driblet.loads(TEXT), treatment=asked)
    assert message in caught.value.lines()[0]


def test_bad_treatments_in_a_file() -> None:
    with pytest.raises(driblet.InputError, match=r"run\.treatment"):
        driblet.loads(TEXT.replace(IN_RUN, IN_RUN + 'treatment = "slow"\n'))
    with pytest.raises(driblet.InputError, match=r"enzymes\.other\.treatment"):
        driblet.loads(TEXT.replace('half_life = "1 h"', 'half_life = "1 h"\ntreatment = "slow"'))


def test_the_option_of_the_command_line() -> None:
    assert read_treatments("lumped") == "lumped"
    assert read_treatments("kinase=lumped, other=auto") == {"kinase": "lumped", "other": "auto"}


def test_an_enzyme_of_too_many_states_stays_elementary_or_is_refused() -> None:
    drugs = [f"d{i}" for i in range(14)]
    text = TEXT.replace(
        "[reactions.relay]",
        "\n".join(f'{d} = {{ amount = "1 uM", held = true }}' for d in drugs) + "\n[reactions.relay]",
    )
    text = text.replace('inhibitors.drug = "20 uM"', "\n".join(f'inhibitors.{d} = "20 uM"' for d in drugs))
    system = driblet.loads(text)
    _, choices = with_treatments(system, {"kinase": "auto"}, 0.5)
    assert choices[0].taken == "elementary"
    assert choices[0].why == (
        "kinase stays elementary: 19 states are too many to lump; at most 16 are allowed: run it elementary"
    )
    with pytest.raises(driblet.InputError, match=r"enzymes\.kinase\.treatment: 19 states are too many to lump"):
        driblet.run(system, treatment={"kinase": "lumped"})


def test_the_command_says_why_and_how_regular_turnovers_are(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "a.toml"
    text = (
        TEXT.replace('"20 aL"', '"1 fL"')
        .replace('"400 copies"', '"40 copies"')
        .replace('duration = "4 s"', 'duration = "2 s"')
    )
    file.write_text(text)
    output = ["-o", str(tmp_path / "a.h5"), "--replicates", "8"]
    assert main(["run", str(file), *output, "--treatment", "auto"]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "kinase is lumped: its states settle in" in out
    assert "(auto)" in out
    assert "Variance over mean of net turnovers at the start: relay" in out
    assert "note: readout free: free ATP estimated from the states of kinase" in out
    assert main(["show", str(tmp_path / "a.h5")]) == 0
    assert "kinase lumped" in " ".join(capsys.readouterr().out.split())
    assert main(["run", str(file), *output, "--force", "--treatment", "kinase=lump"]) == 2
    assert 'treatment: "lump" is not a treatment; known: elementary, lumped, auto' in capsys.readouterr().err


def test_audit_shows_the_criteria(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "a.toml"
    file.write_text(TEXT)
    assert main(["audit", str(file)]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "lumping, at the start" in out
    assert (
        "other should not be lumped: it is 17 % of sugarP" in out
        or "it is 17 % of sugarP, where 5 % are the most" in out
    )
    assert main(["audit", str(file), "--json"]) == 0
    rows = {row["name"]: row for row in json.loads(capsys.readouterr().out)["lumping"]}
    assert rows["other"]["allowed"] is False
    assert rows["kinase"]["settling_s"] > 0
    assert rows["kinase"]["rapid_equilibrium_allowed"] is False
