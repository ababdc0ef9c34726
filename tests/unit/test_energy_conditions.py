"""What audit says of magnesium and pH: compositions after full conversion, drift of energies, and where there is no answer."""

from __future__ import annotations

from dataclasses import replace

import pytest

import driblet
from driblet.energetics.magnesium import total_magnesium
from driblet_analysis.energy_conditions import (
    DRIFT_LIMIT,
    buffer_facts,
    condition_warnings,
    full_conversion,
    initial_composition,
    magnesium_facts,
    sensitivity_facts,
)

FILE = """
[conditions]
temperature = "30 degC"
pH = 7.4
pMg = 3
ionic_strength = "0.12 M"
buffer = { name = "Tris", concentration = "20 mM" }
[compartments.lumen]
volume = "1 fL"
[species]
ATP = "4 mM"
ADP = "0.5 mM"
AMP = "0 mM"
Pi = { amount = "5 mM", held = true }
sugar = "1 mM"
sugarP = "0 mM"
[reactions.leak]
equation = "ATP + H2O <=> ADP + Pi"
energy = "reference"
forward = "1e-5 /s"
[reactions.swap]
equation = "2 ADP <=> ATP + AMP"
energy = "reference"
forward = "1 /M/s"
[reactions.charging]
equation = "ATP + sugar <=> ADP + sugarP"
energy = "-16.7 kJ/mol"
forward = "1 /M/s"
[reactions.backwards]
equation = "AMP + ATP <=> 2 ADP"
energy = "reference"
forward = "1 /M/s"
"""


@pytest.fixture(scope="module")
def system() -> driblet.System:
    return driblet.loads(FILE)


def by_name(system: driblet.System, name: str) -> driblet.system.Reaction:
    return next(r for r in system.reactions if r.name == name)


def test_full_conversion_uses_up_the_scarcest_reactant_and_leaves_held_ones(system: driblet.System) -> None:
    after = full_conversion(system, by_name(system, "leak"))
    assert after == pytest.approx({**initial_composition(system), "ATP": 0, "ADP": 4.5e-3, "Pi": 5e-3})
    after = full_conversion(system, by_name(system, "swap"))
    assert after == pytest.approx({**initial_composition(system), "ADP": 0, "ATP": 4.25e-3, "AMP": 2.5e-4})
    # nothing to go forward with: it runs backward
    assert full_conversion(system, by_name(system, "backwards")) == pytest.approx(after)


def test_total_magnesium_is_kept_at_every_composition(system: driblet.System) -> None:
    facts = magnesium_facts(system, None)
    assert facts is not None
    assert facts["not_in_table"] == ["sugar", "sugarP"]
    table = system.reference
    assert table is not None
    for row in facts["compositions"][1:]:
        composition = full_conversion(system, by_name(system, row["at"]))
        assert composition is not None
        there = replace(system.conditions, pMg=row["pMg"])
        total = total_magnesium(table.load(composition), there, table.magnesium_ion)
        assert total == pytest.approx(facts["total_M"], rel=1e-9)


def test_energies_move_with_free_magnesium_and_a_warning_names_them(system: driblet.System) -> None:
    for ATP, doubted in (("4 mM", False), ("12 mM", True)):
        system = driblet.loads(FILE.replace('ATP = "4 mM"', f'ATP = "{ATP}"'))
        facts = magnesium_facts(system, None)
        assert facts is not None
        rows = {row["at"]: row for row in facts["compositions"]}
        moved = rows["leak"]["dG0_kJ_per_mol"]["leak"] - rows["start"]["dG0_kJ_per_mol"]["leak"]
        assert rows["leak"]["pMg"] < 3  # hydrolysis sets magnesium free
        slope = sensitivity_facts(system, by_name(system, "leak"))["per_pMg"]
        assert moved == pytest.approx(slope * (rows["leak"]["pMg"] - 3), rel=0.3)
        assert rows["leak"]["dG0_kJ_per_mol"]["charging"] == -16.7  # the table does not know the sugar
        warnings = condition_warnings(facts, None)
        assert (moved > DRIFT_LIMIT) == doubted == bool(warnings)
    assert warnings[0].startswith("free magnesium is held at pMg 3.00; after full conversion by leak it would be 2.")
    assert "leak +0." in warnings[0]


def test_what_has_no_answer_says_why(system: driblet.System) -> None:
    facts = buffer_facts(system, None)
    assert facts is not None
    reasons = {row["after"]: row["reason"] for row in facts["pH_after"]}
    assert reasons["leak"] == "held species (Pi) exchange protons with the outside"
    assert reasons["charging"].startswith('"sugar" is not in the reference table')
    assert reasons["swap"] is None
    assert sensitivity_facts(system, by_name(system, "charging"))["reason"].startswith('"sugar" is not in')


def test_no_facts_without_what_they_need() -> None:
    bare = driblet.loads(FILE.replace('energy = "reference"', 'energy = "0 kJ/mol"').replace("pMg = 3\n", ""))
    assert magnesium_facts(bare, None) is None
    no_buffer = driblet.loads("\n".join(line for line in FILE.splitlines() if "buffer" not in line))
    assert buffer_facts(no_buffer, None) is None
    facts = buffer_facts(bare, None)
    assert facts is not None
    assert {row["reason"] for row in facts["pH_after"]} >= {"pMg not stated"}


def test_an_overrun_buffer_is_said() -> None:
    text = FILE.replace('"20 mM" }', '"1 uM" }').replace('Pi = { amount = "5 mM", held = true }', 'Pi = "0 mM"')
    text = (
        text.replace('ATP = "4 mM"', 'ATP = "300 mM"').replace("pH = 7.4", "pH = 9.5").replace('"0.12 M"', '"0.35 M"')
    )
    facts = buffer_facts(driblet.loads(text), None)
    assert facts is not None
    row = next(r for r in facts["pH_after"] if r["after"] == "leak")
    assert row["change"] < -1.5  # phosphate itself is what holds it in the end
    (warning,) = (w for w in condition_warnings(None, facts) if w.endswith("after full conversion by leak"))
    assert warning.startswith("the pH is held; Tris at 0.001 mM would let it go to ")
