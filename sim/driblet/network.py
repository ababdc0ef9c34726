"""System -> Network: the one place where detailed balance sets a reverse rate, and the only door to the kernels.

A rate constant k of molecularity m has the units of v = k prod [A_i]^nu_i. With Omega = N_A V (copies per mol/L) a channel
fires with propensity

    w(n) = k Omega prod_free (n_i)_nu_i / Omega^nu_i prod_held c_i^nu_i f,

(n)_k the falling factorial, and the backward constant is k / K', K' = exp(-dG0'/RT): then w+(n)/w-(n + nu) = exp(-dG/RT)
for every single transition (van Kampen, Phys. Lett. A 59:333, 1976). f is 1 for mass action; a lumped or saturable law has
a ratio of polynomials, taken at the state common to both directions, so that the ratio above holds as it does without.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from driblet.engines.contract import NetworkArrays
from driblet.factor_nodes import FactorNodes, factor_nodes
from driblet.system.model import Reaction, System

FORWARD, BACKWARD = 1, -1
T = TypeVar("T")


@dataclass(frozen=True)
class Channel:
    """One direction of one reaction.

    Attributes: reaction : index; direction : FORWARD or BACKWARD; reactants : (free species index, multiplicity);
    change : (free species index, molecules); constant : propensity constant at Omega = 1; order : counted molecules;
    factor : what multiplies the law of mass action, None for nothing.
    """

    reaction: int
    direction: int
    reactants: tuple[tuple[int, int], ...]
    change: tuple[tuple[int, int], ...]
    constant: float
    order: int
    factor: FactorNodes | None = None


@dataclass(frozen=True)
class Network:
    """A system compiled for the engines. Free species only; channels in the order forward, backward of each reaction.

    Attributes: species, reactions : names; channels : tuple of Channel.
    """

    species: tuple[str, ...]
    reactions: tuple[str, ...]
    channels: tuple[Channel, ...]

    @classmethod
    def of(cls, system: System) -> Network:
        """Compile `system`."""
        species = tuple(s.name for s in system.free_species)
        index = {name: i for i, name in enumerate(species)}
        held = system.held_concentrations()
        channels: list[Channel] = []
        for r, reaction in enumerate(system.reactions):
            channels += _channels_of(r, reaction, index, held)
        return cls(species, tuple(r.name for r in system.reactions), tuple(channels))

    def rates(self, omega: NDArray[np.float64]) -> NDArray[np.float64]:
        """Propensity constants, 1/s per product of falling factorials, shape=(replicates, channels).

        omega : copies per mol/L of each replicate, shape=(replicates,). Where channels have factors, the coefficients of
        their nodes follow: all denominators', then all numerators', shape=(replicates, channels + 2 nodes).
        """
        constant = np.array([c.constant for c in self.channels])
        power = np.array([1 - c.order for c in self.channels])
        constants = constant * np.asarray(omega, dtype=float)[:, None] ** power
        parts = [c.factor.coefficients(omega) for c in self.channels if c.factor is not None]
        return np.ascontiguousarray(np.hstack([constants, *(p[0] for p in parts), *(p[1] for p in parts)]))

    @cached_property
    def factored(self) -> dict[int, slice]:
        """For each channel with a factor where its nodes lie among those of all."""
        found, start = {}, 0
        for j, channel in enumerate(self.channels):
            if channel.factor is not None:
                end = start + len(channel.factor.parent)
                found[j] = slice(start, end)
                start = end
        return found

    def factors(
        self, counts: NDArray[np.float64], rates: NDArray[np.float64], exact: bool = True
    ) -> NDArray[np.float64]:
        """What multiplies mass action in each channel, shape=(..., channels). Arguments as for `propensities`.

        exact=False : as in large volumes, where one molecule more or less does not matter.
        """
        n, rates, channels = np.asarray(counts, dtype=float), np.asarray(rates), len(self.channels)
        out = np.ones((*np.broadcast_shapes(n.shape[:-1], rates.shape[:-1]), channels))
        nodes = (rates.shape[-1] - channels) // 2
        for j, place in self.factored.items():
            factor = self.channels[j].factor
            assert factor is not None
            below = rates[..., channels : channels + nodes][..., place]
            above = rates[..., channels + nodes :][..., place]
            out[..., j] = factor.value(n, below, above, exact)
        return out

    @property
    def stoichiometry(self) -> NDArray[np.int64]:
        """Net change of free species by one forward firing, int64, shape=(species, reactions)."""
        matrix = np.zeros((len(self.species), len(self.reactions)), dtype=np.int64)
        for channel in self.channels:
            if channel.direction == FORWARD:
                for i, amount in channel.change:
                    matrix[i, channel.reaction] = amount
        return matrix

    def channel_index(self, direction: int) -> NDArray[np.int64]:
        """For each reaction the index of its channel in `direction`, -1 where there is none."""
        found = np.full(len(self.reactions), -1, dtype=np.int64)
        for j, channel in enumerate(self.channels):
            if channel.direction == direction:
                found[channel.reaction] = j
        return found

    def propensities(self, counts: NDArray[np.float64], rates: NDArray[np.float64]) -> NDArray[np.float64]:
        """Propensities of states, 1/s. counts : (..., species); rates : as `rates` gives them, (..., channels) or more."""
        n = np.asarray(counts, dtype=float)
        out = np.broadcast_to(rates[..., : len(self.channels)], (*n.shape[:-1], len(self.channels))).copy()
        for j, channel in enumerate(self.channels):
            for i, multiplicity in channel.reactants:
                for k in range(multiplicity):
                    out[..., j] *= n[..., i] - k
        return out * self.factors(n, rates) if self.factored else out

    @cached_property
    def arrays(self) -> NetworkArrays:
        """The flat arrays an engine takes."""
        n, m = len(self.species), len(self.channels)
        reactant = np.full((m, 3), n, dtype=np.int64)
        offset = np.zeros((m, 3))
        needed_by: list[list[int]] = [[] for _ in range(n)]
        for j, channel in enumerate(self.channels):
            slot = 0
            for i, multiplicity in channel.reactants:
                needed_by[i].append(j)
                for k in range(multiplicity):
                    reactant[j, slot], offset[j, slot] = i, k
                    slot += 1
            if channel.factor is not None:
                for i in {i for i in channel.factor.species if i < n} - {i for i, _ in channel.reactants}:
                    needed_by[i].append(j)
        dependents = [sorted({d for i, _ in c.change for d in needed_by[i]}) for c in self.channels]
        change_start, change = _csr([list(c.change) for c in self.channels])
        depend_start, depend = _csr(dependents)
        pairs = np.array(change, dtype=np.int64).reshape(-1, 2)
        return NetworkArrays(
            reactant,
            offset,
            change_start,
            np.ascontiguousarray(pairs[:, 0]),
            np.ascontiguousarray(pairs[:, 1].astype(float)),
            depend_start,
            np.array(depend, dtype=np.int64),
            np.array([d[0] if d else m for d in dependents], dtype=np.int64),
            *self._factor_arrays(),
        )

    def _factor_arrays(self) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
        """factor_start, node_parent, node_species and node_offset of the contract."""
        start = np.zeros((len(self.channels), 3), dtype=np.int64)
        parent: list[int] = []
        species: list[int] = []
        offset: list[float] = []
        for j, place in self.factored.items():
            factor = self.channels[j].factor
            assert factor is not None
            start[j] = place.start, place.start + factor.numerator_nodes, place.stop
            parent += [p + 1 for p in factor.parent]
            species += factor.species
            offset += factor.offset
        return start, np.array(parent, dtype=np.int64), np.array(species, dtype=np.int64), np.array(offset, dtype=float)


def _csr(rows: Iterable[list[T]]) -> tuple[NDArray[np.int64], list[T]]:
    rows = list(rows)
    start = np.cumsum([0] + [len(row) for row in rows]).astype(np.int64)
    return start, [item for row in rows for item in row]


def _channels_of(r: int, reaction: Reaction, index: dict[str, int], held: Mapping[str, float]) -> list[Channel]:
    """Forward and, unless one way, backward channel; a held species contributes its concentration to the constant."""
    equation = reaction.equation
    sides = [(FORWARD, reaction.forward, equation.reactants)]
    if reaction.backward is not None:
        sides.append((BACKWARD, reaction.backward, equation.products))
    channels = []
    for direction, constant, terms in sides:
        for name, number in terms:
            if name in held:
                constant *= held[name] ** number
        reactants = tuple((index[name], number) for name, number in terms if name in index)
        change = tuple((index[n], direction * d) for n, d in equation.change.items() if n in index)
        factor = None
        if reaction.factor is not None:
            factor = factor_nodes(reaction.factor, dict(terms), index, held)
        channels.append(Channel(r, direction, reactants, change, constant, sum(k for _, k in reactants), factor))
    return channels
