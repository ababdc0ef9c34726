"""The reference table held against published energies, constants and handbook values.

Alberty's tables are from memory (Thermodynamics of Biochemical Reactions, 2003; J. Phys. Chem. B 107:12324, 2003, called
2003b): 298.15 K, pH as concentration, which is the scale of those tables.
"""

from __future__ import annotations

import copy
import math
from dataclasses import replace

import pytest
from scipy import constants

from driblet.energetics.conditions import Conditions
from driblet.energetics.reference import Reference, reference_table
from driblet.energetics.transform import Potentials, transformed_energy

RT = constants.R * 298.15 / 1000
ALBERTY = Conditions(298.15, 7.0, 14.0, 0.25, "concentration")
BENCH = Conditions(298.15, 7.0, 3.0, 0.25)
HYDROLYSIS = {"ATP": -1, "H2O": -1, "ADP": 1, "Pi": 1}

# transformed energies of formation at pH 7 and ionic strength 0, 0.1 and 0.25 mol/L, kJ/mol; Alberty 2003, from memory
FORMATION = {
    "ATP": (-2292.61, -2292.16, -2292.50),
    "ADP": (-1428.93, -1425.55, -1424.70),
    "AMP": (-562.04, -556.53, -554.83),
    "adenosine": (324.93, 332.89, 335.46),
    "Pi": (-1058.56, -1059.17, -1059.49),
    "H2O": (-157.28, -156.05, -155.66),
    "glucose": (-436.42, -429.10, -426.71),
    "G6P": (-1325.00, -1320.37, -1318.92),
    "G1P": (-1318.03, -1313.34, -1311.89),
    "F6P": (-1321.71, -1317.16, -1315.74),
    "PEP": (-1185.46, -1188.53, -1189.73),
    "pyruvate": (-352.40, -351.18, -350.78),
    "lactate": (-316.94, -314.49, -313.70),
    "PG3": (-1346.38, -1347.19, -1347.73),
    "PG2": (-1340.72, -1341.32, -1341.79),
    "acetate": (-249.46, -248.23, -247.83),
    "NAD": (1038.86, 1054.17, 1059.11),
    "NADH": (1101.47, 1115.55, 1120.09),
}


def energy(change: dict[str, int], conditions: Conditions, table: Reference | None = None) -> float:
    known = table or reference_table()
    return known.from_formation(known.terms(change), conditions)


def constant(change: dict[str, int], conditions: Conditions) -> float:
    return math.exp(-energy(change, conditions) / (constants.R * conditions.temperature_K / 1000))


@pytest.mark.parametrize("name", FORMATION)
def test_transformed_energies_of_formation_are_those_of_the_published_table(name: str) -> None:
    known = reference_table()
    for ionic_strength, published in zip((0.0, 0.1, 0.25), FORMATION[name], strict=True):
        at = Potentials.of(replace(ALBERTY, ionic_strength_M=ionic_strength), known.magnesium_ion)
        assert transformed_energy(known.reactants[name], at) == pytest.approx(published, abs=0.03), ionic_strength


def test_ATP_hydrolysis_without_magnesium_and_at_pMg_3() -> None:
    assert energy(HYDROLYSIS, ALBERTY) == pytest.approx(-36.04, abs=0.02)  # Alberty 2003, from memory
    assert energy(HYDROLYSIS, replace(ALBERTY, pMg=3.0)) == pytest.approx(-32.5, abs=0.1)  # Alberty 2003b, from memory


def test_a_meter_reads_another_pH_than_the_concentration_and_it_costs_up_to_0_8_kJ_per_proton() -> None:
    # per proton: RT alpha sqrt(I)/(1 + 1.6 sqrt(I)) = 0.62 at 0.1 M and 0.81 at 0.25 M (Alberty 2003, section 1.2, from memory)
    released = {"glucose": -1, "ATP": -1, "ADP": 1, "G6P": 1}
    known = reference_table()
    for ionic_strength, per_proton in ((0.1, 0.615), (0.25, 0.81)):
        meter = replace(BENCH, ionic_strength_M=ionic_strength, pH=9.0)
        difference = energy(released, replace(meter, pH_scale="concentration")) - energy(released, meter)
        protons = known.uptake(released, meter).hydrogens
        assert difference / protons == pytest.approx(per_proton, abs=0.01)


