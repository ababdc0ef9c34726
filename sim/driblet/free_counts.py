"""Free counts where enzymes are lumped: total counts less what the enzymes hold on average.

A lumped network counts free and bound molecules together. What its enzymes hold is taken from the occupancies of their states at
steady state, each copy seeing what the others leave; with one copy that is exact as soon as its states have settled.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from driblet.lumping import lumped_enzymes
from driblet.system.mechanisms.turnover_noise import turnover_noise
from driblet.system.model import System

Array = NDArray[np.float64]
_PASSES = 3


def estimated_names(system: System) -> frozenset[str]:
    """Species and enzymes whose free counts this system does not simulate but estimate."""
    found: set[str] = set()
    for enzyme in lumped_enzymes(system):
        found.add(enzyme.name)
        found.update(name for state in enzyme.states for name, _ in state.holds)
    return frozenset(found - {s.name for s in system.held_species})


def free_counts(system: System, counts: NDArray[np.int64] | Array, omega: Array) -> Array:
    """Expected free counts, shape=(..., free species), of states whose counts are totals.

    counts : (..., free species); omega : copies per mol/L, shape that broadcasts against counts[..., 0].
    """
    column = {s.name: i for i, s in enumerate(system.free_species)}
    held = system.held_concentrations()
    total = np.asarray(counts, dtype=float)
    free = total.copy()
    enzymes = lumped_enzymes(system)
    bound = [np.zeros_like(total) for _ in enzymes]
    for _ in range(_PASSES):
        for k, enzyme in enumerate(enzymes):
            noise = turnover_noise(enzyme)
            copies = total[..., column[enzyme.name]]
            # one copy of its own kind less: that one finds its ligands itself
            seen = free + bound[k] / np.maximum(copies, 1.0)[..., None]
            names = {name for name, _ in noise.variables}
            c = {n: np.asarray(held[n]) if n in held else np.maximum(seen[..., column[n]], 0.0) / omega for n in names}
            share = noise.occupancies(noise.ligands(c, 1.0 / omega))
            now = np.zeros_like(total)
            for s, state in enumerate(enzyme.states):
                for name, number in state.holds:
                    if name in column:
                        now[..., column[name]] += number * copies * share[..., s]
            now[..., column[enzyme.name]] = copies * (1.0 - share[..., 0])
            free = free + bound[k] - now
            bound[k] = now
    return np.maximum(free, 0.0)
