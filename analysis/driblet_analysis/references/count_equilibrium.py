"""The exact stationary law of counts in a system that is not driven.

On the class of states that a replicate's totals allow,

    pi(n) ~ prod_i (c_i Omega)^n_i / n_i!

over the free species, c any composition at which every reaction that can run is at equilibrium with the held values
imposed (van Kampen, Phys. Lett. A 59:333, 1976; Anderson, Craciun & Kurtz, Bull. Math. Biol. 72:1947, 2010). Which of
those compositions is taken only scales the weights of a class, so no totals need to be solved for.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from driblet.drive import emergent_affinities, ln_constants, runnable
from driblet.errors import CannotAnswerError
from driblet.network import Network
from driblet.system import System
from driblet.system.build import describe_cycle
from driblet_analysis.references.state_space import (
    LIMIT,
    Array,
    States,
    enumerate_class,
    enumerate_mass,
    is_finite,
    poisson_log_weights,
)

__all__ = ["LIMIT", "CountLaw", "count_law", "enumerate_class", "equilibrium_weights", "log_weights"]


@dataclass(frozen=True)
class CountLaw:
    """A probability law on states.

    Attributes: states : int64, shape=(states, species); probability : shape=(states,), sums to 1; complete : whether
    every state of the class is there, or only those that carry all but about 1e-13 of it.
    """

    states: States
    probability: Array
    complete: bool = True

    def expect(self, values: ArrayLike | Callable[[States], ArrayLike]) -> NDArray[np.float64]:
        """Expectation of `values`, shape=(states, ...), or of a function of the states that gives them."""
        array = np.asarray(values(self.states) if callable(values) else values, dtype=float)
        return np.asarray(np.tensordot(self.probability, array, axes=1))

    @cached_property
    def _mean(self) -> Array:
        # from one of the states, so that a count that cannot change has it for its mean to the last bit, and variance zero
        return self.states[0] + self.expect(self.states - self.states[0])

    def mean(self) -> Array:
        """Mean counts, shape=(species,)."""
        return self._mean.copy()

    def covariance(self) -> Array:
        """Covariance of counts, shape=(species, species)."""
        away = self.states - self._mean
        return np.asarray((away * self.probability[:, None]).T @ away)

    def marginal(self, species: int) -> tuple[NDArray[np.int64], Array]:
        """Counts of one species from the smallest to the largest possible, and the probability of each."""
        counts = self.states[:, species]
        low = int(counts.min())
        pmf = np.bincount(counts - low, weights=self.probability)
        return np.arange(low, low + len(pmf), dtype=np.int64), np.asarray(pmf, dtype=float)


def log_weights(states: States, ln_c_eq: Array, omega: float) -> Array:
    """ln prod_i (c_i omega)^n_i / n_i!, shape=(states,).

    ln_c_eq : ln of mol/L, shape=(species,), -inf for a species that cannot exist; omega : copies per mol/L.
    """
    return poisson_log_weights(states, np.asarray(ln_c_eq, dtype=float) + np.log(omega))


def equilibrium_weights(system: System, present: frozenset[str]) -> tuple[Array, bool]:
    """ln c_i of a composition at equilibrium, shape=(free species,), and whether the class is finite.

    present : names of the free species a compartment starts with. Raises CannotAnswerError for a driven system and for
    one-way reactions that can run.
    """
    can_run = np.flatnonzero(runnable(system, present))
    one_way = system.one_way_names(set(can_run.tolist()))
    if one_way:
        raise CannotAnswerError(f"no equilibrium to hold it against: {', '.join(one_way)} runs one way")
    for cycle in emergent_affinities(system, present):
        if cycle.affinity_kJ_per_mol:
            turn = describe_cycle(cycle.reactions, [r.name for r in system.reactions])
            raise CannotAnswerError(
                f"driven: no equilibrium to hold it against; the cycle {turn} spends "
                f"{cycle.affinity_kJ_per_mol:.4g} kJ/mol a turn"
            )
    network = _network(system)
    S = network.stoichiometry[:, can_run].astype(float)
    ln_c, *_ = np.linalg.lstsq(S.T, ln_constants(system)[can_run], rcond=None)
    return np.asarray(ln_c), is_finite(network, list(can_run))


def count_law(system: System, initial_counts: ArrayLike, omega: float, limit: int = LIMIT) -> CountLaw | None:
    """The stationary law of one replicate, on the class of its own load and volume.

    initial_counts : copies of each free species, shape=(species,); omega : copies per mol/L of this replicate. A finite
    class of up to `limit` states is enumerated whole; otherwise the states that carry its mass. None when those, too, are
    more than `limit`. Raises CannotAnswerError for a driven system and for one-way reactions that can run.
    """
    return _count_law(system, tuple(float(n) for n in np.asarray(initial_counts)), float(omega), limit)


@lru_cache(maxsize=4)
def _count_law(system: System, counts: tuple[float, ...], omega: float, limit: int) -> CountLaw | None:
    network = _network(system)
    present = frozenset(name for name, n in zip(network.species, counts, strict=True) if n > 0)
    ln_c, finite = _weights(system, present)
    states = _whole_class(network, counts, limit) if finite else None
    complete = states is not None
    if states is None:
        states = enumerate_mass(network, np.array(counts), ln_c + np.log(omega), limit)
    if states is None:
        return None
    weights = log_weights(states, ln_c, omega)
    probability = np.exp(weights - weights.max())
    return CountLaw(states, probability / probability.sum(), complete)


# an ensemble asks again and again for the class of one load, at other volumes
_whole_class = lru_cache(maxsize=4)(enumerate_class)
_weights = lru_cache(maxsize=64)(equilibrium_weights)
_network = lru_cache(maxsize=8)(Network.of)
