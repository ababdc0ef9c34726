"""Standard transformed Gibbs energies of reaction, from constants, from formation or from other reactions.

Conventions: c0 = 1 mol/L; dG0' in kJ/mol; K' = exp(-dG0'/RT), dimensionless relative to c0; water is the solvent at
activity 1. Source: Alberty, Thermodynamics of Biochemical Reactions (2003), chapters 1 and 4.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np

from driblet.quantities import thermal_energy

LARGEST_EXPONENT = 690.0  # |dG0'/RT| beyond this makes K' or 1/K' leave the range of a double


def equilibrium_constant(dG0_kJ_per_mol: float, temperature_K: float) -> float:
    """K' = exp(-dG0'/RT). Raises OverflowError when K' under- or overflows a double."""
    exponent = -dG0_kJ_per_mol / thermal_energy(temperature_K)
    if abs(exponent) > LARGEST_EXPONENT:
        raise OverflowError(f"K' = exp({exponent:.4g}) is out of the range of a double")
    return math.exp(exponent)


def standard_energy(K: float, temperature_K: float) -> float:
    """dG0' = -RT ln K', kJ/mol; K > 0."""
    return -thermal_energy(temperature_K) * math.log(K)


def energy_of_formation(change: Mapping[str, int], formation: Mapping[str, float]) -> float:
    """dG0' as the sum of formation energies, kJ/mol.

    change : net stoichiometric number per species, water included. Raises KeyError naming a species without one.
    """
    return math.fsum(number * formation[name] for name, number in change.items())


def energy_by_combination(
    change: Mapping[str, int], known: Sequence[tuple[Mapping[str, int], float]]
) -> tuple[float, list[float]] | None:
    """dG0' of a reaction that is a sum of reactions of known energy (Hess), such as hydrolyses.

    change : net stoichiometric numbers, water left out. known : (stoichiometric numbers, dG0' in kJ/mol) each.
    Returns (dG0', how often each known reaction is used), or None when the reaction is no such combination.
    """
    names = sorted(set(change).union(*(numbers for numbers, _ in known)))
    matrix = np.array([[numbers.get(name, 0) for numbers, _ in known] for name in names], dtype=float)
    target = np.array([change.get(name, 0) for name in names], dtype=float)
    if matrix.size == 0:
        return None
    weights, *_ = np.linalg.lstsq(matrix, target, rcond=None)
    if np.max(np.abs(matrix @ weights - target), initial=0.0) > 1e-9:
        return None
    return float(weights @ np.array([energy for _, energy in known])), [float(w) for w in weights]
