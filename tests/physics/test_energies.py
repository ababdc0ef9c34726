"""Handbook energies through the system file: what they imply for constants and compositions at 298.15 K.

Standard transformed Gibbs energies of hydrolysis (pH 7, 25 degC), handbook values from memory, as found in textbooks of
biochemistry: phosphoenolpyruvate -61.9, phosphocreatine -43.1, ATP -30.5, glucose 6-phosphate -13.8 kJ/mol.
"""

import math

import numpy as np
import pytest
from scipy import constants

import driblet
from driblet.quantities import AVOGADRO, FARADAY, GAS_CONSTANT, copies_per_molar
from driblet_analysis.references.count_equilibrium import count_law

FILE = """
[conditions]
temperature = "298.15 K"
pH = 7
[compartments.drop]
volume = "1 fL"
[species]
ATP = "100 copies"
ADP = "223 copies"
PCr = { amount = "20 mM", held = true }
Cr = { amount = "10 mM", held = true }
glucose = "1 mM"
G6P = "0 copies"
PEP = "1 mM"
pyruvate = "0 copies"
[energies.hydrolysis]
"PEP + H2O <=> pyruvate + Pi" = "-61.9 kJ/mol"
"PCr + H2O <=> Cr + Pi" = "-43.1 kJ/mol"
"ATP + H2O <=> ADP + Pi" = "-30.5 kJ/mol"
"G6P + H2O <=> glucose + Pi" = "-13.8 kJ/mol"
[reactions]
buffer = { equation = "PCr + ADP <=> Cr + ATP", energy = "hydrolysis", forward = "1 /M/s" }
charging = { equation = "ATP + glucose <=> ADP + G6P", energy = "hydrolysis", forward = "1 /M/s" }
making = { equation = "PEP + ADP <=> pyruvate + ATP", energy = "hydrolysis", forward = "1 /M/s" }
"""


def reactions(text: str = FILE) -> dict[str, driblet.system.Reaction]:
    return {r.name: r for r in driblet.loads(text).reactions}


@pytest.mark.parametrize(
    ("name", "energy", "K"), [("buffer", -12.6, 161), ("charging", -16.7, 843), ("making", -31.4, 3.2e5)]
)
def test_a_transfer_is_the_difference_of_two_hydrolyses(name: str, energy: float, K: float) -> None:
    reaction = reactions()[name]
    assert reaction.dG0_kJ_per_mol == pytest.approx(energy, abs=1e-9)
    assert pytest.approx(K, rel=0.01 if K > 1e3 else 0.005) == reaction.K  # as rounded in print
    # RT from scipy, not from driblet
    assert pytest.approx(math.exp(-energy * 1e3 / (constants.R * 298.15)), rel=1e-12) == reaction.K
    assert reaction.forward / reaction.backward == pytest.approx(reaction.K, rel=1e-14)


def test_twice_as_much_phosphocreatine_as_creatine_holds_ATP_over_ADP_at_322() -> None:
    text = FILE.split("charging =")[0]
    system = driblet.loads(text)
    present = [100, 223, 0, 0, 0, 0]
    law = count_law(system, present, system.compartment.omega)
    atp, adp = law.mean()[:2]
    assert round(atp / adp) == 322
    assert atp + adp == pytest.approx(323)


def test_kilocalories() -> None:
    """-7.3 kcal/mol for ATP is -30.5 kJ/mol (common practice, no source); a calorie is 4.184 J by definition."""
    text = FILE.replace('"-30.5 kJ/mol"', '"-7.3 kcal/mol"')
    assert reactions(text)["charging"].dG0_kJ_per_mol == pytest.approx(-7.3 * 4.184 + 13.8, abs=1e-12)
    assert round(-7.3 * constants.calorie, 1) == -30.5


def test_constants_are_those_of_scipy() -> None:
    assert constants.N_A == AVOGADRO
    assert pytest.approx(constants.R / 1e3, rel=1e-15) == GAS_CONSTANT
    assert round(GAS_CONSTANT * 298.15, 3) == 2.479  # kJ/mol, from memory
    assert pytest.approx(constants.N_A * constants.e / 1e3) == FARADAY
    # a sphere of 200 nm, by geometry: 1 mM is 2,523 copies
    assert round(1e-3 * copies_per_molar(constants.pi / 6 * 200e-9**3 * 1e3)) == 2523


def test_formation_energies_give_the_same_as_hydrolyses() -> None:
    """Energies of formation are defined up to one per element: any set with these differences must do."""
    formation = {"ATP": 0.0, "ADP": -30.5 + 7.0, "Pi": -7.0, "H2O": 0.0, "glucose": 1.0, "G6P": 1.0 - 7.0 + 13.8}
    table = "\n".join(f'{name} = "{value} kJ/mol"' for name, value in formation.items())
    text = FILE.replace("[energies.hydrolysis]", f"[energies.formation]\n{table}\n[energies.hydrolysis]")
    head, tail = text.split("charging =")
    text = head + "charging =" + tail.replace('energy = "hydrolysis"', 'energy = "formation"', 1)
    found = reactions(text)["charging"].dG0_kJ_per_mol
    np.testing.assert_allclose(found, -16.7, atol=1e-9)
