"""The macroscopic equilibrium composition that energies imply, with conserved sums and held concentrations imposed.

Solved in the dual: c_i = exp(g_i + sum_l L_li lambda_l) satisfies every equilibrium condition for any lambda, and the
conserved sums fix lambda as the minimum of a convex function (White, Johnson & Dantzig, J. Chem. Phys. 28:751, 1958, in
its dual form).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from driblet.energetics.cycles import conservation_laws

Array = NDArray[np.float64]


class NoEquilibriumError(ValueError):
    """No composition satisfies all equilibrium conditions: the system is driven or the energies do not close."""


def reachable(reactants: list[set[int]], products: list[set[int]], present: set[int]) -> tuple[set[int], list[bool]]:
    """Species that can come to exist from those present, and which reversible reactions can ever run.

    reactants, products : indices of species each side needs, one set per reaction.
    """
    here = set(present)
    active = [False] * len(reactants)
    changed = True
    while changed:
        changed = False
        for r, (left, right) in enumerate(zip(reactants, products, strict=True)):
            if not active[r] and (left <= here or right <= here):
                active[r] = True
                here |= left | right
                changed = True
    return here, active


def equilibrium_composition(stoichiometry: NDArray[np.int64], ln_K: Array, initial: Array) -> Array:
    """Equilibrium concentrations of free species.

    stoichiometry : shape=(species, reactions), free species only, all reversible and able to run; ln_K : shape=(reactions,),
    ln K' less the held species' share; initial : mol/L, shape=(species,), only its conserved sums matter.
    Returns mol/L, shape=(species,). Raises NoEquilibriumError for a driven or unclosed system.
    """
    n = stoichiometry.shape[0]
    if n == 0:
        return np.zeros(0)
    S = stoichiometry.astype(float)
    g, *_ = np.linalg.lstsq(S.T, ln_K, rcond=None)
    if np.max(np.abs(S.T @ g - ln_K), initial=0.0) > 1e-6 * max(1.0, float(np.max(np.abs(ln_K), initial=0.0))):
        raise NoEquilibriumError("the equilibrium conditions contradict each other")
    laws = conservation_laws(stoichiometry).astype(float)
    if not len(laws):
        return np.asarray(np.exp(g))
    totals = laws @ initial
    # sums that are all zero, as when a species and its partner come from nothing together, set no scale
    scale = float(np.max(np.abs(totals))) or float(np.max(initial)) or 1.0
    guess = np.log(np.maximum(initial, 1e-3 * scale))
    multipliers, *_ = np.linalg.lstsq(laws.T, guess - g, rcond=None)
    return _solve_dual(laws, totals, g, multipliers, scale)


def _solve_dual(laws: Array, totals: Array, g: Array, start: Array, scale: float) -> Array:
    def concentrations(multipliers: Array) -> Array:
        return np.asarray(np.exp(np.minimum(g + laws.T @ multipliers, 600.0)))

    multipliers = start
    c = concentrations(multipliers)
    value = float(c.sum() - multipliers @ totals)
    for _ in range(500):
        gradient = laws @ c - totals
        size = np.abs(laws) @ c + np.abs(totals)
        if np.all(np.abs(gradient) <= 1e-13 * size):
            break
        hessian = (laws * c) @ laws.T
        hessian[np.diag_indices_from(hessian)] += 1e-300 + 1e-15 * np.trace(hessian)
        step = -np.linalg.lstsq(hessian, gradient, rcond=1e-16)[0]
        # a multiplier that moves by more than a few units would leave the region where the quadratic model holds
        largest = float(np.max(np.abs(laws.T @ step)))
        fraction = min(1.0, 5.0 / largest) if largest > 0 else 1.0
        for _ in range(60):
            trial = multipliers + fraction * step
            c_trial = concentrations(trial)
            trial_value = float(c_trial.sum() - trial @ totals)
            if np.isfinite(trial_value) and trial_value <= value + 1e-15 * (abs(value) + scale):
                break
            fraction *= 0.5
        else:
            break
        multipliers, c, value = trial, c_trial, trial_value
    if np.any(np.abs(laws @ c - totals) > 1e-8 * (np.abs(laws) @ c + np.abs(totals))):
        raise NoEquilibriumError("the solver found no composition with these conserved sums")
    return c