# dissociation constants at I = 0 and 298.15 K: (reactant, charge of the product, its magnesiums) -> published p(K)
ACIDS = {  # Alberty 2003 and Alberty & Goldberg, Biochemistry 31:10610 (1992), from memory, unless another is named
    ("ATP", -4): 7.60, ("ATP", -3): 4.68, ("ADP", -3): 7.18, ("ADP", -2): 4.36, ("AMP", -2): 6.73, ("AMP", -1): 3.99,
    ("adenosine", 0): 3.47, ("Pi", -2): 7.22, ("PPi", -4): 9.46, ("PPi", -3): 6.72, ("PPi", -2): 2.26, ("G6P", -2): 6.42,
    ("G1P", -2): 6.50, ("F6P", -2): 6.27, ("FBP", -4): 6.65, ("FBP", -3): 6.05, ("glycerol3P", -2): 6.67,
    ("PEP", -3): 7.00, ("PG2", -3): 7.64, ("PG3", -3): 7.53, ("BPG13", -4): 7.96, ("GAP", -2): 5.70, ("DHAP", -2): 5.70,
    ("acetate", -1): 4.756,  # handbook of chemistry
    ("acetylP", -2): 4.95,  # Lipmann & Tuttle, J. Biol. Chem. 153:571 (1944), from memory
}  # fmt: skip
MAGNESIUM = {  # log K of Mg2+ + species, Alberty & Goldberg 1992, from memory
    ("ATP", -4, 0): 6.18, ("ATP", -3, 0): 3.63, ("ATP", -2, 1): 2.69, ("ADP", -3, 0): 4.65, ("ADP", -2, 0): 2.50,
    ("AMP", -2, 0): 2.79, ("Pi", -2, 0): 2.71,
}  # fmt: skip


@pytest.mark.parametrize(("name", "charge"), ACIDS)
def test_acids_dissociate_with_the_published_constants(name: str, charge: int) -> None:
    species = [s for s in reference_table().reactants[name].species if s.magnesiums == 0]
    base = next(s for s in species if s.charge == charge)
    acid = next(s for s in species if s.charge == charge + 1)
    assert (base.energy - acid.energy) / (RT * math.log(10)) == pytest.approx(ACIDS[name, charge], abs=0.015)


@pytest.mark.parametrize(("name", "charge", "magnesiums"), MAGNESIUM)
def test_magnesium_binds_with_the_published_constants(name: str, charge: int, magnesiums: int) -> None:
    known = reference_table()
    species = known.reactants[name].species
    bare = next(s for s in species if (s.charge, s.magnesiums) == (charge, magnesiums))
    complexed = next(s for s in species if (s.hydrogens, s.magnesiums) == (bare.hydrogens, magnesiums + 1))
    log_K = (bare.energy + known.magnesium_ion.energy - complexed.energy) / (RT * math.log(10))
    assert log_K == pytest.approx(MAGNESIUM[name, charge, magnesiums], abs=0.015)


@pytest.mark.parametrize(("celsius", "published"), [(5, 6.951), (15, 6.900), (25, 6.865), (37, 6.841)])
def test_the_equimolal_phosphate_standard_has_its_assigned_pH(celsius: float, published: float) -> None:
    """0.025 mol/kg KH2PO4 and Na2HPO4, I = 0.1: primary pH standard, assigned values from memory (IUPAC 2002; NIST SRM 186).

    Tests the pK and the enthalpy of phosphate, the extended Debye-Hueckel law and the pH scale of a meter together.
    """
    known = reference_table()
    phosphate = known.reactants["Pi"]
    conditions = Conditions(273.15 + celsius, published, 14.0, 0.1)

    def surplus(pH: float) -> float:
        at = Potentials.of(replace(conditions, pH=pH), known.magnesium_ion)
        acid = phosphate.species[1].at_temperature(at.temperature_K) - at.ion - 2 * at.proton
        base = phosphate.species[0].at_temperature(at.temperature_K) - 4 * at.ion - at.proton
        return base - acid

    slope = (surplus(7.1) - surplus(6.7)) / 0.4
    assert 6.7 - surplus(6.7) / slope == pytest.approx(published, abs=0.05)


def test_creatine_kinase_and_adenylate_kinase() -> None:
    toward_ATP = {"PCr": -1, "ADP": -1, "ATP": 1, "creatine": 1}
    K = constant(toward_ATP, Conditions(311.15, 7.0, 3.0, 0.25))
    assert abs(math.log10(K / 166)) < 0.1  # Lawson & Veech, J. Biol. Chem. 254:6528 (1979), from memory; 177 here
    for pMg in (3.5, 3.0, 2.5):
        assert (
            0.5 < constant({"ADP": -2, "ATP": 1, "AMP": 1}, replace(BENCH, pMg=pMg)) < 2
        )  # common practice, no source


