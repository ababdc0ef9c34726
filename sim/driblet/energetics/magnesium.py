"""Free magnesium from total magnesium, and what a change of composition does to free magnesium and pH.

Sums run over the reactants of the table at their total concentrations; everything else is taken to bind neither
magnesium nor protons. Concentrations in mol/L.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import replace

from driblet.energetics.conditions import (
    REFERENCE_TEMPERATURE,
    Buffer,
    Conditions,
    ion_energy,
    proton_potential,
)
from driblet.energetics.transform import IonicSpecies, Potentials, Reactant, bound

HIGHEST_PMG = 14.0  # stands for no magnesium at all
LOWEST_PMG = -1.0
PK_WATER, WATER_ENTHALPY = 13.995, 55.815  # 298.15 K, I = 0, kJ/mol; Goldberg, Kishore & Lennen 2002, from memory
Load = Sequence[tuple[Reactant, float]]


class CannotBeMetError(ValueError):
    """No free magnesium or pH satisfies what is asked; the text says why."""


def _root(function: Callable[[float], float], low: float, high: float, tolerance: float) -> float:
    from scipy.optimize import brentq  # 0.1 s to import, and most files never come here

    return float(brentq(function, low, high, xtol=tolerance))


def total_magnesium(load: Load, conditions: Conditions, magnesium_ion: IonicSpecies) -> float:
    """Free and bound magnesium at the pMg of `conditions`, mol/L."""
    assert conditions.pMg is not None
    at = Potentials.of(conditions, magnesium_ion)
    return 10.0**-conditions.pMg + math.fsum(amount * bound(reactant, at).magnesiums for reactant, amount in load)


def solved_pMg(total: float, load: Load, conditions: Conditions, magnesium_ion: IonicSpecies) -> float:
    """The pMg at which free and bound magnesium sum to `total`, mol/L.

    conditions : pH and ionic strength stated, their pMg ignored. Returns 14 for a total of zero. Raises CannotBeMetError
    beyond 10 mol/L.
    """

    def surplus(pMg: float) -> float:
        return total_magnesium(load, replace(conditions, pMg=pMg), magnesium_ion) - total

    if surplus(HIGHEST_PMG) >= 0:
        return HIGHEST_PMG
    if surplus(LOWEST_PMG) < 0:
        raise CannotBeMetError(f"{total:g} mol/L is more magnesium than any solution holds")
    return _root(surplus, LOWEST_PMG, HIGHEST_PMG, 1e-12)


def check_ionic_strength(pMg: float, total: float, ionic_strength: float) -> None:
    """Raise CannotBeMetError when free magnesium alone would bring more ionic strength than is stated, mol/L."""
    least = 3 * 10.0**-pMg  # half of 4 c for the ion and of 2 c for its counter-ions
    if least > ionic_strength:
        raise CannotBeMetError(
            f"{total * 1e3:.4g} mM would leave {10.0**-pMg * 1e3:.4g} mM free, which with its counter-ions alone brings an "
            f"ionic strength of {least:.3g} M; {ionic_strength:g} M is stated"
        )


def buffer_charge(buffer: Buffer, conditions: Conditions) -> float:
    """Mean charge of a buffer molecule at the pH of `conditions`."""
    T = conditions.temperature_K
    assert conditions.ionic_strength_M is not None
    ion = ion_energy(T, conditions.ionic_strength_M)
    RT = conditions.RT_kJ_per_mol
    RT0 = RT * REFERENCE_TEMPERATURE / T
    acid = buffer.acid_charge
    ionisation = buffer.pK * RT0 * math.log(10)  # dG of acid = base + H+ at 298.15 K and I = 0
    share = T / REFERENCE_TEMPERATURE
    ionisation = ionisation * share + buffer.enthalpy_kJ_per_mol * (1 - share)
    ionisation += (acid**2 - (acid - 1) ** 2) * ion + proton_potential(conditions)
    return acid - 1 / (1 + math.exp(min(ionisation / RT, 700.0)))


def _water_charge(conditions: Conditions) -> float:
    """[H+] - [OH-], mol/L."""
    T = conditions.temperature_K
    assert conditions.ionic_strength_M is not None
    RT = conditions.RT_kJ_per_mol
    ion = ion_energy(T, conditions.ionic_strength_M)
    share = T / REFERENCE_TEMPERATURE
    water = PK_WATER * RT * math.log(10) + WATER_ENTHALPY * (1 - share)
    proton = math.exp((proton_potential(conditions) + ion) / RT)
    hydroxide = math.exp((-water - proton_potential(conditions) + ion) / RT)
    return proton - hydroxide


def solution_charge(load: Load, buffer: Buffer, total_Mg: float, conditions: Conditions, ion: IonicSpecies) -> float:
    """Net charge of reactants, buffer, free magnesium and water ions, mol/L, free magnesium solved from its total."""
    there = replace(conditions, pMg=solved_pMg(total_Mg, load, conditions, ion))
    at = Potentials.of(there, ion)
    charge = math.fsum(amount * bound(reactant, at).charge for reactant, amount in load)
    charge += buffer.concentration_M * buffer_charge(buffer, there) + _water_charge(there)
    assert there.pMg is not None
    return charge + 2 * 10.0**-there.pMg


def pH_after(before: Load, after: Load, buffer: Buffer, conditions: Conditions, magnesium_ion: IonicSpecies) -> float:
    """The pH once the composition has gone from `before` to `after`, nothing entering or leaving the solution.

    Total magnesium and the charge of the inert ions stay; electroneutrality then fixes the pH. `conditions` states pH,
    pMg and ionic strength of `before`, and the ionic strength is taken to stay. Raises CannotBeMetError when it would leave
    the range 0 to 14.
    """
    total = total_magnesium(before, conditions, magnesium_ion)
    inert = solution_charge(before, buffer, total, conditions, magnesium_ion)

    def surplus(pH: float) -> float:
        return solution_charge(after, buffer, total, replace(conditions, pH=pH), magnesium_ion) - inert

    if surplus(0.0) < 0 or surplus(14.0) > 0:
        raise CannotBeMetError("the buffer is overrun: the pH would leave the range 0 to 14")
    return _root(surplus, 0.0, 14.0, 1e-9)
