"""Legendre-transformed energies of reactants that are mixtures of ionic and magnesium-bound species.

At fixed pH and pMg the species of one reactant (its pseudoisomers) stay in equilibrium with each other, and

    dfG'_j = dfG_j(T) - z_j^2 g - N_H,j mu_H - N_Mg,j mu_Mg,      dfG' = -RT ln sum_j exp(-dfG'_j/RT),

dfG_j(T) = dfG_j T/T0 + dfH_j (1 - T/T0) with T0 = 298.15 K (van 't Hoff), g = -RT ln gamma of a singly charged ion, mu_H and
mu_Mg the potentials that pH and pMg fix. Source: Alberty, Thermodynamics of Biochemical Reactions (2003), chapter 4;
for magnesium Alberty, J. Phys. Chem. B 107:12324 (2003); names and conventions: Recommendations for nomenclature and tables
in biochemical thermodynamics (IUPAC-IUBMB 1994). All energies in kJ/mol, c0 = 1 mol/L.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import NamedTuple

from driblet.energetics.conditions import REFERENCE_TEMPERATURE, Conditions, ion_energy, proton_potential
from driblet.quantities import thermal_energy


class IonicSpecies(NamedTuple):
    """One species at 298.15 K and zero ionic strength: energies of formation in kJ/mol, charge, bound H and Mg."""

    energy: float
    enthalpy: float | None
    charge: int
    hydrogens: int
    magnesiums: int = 0

    @property
    def electrons(self) -> int:
        """What binding H+ or Mg2+ leaves unchanged, N_H + 2 N_Mg - z: equal in all species of one reactant."""
        return self.hydrogens + 2 * self.magnesiums - self.charge

    def at_temperature(self, temperature_K: float) -> float:
        """dfG at `temperature_K` and zero ionic strength; without an enthalpy only 298.15 K is known (ValueError)."""
        if temperature_K == REFERENCE_TEMPERATURE:
            return self.energy
        if self.enthalpy is None:
            raise ValueError("an enthalpy is needed away from 298.15 K")
        share = temperature_K / REFERENCE_TEMPERATURE
        return self.energy * share + self.enthalpy * (1 - share)


@dataclass(frozen=True)
class Reactant:
    """A reactant as a biochemist counts it: the sum of its species.

    Attributes: key, name, aliases; atoms : elements other than H and Mg (or moieties whose zero is a convention) that a
    reaction must conserve; species, the first one the most basic; source; sd_kJ_per_mol : of the energy, None where the
    source has none; entropy_sd : kJ/(mol K), how uncertain an estimated dependence on temperature is, 0 where it is known.
    """

    key: str
    name: str
    atoms: Mapping[str, int]
    species: tuple[IonicSpecies, ...]
    source: str
    aliases: tuple[str, ...] = ()
    note: str = ""
    sd_kJ_per_mol: float | None = None
    entropy_sd: float = 0.0

    @property
    def binds_magnesium(self) -> bool:
        """Whether any species holds magnesium."""
        return any(s.magnesiums for s in self.species)

    @property
    def electrons(self) -> int:
        """N_H + 2 N_Mg - z of its species; a reaction must conserve the sum."""
        return self.species[0].electrons


@dataclass(frozen=True)
class Potentials:
    """What conditions make of a species: temperature, potentials of H+ and free Mg2+, energy of a unit charge, kJ/mol.

    `magnesium` is None where pMg is not stated; species that hold magnesium then have no energy.
    """

    temperature_K: float
    proton: float
    magnesium: float | None
    ion: float

    @classmethod
    def of(cls, conditions: Conditions, magnesium_ion: IonicSpecies) -> Potentials:
        """Potentials at `conditions`, which must state pH and ionic strength; magnesium_ion : Mg2+ of the table."""
        T = conditions.temperature_K
        assert conditions.ionic_strength_M is not None
        ion = ion_energy(T, conditions.ionic_strength_M)
        magnesium = None
        if conditions.pMg is not None:
            aqueous = magnesium_ion.at_temperature(T) - magnesium_ion.charge**2 * ion
            magnesium = aqueous - conditions.RT_kJ_per_mol * math.log(10) * conditions.pMg
        return cls(T, proton_potential(conditions), magnesium, ion)


Terms = Sequence[tuple[Reactant, int]]  # a reaction: reactants and net stoichiometric numbers, water included


def species_energies(reactant: Reactant, at: Potentials) -> list[float]:
    """dfG'_j of each species, kJ/mol."""
    energies = []
    for s in reactant.species:
        energy = s.at_temperature(at.temperature_K) - s.charge**2 * at.ion - s.hydrogens * at.proton
        if s.magnesiums:
            if at.magnesium is None:
                raise ValueError(f"{reactant.key} binds magnesium: pMg is needed")
            energy -= s.magnesiums * at.magnesium
        energies.append(energy)
    return energies


def species_shares(reactant: Reactant, at: Potentials) -> list[float]:
    """Equilibrium mole fraction of each species, summing to 1."""
    energies = species_energies(reactant, at)
    lowest, RT = min(energies), thermal_energy(at.temperature_K)
    weights = [math.exp(-(e - lowest) / RT) for e in energies]
    total = math.fsum(weights)
    return [w / total for w in weights]


def transformed_energy(reactant: Reactant, at: Potentials) -> float:
    """Standard transformed Gibbs energy of formation dfG', kJ/mol."""
    energies = species_energies(reactant, at)
    lowest, RT = min(energies), thermal_energy(at.temperature_K)
    return lowest - RT * math.log(math.fsum(math.exp(-(e - lowest) / RT) for e in energies))


class Bound(NamedTuple):
    """Means over the species of a reactant: hydrogens, magnesiums and charge per molecule."""

    hydrogens: float
    magnesiums: float
    charge: float


def bound(reactant: Reactant, at: Potentials) -> Bound:
    """Mean hydrogens, magnesiums and charge of a molecule of `reactant`."""
    shares = species_shares(reactant, at)
    pairs = list(zip(shares, reactant.species, strict=True))
    return Bound(
        math.fsum(x * s.hydrogens for x, s in pairs),
        math.fsum(x * s.magnesiums for x, s in pairs),
        math.fsum(x * s.charge for x, s in pairs),
    )


def reaction_energy(terms: Terms, at: Potentials) -> float:
    """dG0' of a reaction, kJ/mol."""
    return math.fsum(number * transformed_energy(reactant, at) for reactant, number in terms)


def uptake(terms: Terms, at: Potentials) -> Bound:
    """Protons and magnesium ions that one turn of a reaction takes up (negative: releases), and its change of charge.

    d(dG0')/d(pH) = RT ln 10 times the first, d(dG0')/d(pMg) = RT ln 10 times the second (Alberty 2003, section 4.6).
    """
    parts = [(number, bound(reactant, at)) for reactant, number in terms]
    return Bound(*(math.fsum(n * b[i] for n, b in parts) for i in range(3)))
