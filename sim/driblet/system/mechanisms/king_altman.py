"""Steady-state flux of an enzyme as ratios of polynomials in its ligands, for a mechanism of any shape.

The diagrams of King & Altman (J. Phys. Chem. 60:1375, 1956) and Hill (J. Theor. Biol. 10:442, 1966): with F(R) the sum over
spanning forests directed to the states R, state s is occupied with F({s}) / c1, c1 = sum_s F({s}), and cycle C turns at
the rate prod(C) F(C) / c1. Forests are enumerated and their products added, never subtracted, so that every coefficient
is right to a few units in the last place however far apart the constants lie.

A ligand that binds in step k stands in the polynomials as a variable of its own, its number less what the state that binds
it holds of it already: n for the first molecule of a species bound twice, n - 1 for the second. No tree takes a step twice,
so that everything is linear in each step; steps of one species from states that hold alike share a variable.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.system.mechanisms.constants import MechanismError
from driblet.system.mechanisms.enzyme import Enzyme

Array = NDArray[np.float64]
Monomial = tuple[int, ...]
Terms = dict[Monomial, float]
MOST_STATES = 16  # forests grow fast with the number of states; 16 take seconds
TYPICAL_M = 1e-3  # mol/L at which terms are put on a common scale


class Variable(NamedTuple):
    """A ligand as a binding step sees it: `held` molecules of it are on the enzyme already (-1: one was let go)."""

    species: str
    held: int


class Edge(NamedTuple):
    """One direction of one step: its rate constant and the variable it multiplies, None where nothing binds."""

    step: int
    sense: int
    source: int
    target: int
    constant: float
    variable: int | None


class Cycle(NamedTuple):
    """A directed simple cycle. turns : how often it turns each activity over, in the direction the reaction is written."""

    edges: tuple[Edge, ...]
    turns: tuple[int, ...]

    @property
    def states(self) -> frozenset[int]:
        """The states it goes through."""
        return frozenset(edge.source for edge in self.edges)


@dataclass(frozen=True)
class Polynomial:
    """sum_t coefficient_t prod_v x_v^exponent_tv. coefficient : (T,); exponent : int64, (T, V)."""

    coefficient: Array
    exponent: NDArray[np.int64]

    def __call__(self, x: Array) -> Array:
        """Value where the variables are x, shape=(..., V), gives shape=(...)."""
        x = np.asarray(x, dtype=float)
        total = np.zeros(x.shape[:-1])
        for c, powers in zip(self.coefficient, self.exponent, strict=True):
            term = np.full(x.shape[:-1], c)
            for v in np.flatnonzero(powers):
                term = term * x[..., v] ** int(powers[v])
            total = total + term
        return total

    @property
    def degree(self) -> NDArray[np.int64]:
        """Number of ligands each term multiplies, shape=(T,)."""
        return np.asarray(self.exponent.sum(axis=1))


class Diagram:
    """The graph of an enzyme with directed edges. Raises MechanismError above MOST_STATES states.

    Attributes: variables : tuple of Variable; unit_per_s : what rate constants are divided by, so that products of many
    stay within a double; forest and cycle sums below are in that unit.
    """

    def __init__(self, enzyme: Enzyme) -> None:
        if len(enzyme.states) > MOST_STATES:
            raise MechanismError(
                f"{len(enzyme.states)} states are too many to lump; at most {MOST_STATES} are allowed: run it elementary",
                "treatment",
            )
        self.enzyme, self.size = enzyme, len(enzyme.states)
        held = [bound_in(enzyme, s) for s in range(self.size)]
        index: dict[Variable, int] = {}
        raw = []
        for k, step in enumerate(enzyme.steps):
            for sense, source, target, constant, ligand in (
                (1, step.source, step.target, step.forward, step.binds),
                (-1, step.target, step.source, step.backward, step.releases),
            ):
                variable = None
                if ligand is not None:
                    variable = index.setdefault(Variable(ligand, held[source].get(ligand, 0)), len(index))
                raw.append(Edge(k, sense, source, target, constant, variable))
        self.variables = tuple(index)
        speeds = [e.constant * (1.0 if e.variable is None else TYPICAL_M) for e in raw]
        self.unit_per_s = float(np.exp(np.mean(np.log(speeds)))) if speeds else 1.0
        self.edges = tuple(e._replace(constant=e.constant / self.unit_per_s) for e in raw)
        self.leaving: list[list[Edge]] = [[e for e in self.edges if e.source == s] for s in range(self.size)]
        self._forests: dict[frozenset[int], Terms] = {}

    def forest(self, roots: Iterable[int]) -> Terms:
        """F(roots): the sum over all ways in which every other state has one way out and all lead to the roots."""
        key = frozenset(roots)
        if key not in self._forests:
            total: Terms = {}
            order = [s for s in range(self.size) if s not in key]
            self._grow(order, 0, {}, 1.0, (), total)
            self._forests[key] = total
        return self._forests[key]

    def _grow(
        self, order: list[int], depth: int, way: dict[int, int], weight: float, factors: Monomial, total: Terms
    ) -> None:
        if depth == len(order):
            monomial = tuple(sorted(factors))
            total[monomial] = total.get(monomial, 0.0) + weight
            return
        state = order[depth]
        for edge in self.leaving[state]:
            end = edge.target
            while end in way:
                end = way[end]
            if end == state:
                continue  # a ring
            way[state] = edge.target
            more = factors if edge.variable is None else (*factors, edge.variable)
            self._grow(order, depth + 1, way, weight * edge.constant, more, total)
            del way[state]

    def trees(self) -> Terms:
        """c1: the sum of spanning trees over all roots."""
        return added(self.forest({s}) for s in range(self.size))

    def two_trees(self) -> Terms:
        """c2: the sum of spanning forests of two trees over all pairs of roots."""
        return added(self.forest({s, t}) for s in range(self.size) for t in range(s))

    def cycles(self) -> tuple[Cycle, ...]:
        """Every directed simple cycle that takes no step there and back."""
        return tuple(Cycle(edges, self._turns(edges)) for start in range(self.size) for edges in self._rings(start))

    def _rings(self, start: int) -> Iterator[tuple[Edge, ...]]:
        """Cycles through `start` and later states only."""

        def extend(path: tuple[Edge, ...], seen: frozenset[int]) -> Iterator[tuple[Edge, ...]]:
            here = path[-1].target if path else start
            for edge in self.leaving[here]:
                if path and edge.step == path[-1].step:
                    continue
                if edge.target == start and path and edge.step != path[0].step:
                    yield (*path, edge)
                elif edge.target > start and edge.target not in seen:
                    yield from extend((*path, edge), seen | {edge.target})

        return extend((), frozenset({start}))

    def _turns(self, edges: tuple[Edge, ...]) -> tuple[int, ...]:
        sense = {edge.step: edge.sense for edge in edges}
        return tuple(a.direction * sense.get(a.counted, 0) for a in self.enzyme.activities)

    def weight(self, cycle: Cycle) -> Terms:
        """prod(C) F(C): the turning of one cycle, times c1."""
        factors = tuple(sorted(e.variable for e in cycle.edges if e.variable is not None))
        return times(self.forest(cycle.states), factors, product(cycle.edges))

    def polynomial(self, terms: Mapping[Monomial, float]) -> Polynomial:
        """As arrays, the terms in a fixed order."""
        items = sorted((m, c) for m, c in terms.items() if c)
        exponent = np.zeros((len(items), len(self.variables)), dtype=np.int64)
        for t, (monomial, _) in enumerate(items):
            for v in monomial:
                exponent[t, v] += 1
        return Polynomial(np.array([c for _, c in items], dtype=float), exponent)


def bound_in(enzyme: Enzyme, state: int) -> dict[str, int]:
    """Molecules that a state holds of each species; a form "A-P" has let go one P that it takes up in coming back."""
    held = dict(enzyme.states[state].holds)
    for part in enzyme.states[state].name.split(".")[1:]:
        if "-" in part:
            let_go = part.split("-", 1)[1].split("#")[0]
            held[let_go] = held.get(let_go, 0) - 1
    return held


def product(edges: Iterable[Edge]) -> float:
    """Product of rate constants."""
    out = 1.0
    for edge in edges:
        out *= edge.constant
    return out


def added(parts: Iterable[Terms]) -> Terms:
    """Sum of polynomials."""
    total: Terms = {}
    for part in parts:
        for monomial, c in part.items():
            total[monomial] = total.get(monomial, 0.0) + c
    return total


def times(terms: Mapping[Monomial, float], factors: Monomial, constant: float) -> Terms:
    """A polynomial times a monomial."""
    return {tuple(sorted((*monomial, *factors))): c * constant for monomial, c in terms.items()}


class FluxLaw(NamedTuple):
    """A net reaction of an enzyme: rate per copy, forward, k prod[reactants] N/D, 1/s; backward it has the same N/D.

    turns : of each activity by one firing; reactants, products : species as often as they stand there; forward, backward :
    in (mol/L)^-m/s; numerator, denominator : polynomials in mol/L, about 1 at 1 mmol/L.
    """

    turns: tuple[int, ...]
    reactants: tuple[str, ...]
    products: tuple[str, ...]
    forward: float
    backward: float
    numerator: Polynomial
    denominator: Polynomial


@lru_cache(maxsize=64)
def diagram(enzyme: Enzyme) -> Diagram:
    """The diagram of an enzyme, made once."""
    return Diagram(enzyme)


@lru_cache(maxsize=64)
def flux_laws(enzyme: Enzyme) -> tuple[FluxLaw, ...]:
    """One law for each net reaction that the enzyme's cycles carry.

    An enzyme of one activity has one. Activities that share half of a ping pong also exchange: the cycle that runs one
    forward and the other backward is a reaction of its own. Raises MechanismError for more states than MOST_STATES and
    for cycles that no activity counts.
    """
    graph = diagram(enzyme)
    groups: dict[tuple[int, ...], list[Cycle]] = {}
    for cycle in graph.cycles():
        if not any(cycle.turns):
            if net(graph, cycle):
                raise MechanismError("a cycle of its steps has a net reaction that no activity counts", "steps")
            continue
        if next(z for z in cycle.turns if z) > 0:
            groups.setdefault(cycle.turns, []).append(cycle)
    trees = graph.polynomial(graph.trees())
    scale = _largest(trees)
    denominator = Polynomial(trees.coefficient / scale, trees.exponent)
    simple_first = sorted(groups, key=lambda z: (sum(map(abs, z)), [-value for value in z]))
    return tuple(_law(graph, turns, groups[turns], denominator, scale) for turns in simple_first)


def net(graph: Diagram, cycle: Cycle) -> Counter[str]:
    """Net molecules taken up by a cycle; negative ones are let go."""
    change: Counter[str] = Counter()
    for edge in cycle.edges:
        step = graph.enzyme.steps[edge.step]
        if step.ligand is not None:
            change[step.ligand] += 1 if edge.variable is not None else -1
    return Counter({name: n for name, n in change.items() if n})


def _law(graph: Diagram, turns: tuple[int, ...], cycles: list[Cycle], denominator: Polynomial, scale: float) -> FluxLaw:
    change = net(graph, cycles[0])
    reactants, products = Counter(dict(+change)), Counter(dict(-change))
    parts: list[Terms] = []
    for cycle in cycles:
        if net(graph, cycle) != change:
            raise MechanismError("two ways through its steps have different net reactions", "steps")
        bound = [e.variable for e in cycle.edges if e.variable is not None]
        left = Counter(reactants)
        beside = []  # what the cycle binds and lets go again
        for v in sorted(bound, key=lambda v: graph.variables[v].held):
            name = graph.variables[v].species
            if left[name]:
                left[name] -= 1
            else:
                beside.append(v)
        parts.append(times(graph.forest(cycle.states), tuple(sorted(beside)), product(cycle.edges)))
    numerator = graph.polynomial(added(parts))
    size = _largest(numerator)
    K = _ratio(cycles[0], graph)
    forward = size / scale * graph.unit_per_s
    return FluxLaw(
        turns,
        tuple(reactants.elements()),
        tuple(products.elements()),
        forward,
        forward / K,
        Polynomial(numerator.coefficient / size, numerator.exponent),
        denominator,
    )


def _largest(polynomial: Polynomial) -> float:
    """The largest term where every variable is TYPICAL_M."""
    return float(np.max(polynomial.coefficient * TYPICAL_M**polynomial.degree))


def _ratio(cycle: Cycle, graph: Diagram) -> float:
    """Product of forward over backward constants along a cycle."""
    log = 0.0
    for edge in cycle.edges:
        step = graph.enzyme.steps[edge.step]
        log += edge.sense * (np.log(step.forward) - np.log(step.backward))
    return float(np.exp(log))


def closure_excess(enzyme: Enzyme) -> float:
    """By how much, as a factor's logarithm, ways through the steps with one net reaction disagree on its constant."""
    graph = diagram(enzyme)
    seen: dict[tuple[int, ...], float] = {}
    worst = 0.0
    for cycle in graph.cycles():
        log = float(np.log(_ratio(cycle, graph)))
        worst = max(worst, abs(log - seen.setdefault(cycle.turns, 0.0 if not any(cycle.turns) else log)))
    return worst
