"""Readouts of counts: expressions evaluated over whole arrays of states, the Gibbs energy of the next firing among them.

gibbs(r) is the Gibbs energy of ONE forward transition n -> n + nu: w+(n)/w-(n + nu) = exp(-dG(n)/RT) exactly, so it is
finite when a product is absent and +inf when a reactant is exhausted. It is a difference of Gibbs energies of two states, so
what stands on both sides cancels: whether a catalyst is there decides how fast a reaction goes, not its energy. Where an enzyme
is lumped, counts are totals: a plain name is then the free count as estimated from the enzyme's states (free_counts.py),
total() and gibbs() take the counts.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from driblet.free_counts import estimated_names, free_counts
from driblet.system.expressions import Expression, Named, Node, Number, Operation, Reference
from driblet.system.model import Reaction, System

Array = NDArray[np.float64]
_ARITHMETIC: dict[str, Callable[[Array, Array], Array]] = {
    "+": np.add,
    "-": np.subtract,
    "*": np.multiply,
    "/": np.divide,
}


def evaluate(system: System, expression: Expression, counts: NDArray[np.int64], omega: Array) -> Array:
    """Value of an expression in each state; undefined ratios are NaN, exhausted reactants make gibbs() +inf.

    counts : (..., free species), copies; omega : copies per mol/L, shape that broadcasts against counts[..., 0].
    """
    result = extended(system, expression.root, counts, omega)
    if expression.root.dimension != (0, 1):
        result[~np.isfinite(result)] = np.nan
    return result


def extended(system: System, root: Node, counts: NDArray[np.int64], omega: Array) -> Array:
    """Value of a parsed expression in the extended reals: x/0 is infinite, 0/0 is NaN. Arguments as for `evaluate`."""
    column = {s.name: i for i, s in enumerate(system.free_species)}
    held = system.held_concentrations()
    estimated = estimated_names(system)
    cache: list[Array] = []

    def free(name: str) -> Array:
        if name not in estimated:
            return counts[..., column[name]].astype(float)
        if not cache:
            cache.append(free_counts(system, counts, omega))
        return cache[0][..., column[name]]

    def value(node: Node) -> Array:
        if isinstance(node, Number):
            return np.asarray(node.value)
        if isinstance(node, Named):
            return value(node.node)
        if isinstance(node, Operation):
            return _ARITHMETIC[node.operator](value(node.left), value(node.right))
        return referred(node)

    def referred(node: Reference) -> Array:
        if node.kind == "gibbs":
            return transition_energy(system, system.reaction(node.name), counts, omega)
        of = free if node.kind != "total" else lambda name: counts[..., column[name]].astype(float)
        n = sum(number * (held[name] * omega if name in held else of(name)) for name, number in copies_in(system, node))
        return np.asarray(n / omega if node.kind == "conc" else n)

    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        return np.broadcast_to(value(root), np.broadcast_shapes(counts.shape[:-1], np.shape(omega))).copy()


def copies_in(system: System, reference: Reference) -> list[tuple[str, int]]:
    """What a count, a concentration or a total adds up: (species, molecules of it in one copy).

    A total adds what enzymes hold; that of an enzyme adds its other states.
    """
    if reference.kind != "total":
        return [(reference.name, 1)]
    name = reference.name
    found = [(s.name, dict(s.holds).get(name, 0) + (s.enzyme == name)) for s in system.species if s.name != name]
    return [(name, 1), *((state, int(number)) for state, number in found if number)]


def transition_energy(system: System, reaction: Reaction, counts: NDArray[np.int64], omega: Array) -> Array:
    """dG of the next forward firing of `reaction`, kJ/mol, from its net stoichiometry; arguments as for `evaluate`.

    With nu_i > 0 copies of i made and -nu_i > 0 taken, exp((dG - dG0')/RT) = prod (n_i + nu_i)_{nu_i} / prod (n_i)_{-nu_i}, each
    copy over c0 Omega: the factors of w-(n + nu) and w+(n) that a species on both sides adds are the same.
    Raises ValueError for a one-way reaction, whose Gibbs energy is undefined.
    """
    if reaction.dG0_kJ_per_mol is None:
        raise ValueError(f"{reaction.name} is one way: its Gibbs energy is undefined")
    column = {s.name: i for i, s in enumerate(system.free_species)}
    held = system.held_concentrations()
    log_quotient = np.zeros(np.broadcast_shapes(counts.shape[:-1], np.shape(omega)))
    with np.errstate(divide="ignore"):
        for name, number in reaction.equation.change.items():
            if name in held:
                log_quotient = log_quotient + number * np.log(held[name])
                continue
            sign = 1 if number > 0 else -1
            left = counts[..., column[name]] + max(number, 0)
            for k in range(abs(number)):
                log_quotient = log_quotient + sign * np.log(np.maximum(left - k, 0) / omega)
    energy = reaction.dG0_kJ_per_mol + system.conditions.RT_kJ_per_mol * log_quotient
    return np.where(np.isnan(energy), np.inf, energy)