# Handbook energies at pH 7 and 25 degC, from textbooks of biochemistry, from memory; they state neither magnesium nor ionic
# strength, so 3.5 kJ/mol either way is agreement. Table at pMg 3, I = 0.25; the last column is its difference.
HANDBOOK = [
    ("ATP hydrolysis", HYDROLYSIS, -30.5, -1.5),
    ("to AMP and PPi", {"ATP": -1, "H2O": -1, "AMP": 1, "PPi": 1}, -45.6, +0.3),
    ("glucose 6-phosphate", {"G6P": -1, "H2O": -1, "glucose": 1, "Pi": 1}, -13.8, +2.0),
    ("fructose 6-phosphate", {"F6P": -1, "H2O": -1, "fructose": 1, "Pi": 1}, -15.9, +1.2),
    ("glucose 1-phosphate", {"G1P": -1, "H2O": -1, "glucose": 1, "Pi": 1}, -20.9, +2.0),
    ("phosphoenolpyruvate", {"PEP": -1, "H2O": -1, "pyruvate": 1, "Pi": 1}, -61.9, -2.6),
    ("phosphocreatine", {"PCr": -1, "H2O": -1, "creatine": 1, "Pi": 1}, -43.0, -2.1),
    ("acetyl phosphate", {"acetylP": -1, "H2O": -1, "acetate": 1, "Pi": 1}, -43.1, -1.1),
    ("1,3-bisphosphoglycerate", {"BPG13": -1, "H2O": -1, "PG3": 1, "Pi": 1}, -49.3, -1.5),
    ("AMP", {"AMP": -1, "H2O": -1, "adenosine": 1, "Pi": 1}, -14.2, +0.5),
    ("pyrophosphate", {"PPi": -1, "H2O": -1, "Pi": 2}, -19.2, +0.3),
    ("glucose 6-phosphate isomerase", {"G6P": -1, "F6P": 1}, 1.7, +1.5),
    ("phosphofructokinase", {"ATP": -1, "F6P": -1, "ADP": 1, "FBP": 1}, -14.2, -1.5),
    ("aldolase", {"FBP": -1, "DHAP": 1, "GAP": 1}, 23.8, -0.6),
    ("triose phosphate isomerase", {"GAP": -1, "DHAP": 1}, -7.5, -0.2),
    ("glyceraldehyde 3-phosphate dehydrogenase", {"GAP": -1, "Pi": -1, "NAD": -1, "BPG13": 1, "NADH": 1}, 6.3, +0.9),
    ("phosphoglycerate mutase", {"PG3": -1, "PG2": 1}, 4.4, +1.3),
    ("lactate dehydrogenase", {"pyruvate": -1, "NADH": -1, "lactate": 1, "NAD": 1}, -25.1, +0.4),
    ("glycerol 3-phosphate dehydrogenase", {"DHAP": -1, "NADH": -1, "glycerol3P": 1, "NAD": 1}, -23.0, -2.1),
    ("hexokinase", {"ATP": -1, "glucose": -1, "ADP": 1, "G6P": 1}, -16.7, -3.4),
]
# used to set an entry, so no test of it: fructose 1,6-bisphosphatase -16.3, glycerol 3-phosphate -9.2, phosphoglycerate kinase
# -18.8. Left out: enolase, printed as +1.8 and +7.5; the table has -3.5, near the measured constants of 3 to 6.


@pytest.mark.parametrize(("name", "change", "handbook", "difference"), HANDBOOK, ids=[row[0] for row in HANDBOOK])
def test_handbook_energies_agree_within_3_5(
    name: str, change: dict[str, int], handbook: float, difference: float
) -> None:
    found = energy(change, BENCH)
    assert abs(found - handbook) < 3.5
    assert found - handbook == pytest.approx(difference, abs=0.06)  # as listed above


def test_the_measured_constant_of_pyruvate_kinase_wins_and_the_gap_is_shown() -> None:
    change = {"ATP": -1, "pyruvate": -1, "ADP": 1, "PEP": 1}
    found = reference_table().energy(change, Conditions(303.15, 7.4, 2.5, 0.25))
    assert found.measured is not None
    assert math.exp(-found.dG0 / (constants.R * 0.30315)) == pytest.approx(1.55e-4, rel=1e-6)  # McQuate & Utter 1959
    gap = math.exp((found.from_formation - found.dG0) / (constants.R * 0.30315))
    assert 25 < gap < 60
    backward = reference_table().energy({name: -n for name, n in change.items()}, Conditions(303.15, 7.4, 2.5, 0.25))
    assert backward.dG0 == pytest.approx(-found.dG0, abs=1e-12)


def broken(name: str, index: int, shift: float) -> Reference:
    """The table with one species moved by `shift` kJ/mol."""
    known = reference_table()
    reactant = known.reactants[name]
    species = [s._replace(energy=s.energy + shift * (i == index)) for i, s in enumerate(reactant.species)]
    out = copy.copy(known)
    out.reactants = {**known.reactants, name: replace(reactant, species=tuple(species))}
    out._by_name = {n: out.reactants[r.key] for n, r in known._by_name.items()}
    return out


@pytest.mark.parametrize(("name", "index", "shift"), [("ATP", 3, 3.0), ("ADP", 0, 0.2), ("Pi", 0, -0.5)])
def test_a_table_with_one_wrong_species_is_exposed(name: str, index: int, shift: float) -> None:
    table = broken(name, index, shift)
    bare = abs(energy(HYDROLYSIS, ALBERTY, table) + 36.04) < 0.02
    with_magnesium = abs(energy(HYDROLYSIS, replace(ALBERTY, pMg=3.0), table) + 32.5) < 0.1
    assert not (bare and with_magnesium)
