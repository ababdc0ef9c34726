"""What transformed energies must obey whatever the numbers: derivatives, closure, mass action of every complex, activity laws."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants
from scipy.optimize import brentq

from driblet.energetics.conditions import Buffer, Conditions, debye_hueckel_alpha, ion_energy
from driblet.energetics.magnesium import pH_after, solved_pMg, total_magnesium
from driblet.energetics.reference import reference_table
from driblet.energetics.transform import Potentials, bound, species_shares

anywhere = st.builds(
    Conditions,
    st.floats(275, 320),
    st.floats(5, 9.5),
    st.floats(1.5, 7),
    st.floats(0.0, 0.35),
    st.sampled_from(["activity", "concentration"]),
)
REACTIONS = {
    "hydrolysis": {"ATP": -1, "H2O": -1, "ADP": 1, "Pi": 1},
    "kinase": {"ATP": -1, "glucose": -1, "ADP": 1, "G6P": 1},
    "phosphatase": {"G6P": -1, "H2O": -1, "glucose": 1, "Pi": 1},
    "adenylate kinase": {"ADP": -2, "ATP": 1, "AMP": 1},
    "creatine kinase": {"PCr": -1, "ADP": -1, "ATP": 1, "creatine": 1},
    "futile pair": {"FBP": -1, "H2O": -1, "F6P": 1, "Pi": 1},
    "phosphofructokinase": {"ATP": -1, "F6P": -1, "ADP": 1, "FBP": 1},
}


def energy(change: dict[str, int], conditions: Conditions) -> float:
    known = reference_table()
    return known.from_formation(known.terms(change), conditions)


@given(anywhere)
def test_energies_close_every_cycle_at_any_conditions(conditions: Conditions) -> None:
    found = {name: energy(change, conditions) for name, change in REACTIONS.items()}
    assert found["kinase"] + found["phosphatase"] - found["hydrolysis"] == pytest.approx(0, abs=1e-9)
    assert found["phosphofructokinase"] + found["futile pair"] - found["hydrolysis"] == pytest.approx(0, abs=1e-9)


@given(anywhere, st.sampled_from(sorted(REACTIONS)))
def test_slopes_in_pH_and_pMg_are_the_uptake_of_protons_and_magnesium(conditions: Conditions, name: str) -> None:
    """Alberty 2003, section 4.6: the derivatives of the transformed energy are numbers of bound ligands."""
    change, step = REACTIONS[name], 1e-4
    found = reference_table().sensitivity(change, conditions)
    for key, analytic in (("pH", found.per_pH), ("pMg", found.per_pMg)):
        up, down = (
            energy(change, replace(conditions, **{key: getattr(conditions, key) + d}))  # type: ignore[arg-type]
            for d in (step, -step)
        )
        assert (up - down) / (2 * step) == pytest.approx(analytic, abs=1e-5)


@given(anywhere)
def test_at_zero_ionic_strength_shares_follow_the_law_of_mass_action_with_the_stability_constants(
    c: Conditions,
) -> None:
    """ATP from published constants alone (Alberty & Goldberg 1992, from memory), at 298.15 K and I = 0."""
    c = replace(c, temperature_K=298.15, ionic_strength_M=0.0)
    h, mg = 10.0**-c.pH, 10.0**-c.pMg  # type: ignore[operator]
    weights = [
        1.0,
        h * 10**7.60,
        h**2 * 10 ** (7.60 + 4.68),
        mg * 10**6.18,
        h * 10**7.60 * mg * 10**3.63,
        mg**2 * 10 ** (6.18 + 2.69),
    ]
    known = reference_table()
    shares = species_shares(known.reactants["ATP"], Potentials.of(c, known.magnesium_ion))
    assert np.allclose(shares, np.array(weights) / sum(weights), atol=0.005)


# Debye-Hueckel limiting slope A = alpha / ln 10 in (kg/mol)^0.5, handbook of chemistry, from memory
@pytest.mark.parametrize(("celsius", "slope"), [(0, 0.4918), (10, 0.4989), (25, 0.5115), (37, 0.5235), (40, 0.5262)])
def test_the_limiting_slope(celsius: float, slope: float) -> None:
    assert debye_hueckel_alpha(273.15 + celsius) / math.log(10) == pytest.approx(slope, rel=0.005)


@pytest.mark.parametrize(("molal", "gamma"), [(0.01, 0.902), (0.05, 0.820), (0.1, 0.778), (0.2, 0.735)])
def test_activity_coefficients_of_sodium_chloride(molal: float, gamma: float) -> None:
    """Robinson & Stokes, Electrolyte Solutions (1959), from memory: within 3 %, what one parameter for all salts can do."""
    found = math.exp(-ion_energy(298.15, molal) / (constants.R * 0.29815))
    assert found == pytest.approx(gamma, rel=0.03)


def test_carrying_an_energy_over_two_steps_is_carrying_it_once() -> None:
    known = reference_table()
    a, b, c = (Conditions(T, pH, pMg, 0.1) for T, pH, pMg in ((298.15, 7, 3), (310.15, 7.4, 4), (303.15, 8, 2)))
    change = REACTIONS["kinase"]
    once = known.carried(change, -16.7, a, c)
    assert known.carried(change, known.carried(change, -16.7, a, b), b, c) == pytest.approx(once, abs=1e-10)
    assert known.carried(change, once, c, a) == pytest.approx(-16.7, abs=1e-10)


def test_temperature_moves_ln_K_by_the_enthalpy() -> None:
    """van 't Hoff at I = 0 and high pH and pMg, where one species of each reactant is left: dH of the bare reaction.

    ATP4- + H2O = ADP3- + HPO4 2- + H+: -20.5 kJ/mol (Alberty & Goldberg 1992, from memory); H+ has none.
    """
    change = REACTIONS["hydrolysis"]

    def ln_K(T: float) -> float:
        protons = 1  # released at pH 12: the potential of H+ taken out to leave the bare constant
        bare = energy(change, Conditions(T, 12.0, 12.0, 0.0)) + protons * constants.R * T / 1000 * math.log(10) * 12
        return -bare / (constants.R * T / 1000)

    slope = (ln_K(300.0) - ln_K(296.0)) / (1 / 300.0 - 1 / 296.0)
    assert -slope * constants.R / 1000 == pytest.approx(-20.5, abs=0.1)


def oracle_total_magnesium(ATP: float, ADP: float, free: float, h: float, ionic_strength: float) -> float:
    """Free and bound magnesium from stability constants and activity coefficients, species by species."""
    A = 0.5106 * math.sqrt(ionic_strength) / (1 + 1.6 * math.sqrt(ionic_strength))

    def at(log_K: float, charges: tuple[int, int, int]) -> float:
        ligand, metal, whole = charges  # log K falls by A times the sum of z^2 that binding removes
        return float(10 ** (log_K - A * (ligand**2 + metal**2 - whole**2)))

    def acid(pK: float, base: int) -> float:
        # h is an activity: only the charges of the ligand change
        return h * 10 ** (pK - A * (base**2 - (base + 1) ** 2))

    def nucleotide(
        total: float, z: int, pK: tuple[float, float], K: tuple[float, float], second: float | None
    ) -> float:
        h1 = acid(pK[0], z)
        h2 = h1 * acid(pK[1], z + 1)
        m1 = free * at(K[0], (z, 2, z + 2))
        hm = h1 * free * at(K[1], (z + 1, 2, z + 3))
        m2 = m1 * free * at(second, (z + 2, 2, z + 4)) if second else 0.0
        return total * (m1 + hm + 2 * m2) / (1 + h1 + h2 + m1 + hm + m2)

    bound_ATP = nucleotide(ATP, -4, (7.60, 4.68), (6.18, 3.63), 2.69)
    return free + bound_ATP + nucleotide(ADP, -3, (7.18, 4.36), (4.65, 2.50), None)


@pytest.mark.parametrize(
    ("total", "ATP", "ADP", "pH"), [(0.001, 0.004, 0.001, 7.2), (0.012, 0.008, 0.004, 7.8), (0.005, 0.004, 0.0, 6.5)]
)
def test_free_magnesium_against_a_hand_written_balance(total: float, ATP: float, ADP: float, pH: float) -> None:
    """Published constants (Alberty & Goldberg 1992, from memory), solved by mass balance without any energy."""
    known = reference_table()
    free = brentq(lambda m: oracle_total_magnesium(ATP, ADP, m, 10.0**-pH, 0.15) - total, 1e-12, total)
    load = [(known.reactants["ATP"], ATP), (known.reactants["ADP"], ADP)]
    pMg = solved_pMg(total, load, Conditions(298.15, pH, None, 0.15), known.magnesium_ion)
    assert pMg == pytest.approx(-math.log10(free), abs=0.01)


@given(anywhere, st.floats(0, 0.02))
def test_free_magnesium_restores_its_total(conditions: Conditions, ATP: float) -> None:
    known = reference_table()
    load = [(known.reactants["ATP"], ATP), (known.reactants["Pi"], 0.005)]
    conditions = replace(conditions, ionic_strength_M=0.35)
    total = total_magnesium(load, conditions, known.magnesium_ion)
    assert solved_pMg(total, load, conditions, known.magnesium_ion) == pytest.approx(conditions.pMg, abs=1e-9)


def test_protons_of_hydrolysis_against_the_capacity_of_the_buffer() -> None:
    """Van Slyke: d pH = -protons / (ln 10 c K h / (K + h)^2), the capacity of the reactants themselves added."""
    known = reference_table()
    hepes = Buffer("HEPES", 0.05, 7.564, 20.4, 0)
    conditions = Conditions(298.15, 7.4, 2.5, 0.15)
    amount = 1e-4
    before = [(known.reactants["ATP"], 0.004), (known.reactants["ADP"], 0.001), (known.reactants["Pi"], 0.001)]
    after = [(r, c + amount * (-1 if r.key == "ATP" else 1)) for r, c in before]
    found = pH_after(before, after, hepes, conditions, known.magnesium_ion) - 7.4
    released = -known.uptake(REACTIONS["hydrolysis"], conditions).hydrogens * amount
    # HEPES: zwitterion to -1, so that its pK on the scale of activities falls by 0.51 sqrt(I)/(1 + 1.6 sqrt(I))
    pK = 7.564 - 0.5107 * math.sqrt(0.15) / (1 + 1.6 * math.sqrt(0.15))
    ratio = 10 ** (7.4 - pK)
    capacity = math.log(10) * 0.05 * ratio / (1 + ratio) ** 2
    step = 1e-4
    for reactant, c in before:
        low, high = (
            bound(reactant, Potentials.of(replace(conditions, pH=7.4 + d), known.magnesium_ion)).hydrogens
            for d in (-step, step)
        )
        capacity += c * (low - high) / (2 * step)
    assert found < 0
    assert found == pytest.approx(-released / capacity, rel=0.05)


def test_the_buffer_alone_stays_where_it_is() -> None:
    known = reference_table()
    tris = Buffer("Tris", 0.02, 8.072, 47.45, 1)
    load = [(known.reactants["ATP"], 0.002), (known.reactants["H2O"], 1.0)]
    conditions = Conditions(310.15, 8.1, 3.0, 0.1)
    assert pH_after(load, load, tris, conditions, known.magnesium_ion) == pytest.approx(8.1, abs=1e-6)
