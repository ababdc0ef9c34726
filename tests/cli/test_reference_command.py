"""`driblet reference`, and the lines `driblet audit` adds for conditions."""

from __future__ import annotations

import json
import math

import pytest

from driblet.commands.main import main

FILE = """
[conditions]
temperature = "30 degC"
pH = 7.4
total_magnesium = "6 mM"
ionic_strength = "0.12 M"
buffer = { name = "HEPES", concentration = "20 mM" }
[compartments.lumen]
volume = "0.1 fL"
[species]
ATP = "4 mM"
ADP = "0.1 mM"
Pi = "5 mM"
PEP = "1 mM"
pyruvate = "1 mM"
[reactions.leak]
equation = "ATP + H2O <=> ADP + Pi"
energy = "reference"
forward = "1e-5 /s"
[reactions.refill]
equation = "PEP + ADP <=> ATP + pyruvate"
energy = "reference"
forward = "100 /M/s"
[reactions.bleaching]
equation = "PEP -> nothing"
one_way = "light"
forward = "1e-9 /s"
"""


def test_the_list_names_every_reactant_and_buffer(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["reference"]) == 0
    out = capsys.readouterr().out
    for name in ("ATP", "phosphocreatine", "HEPES", "ATP + pyruvate <=> ADP + PEP *"):
        assert name in out


def test_an_entry_is_explained_under_any_of_its_names(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["reference", "phosphoenolpyruvate"]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "pK 7.00" in out
    assert "−1263.65" in out
    assert "source: Alberty 2003, from memory" in out
    assert "McQuate & Utter" in out
    assert 'energy = "reference" uses it' in out


def test_json_has_measured_beside_computed(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["reference", "creatine", "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert facts["reactants"][0]["key"] == "creatine"
    for m in facts["measured"]:
        assert m["log10_computed_over_measured"] == pytest.approx(math.log10(m["K_computed"] / m["K_measured"]))
        assert abs(m["log10_computed_over_measured"]) < 0.2


@pytest.mark.parametrize(
    ("name", "line"),
    [
        ("phosphocreatin", "reference: phosphocreatin: is not an entry of the table; did you mean phosphocreatine"),
        ("G3P", "reference: G3P: is not an entry of the table; it may mean GAP or glycerol3P"),
        ("qqq", "reference: qqq: is not an entry of the table; `driblet reference` lists all"),
    ],
)
def test_an_unknown_entry_is_one_line_and_status_2(name: str, line: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["reference", name]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith(line)
    assert err.count("\n") == 1


def test_audit_shows_what_made_each_energy(tmp_path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "mix.toml"
    path.write_text(FILE)
    assert main(["audit", str(path), "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    leak, refill, bleaching = facts["reactions"]
    assert leak["energy_from"] == "reference"
    assert leak["energy_note"].startswith("reference table at 30 °C, pH 7.4, pMg ")
    assert refill["energy_note"].startswith("measured constant of McQuate & Utter")
    assert "energies of formation give" in refill["energy_note"]
    assert refill["energy_sd_kJ_per_mol"] == 1.2
    assert leak["sensitivity_kJ_per_mol"]["per_pH"] < -3
    assert bleaching["sensitivity_kJ_per_mol"]["reason"] == "one way: the energy is undefined"
    magnesium = facts["magnesium"]
    assert magnesium["free_M"] + sum(magnesium["bound_M"].values()) == pytest.approx(6e-3, rel=1e-6)
    assert magnesium["compositions"][0]["dG0_kJ_per_mol"]["leak"] == pytest.approx(leak["dG0_kJ_per_mol"])
    assert {row["at"] for row in magnesium["compositions"]} >= {"start", "leak", "refill"}
    changes = {row["after"]: row["change"] for row in facts["buffer"]["pH_after"]}
    assert changes["leak"] < -0.1
    assert changes["refill"] > 0
    assert [w for w in facts["warnings"] if w.startswith("the pH is held; HEPES at 20 mM would let it go to 7.")]
    assert main(["audit", str(path)]) == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "per unit pMg" in out
    assert "magnesium, mM: free" in out
    assert "after leak alone in 20 mM HEPES: pH 7." in out
