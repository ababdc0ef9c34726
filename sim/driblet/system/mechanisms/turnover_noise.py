"""Mean and noise of an enzyme's turnovers at fixed ligands: how regular is its work, against that of a memoryless one?

Tilt the generator: each counted step of activity a carries exp(+-chi_a). With det(x - M(chi)) = sum_k c_k(chi) x^k the
largest eigenvalue, which generates the cumulants of the turnovers, has at chi = 0 (implicit differentiation; Lebowitz &
Spohn, J. Stat. Phys. 95:333, 1999, for what it generates; Koza, J. Phys. A 32:7637, 1999, for the coefficients)

    J_a  = -d_a c0 / c1
    C_ab = -(d_ab c0 + J_b d_a c1 + J_a d_b c1 + 2 c2 J_a J_b) / c1.

det(x - M(chi)) is a sum over forests rooted at single states (each gives a power of x) and at cycles, a cycle C giving
prod(C) (1 - exp(chi . z_C)) (Kenyon, Ann. Probab. 39:1983, 2011), which is how the derivatives are taken.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from itertools import combinations

import numpy as np

from driblet.system.mechanisms.enzyme import Enzyme
from driblet.system.mechanisms.king_altman import (
    Array,
    Cycle,
    Diagram,
    Polynomial,
    Terms,
    added,
    diagram,
    product,
    times,
)


@dataclass(frozen=True)
class TurnoverNoise:
    """The polynomials of one enzyme with A activities, in mol/L and units of `unit_per_s`.

    Attributes: variables : (species, molecules of it held already); c1, c2 : sums of trees and of two-tree forests;
    d_c0, d_c1 : (A,), dd_c0 : (A, A), derivatives by the counting fields at zero; trees : (S,), c1 of each root.
    """

    variables: tuple[tuple[str, int], ...]
    unit_per_s: float
    c1: Polynomial
    c2: Polynomial
    d_c0: tuple[Polynomial, ...]
    dd_c0: tuple[tuple[Polynomial, ...], ...]
    d_c1: tuple[Polynomial, ...]
    trees: tuple[Polynomial, ...]

    def relaxation_s(self, x: Array) -> Array:
        """c2/c1, s: about the enzyme's own relaxation time. x : (..., variables), mol/L, here and below."""
        return np.asarray(self.c2(x) / self.c1(x) / self.unit_per_s)

    def rates(self, x: Array) -> Array:
        """J, net turnovers of each activity per copy, 1/s, shape=(..., A)."""
        c1 = self.c1(x)
        return np.stack([-d(x) / c1 * self.unit_per_s for d in self.d_c0], axis=-1)

    def covariances(self, x: Array) -> Array:
        """C, covariance of turnovers per copy and time, 1/s, shape=(..., A, A)."""
        c1, c2 = self.c1(x), self.c2(x)
        J = np.stack([-d(x) / c1 for d in self.d_c0], axis=-1)
        d1 = np.stack([d(x) for d in self.d_c1], axis=-1)
        dd = np.stack([np.stack([d(x) for d in row], axis=-1) for row in self.dd_c0], axis=-2)
        cross = J[..., None, :] * d1[..., :, None]
        both = cross + np.swapaxes(cross, -1, -2) + 2.0 * c2[..., None, None] * J[..., :, None] * J[..., None, :]
        return np.asarray(-(dd + both) / c1[..., None, None] * self.unit_per_s)

    def occupancies(self, x: Array) -> Array:
        """Share of copies in each state, shape=(..., S)."""
        weights = np.stack([tree(x) for tree in self.trees], axis=-1)
        whole = weights.sum(axis=-1, keepdims=True)
        nowhere = np.zeros(len(self.trees))
        nowhere[0] = 1.0  # without any ligand some mechanisms could be in any of their forms; they start free
        return np.where(whole > 0, weights / np.where(whole > 0, whole, 1.0), nowhere)

    def ligands(self, concentrations: Mapping[str, float | Array], molecule_M: float | Array = 0.0) -> Array:
        """The variables from mol/L by species; molecule_M : mol/L of one molecule, to take off those held already."""
        if not self.variables:
            return np.zeros((*np.shape(molecule_M), 0))
        columns = [np.asarray(concentrations[name]) - held * np.asarray(molecule_M) for name, held in self.variables]
        return np.stack(np.broadcast_arrays(*(np.maximum(c, 0.0) for c in columns)), axis=-1)


@lru_cache(maxsize=64)
def turnover_noise(enzyme: Enzyme) -> TurnoverNoise:
    """The polynomials of an enzyme, made once. Raises MechanismError for more states than king_altman.MOST_STATES."""
    graph = diagram(enzyme)
    cycles = [cycle for cycle in graph.cycles() if any(cycle.turns)]
    count = len(enzyme.activities)
    weights = [graph.weight(cycle) for cycle in cycles]
    beside = [_with_a_root(graph, cycle) for cycle in cycles]
    pairs = [
        (a, b, times(graph.forest(a.states | b.states), _factors(a, b), product((*a.edges, *b.edges))))
        for a, b in combinations(cycles, 2)
        if not a.states & b.states
    ]

    def first(parts: list[Terms], a: int) -> Polynomial:
        return graph.polynomial(added(_scaled(p, -c.turns[a]) for p, c in zip(parts, cycles, strict=True)))

    def second(a: int, b: int) -> Polynomial:
        single = (_scaled(p, -c.turns[a] * c.turns[b]) for p, c in zip(weights, cycles, strict=True))
        double = (_scaled(p, c.turns[a] * d.turns[b] + c.turns[b] * d.turns[a]) for c, d, p in pairs)
        return graph.polynomial(added((*single, *double)))

    return TurnoverNoise(
        tuple((v.species, v.held) for v in graph.variables),
        graph.unit_per_s,
        graph.polynomial(graph.trees()),
        graph.polynomial(graph.two_trees()),
        tuple(first(weights, a) for a in range(count)),
        tuple(tuple(second(a, b) for b in range(count)) for a in range(count)),
        tuple(first(beside, a) for a in range(count)),
        tuple(graph.polynomial(graph.forest({s})) for s in range(graph.size)),
    )


def _with_a_root(graph: Diagram, cycle: Cycle) -> Terms:
    """prod(C) times the forests rooted at the cycle and one more state."""
    factors = _factors(cycle)
    roots = (s for s in range(graph.size) if s not in cycle.states)
    return added(times(graph.forest(cycle.states | {s}), factors, product(cycle.edges)) for s in roots)


def _factors(*cycles: Cycle) -> tuple[int, ...]:
    return tuple(sorted(e.variable for c in cycles for e in c.edges if e.variable is not None))


def _scaled(terms: Mapping[tuple[int, ...], float], by: float) -> Terms:
    return {monomial: c * by for monomial, c in terms.items()} if by else {}
