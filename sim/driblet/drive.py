"""Whether a system is driven: the affinities of the cycles that turn over held species.

A cycle over the free species changes only held ones; its affinity -sum_r c_r (dG0'_r + RT sum_held nu_ir ln c_i) is the
free energy one turn spends (Hill, Free Energy Transduction and Biochemical Cycle Kinetics, 1989; Polettini & Esposito,
J. Chem. Phys. 141:024117, 2014). A system without affinity has an equilibrium law, driven ones do not.
"""

from __future__ import annotations

import math
from collections.abc import Collection
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.energetics.cycles import CLOSURE_TOLERANCE, emergent_cycles
from driblet.energetics.equilibrium import reachable
from driblet.system import System
from driblet.system.build import stoichiometric_matrix


class EmergentCycle(NamedTuple):
    """A cycle that turns over held species.

    Attributes: reactions : int64, shape=(reactions of the system,), how often each runs forward in one turn, in the
    direction the cycle is driven; affinity_kJ_per_mol : what one turn spends, 0 where held concentrations agree.
    """

    reactions: NDArray[np.int64]
    affinity_kJ_per_mol: float


def runnable(system: System, present: Collection[str] | None = None) -> NDArray[np.bool_]:
    """Which reactions can ever run, bool, shape=(reactions,).

    present : names of the free species there at the start; default all with an amount above zero, and
    those added later. Held ones are always there. A one-way reaction runs from its reactants only.
    """
    index = {s.name: i for i, s in enumerate(system.species)}
    here = {i for s, i in zip(system.species, index.values(), strict=True) if s.held}
    if present is None:
        here |= {index[s.name] for s in system.free_species if s.mean_copies(1.0) > 0}
        here |= {index[addition.species] for addition in system.additions}
    else:
        here |= {index[name] for name in present}
    left = [{index[name] for name, _ in r.equation.reactants} for r in system.reactions]
    right = [{index[name] for name, _ in r.equation.products} for r in system.reactions]
    for r, reaction in enumerate(system.reactions):
        if reaction.backward is None:
            right[r].add(-1 - r)  # stands for something that only this reaction makes, so that it never runs backward
    return np.array(reachable(left, right, here)[1], dtype=bool)


def ln_constants(system: System) -> NDArray[np.float64]:
    """ln K' less the share of held species, shape=(reactions,): at equilibrium sum_free nu_ir ln c_i equals it.

    NaN for a one-way reaction.
    """
    held, RT = system.held_concentrations(), system.conditions.RT_kJ_per_mol
    out = np.full(len(system.reactions), np.nan)
    for r, reaction in enumerate(system.reactions):
        if reaction.dG0_kJ_per_mol is not None:
            share = sum(number * math.log(held[n]) for n, number in reaction.equation.change.items() if n in held)
            out[r] = -reaction.dG0_kJ_per_mol / RT - share
    return out


def emergent_affinities(system: System, present: Collection[str] | None = None) -> list[EmergentCycle]:
    """A basis of the emergent cycles of the reversible reactions that can run, and what each spends.

    present : as for `runnable`. An affinity within the closure tolerance of zero is returned as 0.
    """
    ln_K = ln_constants(system)
    among = np.flatnonzero(runnable(system, present) & ~np.isnan(ln_K))
    if not len(among):
        return []
    matrix = stoichiometric_matrix([s.name for s in system.species], [system.reactions[r] for r in among])
    held = np.array([s.held for s in system.species])
    found = []
    for vector in emergent_cycles(matrix, held):
        affinity = system.conditions.RT_kJ_per_mol * float(vector @ ln_K[among])
        if abs(affinity) <= CLOSURE_TOLERANCE * int(np.abs(vector).sum()):
            affinity = 0.0
        weights = np.zeros(len(system.reactions), dtype=np.int64)
        weights[among] = -vector if affinity < 0 else vector
        found.append(EmergentCycle(weights, abs(affinity)))
    return found


def is_driven(system: System, present: Collection[str] | None = None) -> bool | None:
    """Whether some cycle of the reactions that can run has affinity.

    None when no reversible cycle has any but one-way reactions can run, whose affinity is undefined.
    """
    if any(cycle.affinity_kJ_per_mol for cycle in emergent_affinities(system, present)):
        return True
    can_run = runnable(system, present)
    if any(can_run[r] and reaction.backward is None for r, reaction in enumerate(system.reactions)):
        return None
    return False
