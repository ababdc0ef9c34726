"""The rational factor of a rate law laid out for evaluation: every monomial is another one times one more ligand."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import permutations

import numpy as np
from numpy.typing import NDArray

from driblet.system.rate_factors import RateFactor, Term

Variable = tuple[int, float]
Monomial = tuple[Variable, ...]
_MOST_ORDERED = 5  # variables of which every order is tried

Array = NDArray[np.float64]


@dataclass(frozen=True)
class FactorNodes:
    """N(n)/D(n) of one channel, n the state it leaves. Node t is q_t = q_parent max(n_species - offset, 0).

    Attributes: parent : index of an earlier node, -1 for the constant 1; species : free species, or their number for the
    constant; offset; denominator, numerator : coefficients at Omega = 1, a zero where a monomial is only on the way to
    another; degree : ligands a node multiplies; numerator_nodes : how many nodes, the first ones, the numerator needs,
    0 where it is 1.
    """

    parent: tuple[int, ...]
    species: tuple[int, ...]
    offset: tuple[float, ...]
    denominator: tuple[float, ...]
    numerator: tuple[float, ...]
    degree: tuple[int, ...]
    numerator_nodes: int

    def coefficients(self, omega: Array) -> tuple[Array, Array]:
        """Denominator and numerator coefficients at each Omega, both of shape=(replicates, nodes)."""
        scale = np.asarray(omega, dtype=float)[:, None] ** -np.array(self.degree, dtype=float)
        return np.array(self.denominator) * scale, np.array(self.numerator) * scale

    def value(self, counts: Array, denominator: Array, numerator: Array, exact: bool = True) -> Array:
        """N/D of states. counts : (..., species); exact=False : without offsets, for concentrations of large volumes."""
        shape = np.broadcast_shapes(counts.shape[:-1], denominator.shape[:-1])
        one = np.ones(shape)
        q: list[Array] = []
        above, below = np.zeros(shape), np.zeros(shape)
        for t, (parent, species, offset) in enumerate(zip(self.parent, self.species, self.offset, strict=True)):
            if self.degree[t]:
                ligand = np.maximum(counts[..., species] - (offset if exact else 0.0), 0.0)
                q.append((q[parent] if parent >= 0 else one) * ligand)
            else:
                q.append(one)
            below = below + denominator[..., t] * q[t]
            if t < self.numerator_nodes:
                above = above + numerator[..., t] * q[t]
        if not self.numerator_nodes:
            above = one
        return np.where(below > 0, above / np.where(below > 0, below, 1.0), 0.0)


def factor_nodes(
    factor: RateFactor, leaving: Mapping[str, int], index: Mapping[str, int], held: Mapping[str, float]
) -> FactorNodes:
    """Lay out a factor for one channel.

    leaving : how many of each species the channel takes up, n - leaving being the common state; index : of the free
    species; held : concentrations of the held ones, mol/L.
    """

    def collected(terms: tuple[Term, ...]) -> Counter[Monomial]:
        found: Counter[Monomial] = Counter()
        for term in terms:
            value, variables = term.coefficient, []
            for name, shift in term.ligands:
                if name in held:
                    value *= held[name]
                else:
                    variables.append((index[name], leaving.get(name, 0) - shift))
            found[tuple(sorted(variables))] += value  # type: ignore[assignment]
        return found

    above, below = collected(factor.numerator), collected(factor.denominator)
    nodes, first = _chain(above, below)
    place = {monomial: t for t, monomial in enumerate(nodes)}
    by_content = {tuple(sorted(m)): m for m in nodes}
    numerator = {by_content[m]: c for m, c in above.items()}
    denominator = {by_content[m]: c for m, c in below.items()}
    return FactorNodes(
        tuple(place[m[:-1]] if len(m) > 1 else -1 for m in nodes),
        tuple(m[-1][0] if m else len(index) for m in nodes),
        tuple(m[-1][1] if m else 0.0 for m in nodes),
        tuple(float(denominator.get(m, 0.0)) for m in nodes),
        tuple(float(numerator.get(m, 0.0)) for m in nodes),
        tuple(len(m) for m in nodes),
        first,
    )


def _chain(above: Counter[Monomial], below: Counter[Monomial]) -> tuple[list[Monomial], int]:
    """Monomials in an order in which each comes after the one it extends, those of the numerator first.

    The order of variables is the one that needs the fewest monomials on the way.
    """
    variables = sorted({v for m in (*above, *below) for v in m}, key=lambda v: -sum(v in m for m in below))
    orders = permutations(variables) if len(variables) <= _MOST_ORDERED else iter([tuple(variables)])
    best: tuple[list[Monomial], int] | None = None
    for order in orders:
        rank = {v: i for i, v in enumerate(order)}
        found: dict[Monomial, None] = {}
        first = 0
        for part in (above, below):
            for monomial in part:
                path = tuple(sorted(monomial, key=rank.__getitem__))
                for size in range(0 if not path else 1, len(path) + 1):
                    found.setdefault(path[:size])
            if part is above:
                first = len(found)
        if best is None or len(found) < len(best[0]):
            best = (list(found), first)
    assert best is not None
    return best
