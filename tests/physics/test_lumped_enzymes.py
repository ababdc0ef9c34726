"""Lumped enzymes: published rate equations, exact equilibrium by enumeration, and what own-state denominators would break.

King & Altman, J. Phys. Chem. 60:1375 (1956); Cleland, Biochim. Biophys. Acta 67:104 (1963); Segel, Enzyme Kinetics (1975):
the equations stand in test_enzyme_rate_laws.py. The master equations are solved as sparse linear systems.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

import driblet
from driblet.lumping import treated
from driblet.network import Network
from driblet.system import System
from driblet.system.mechanisms import MECHANISMS, ActivitySpec, Assembler, Enzyme, MechanismError, turnover_rates
from driblet.system.mechanisms.king_altman import MOST_STATES, closure_excess, diagram, flux_laws
from driblet.system.mechanisms.turnover_noise import turnover_noise
from driblet_analysis.references.count_equilibrium import count_law
from driblet_analysis.references.master_equation import MasterEquation
from driblet_analysis.references.state_space import neighbours
from tests.physics.support import ONE_COPY_PER_MOLAR
from tests.physics.test_enzyme_rate_laws import EQUATIONS, RT, built, random_constants

Array = NDArray[np.float64]
RANDOM_KEYS = [
    "binds_A", "binds_B", "binds_B_with_A", "binds_A_with_B", "r",
    "releases_P_with_Q", "releases_Q_with_P", "releases_Q", "releases_P",
]  # fmt: skip


def lumped_rate(enzyme: Enzyme, c: dict[str, float]) -> tuple[Array, float]:
    """Net turnovers of each activity by the flux laws, and the largest one-way flux."""
    x = turnover_noise(enzyme).ligands(c)
    net, gross = np.zeros(len(enzyme.activities)), 0.0
    for law in flux_laws(enzyme):
        ratio = float(law.numerator(x) / law.denominator(x))
        there = law.forward * math.prod(c[n] for n in law.reactants) * ratio
        back = law.backward * math.prod(c[n] for n in law.products) * ratio
        net += np.array(law.turns) * (there - back)
        gross = max(gross, there, back)
    return net, gross


def enzyme_of(mechanism: str, generator: np.random.Generator, inhibited: bool = False) -> Enzyme:
    """An enzyme of random constants."""
    bound, released = MECHANISMS[mechanism]
    while True:
        KM = {name: float(10 ** generator.uniform(-5, -2)) for name in ("A", "B")[:bound]}
        assembler = Assembler("E", RT)
        K, kcat = float(10 ** generator.uniform(-2, 4)), float(10 ** generator.uniform(0, 3))
        try:
            assembler.add(ActivitySpec("r", mechanism, 1, ("A", "B")[:bound], ("P", "Q")[:released], K, kcat, KM))
        except MechanismError:  # more than this energy allows
            continue
        if inhibited:
            assembler.inhibit("I", 1e-4)
        return assembler.enzyme("E")


def shared_half(generator: np.random.Generator) -> Enzyme:
    """Two ping pong reactions with one first half: an exchange of B and Q comes with them."""
    assembler = Assembler("E", RT)
    K = float(10 ** generator.uniform(-1, 2))
    kcat = float(10 ** generator.uniform(1, 2))
    first = ActivitySpec("r", "ping pong bi bi", 1, ("A", "B"), ("P", "Q"), K, kcat, {"A": 3e-4, "B": 5e-4})
    second = ActivitySpec("s", "ping pong bi bi", 1, ("A", "B2"), ("P", "Q2"), 2.0, 0.3 * kcat, {"B2": 2e-4})
    assembler.add(first)
    assembler.add(second)
    return assembler.enzyme("E")


@pytest.mark.parametrize("mechanism", EQUATIONS)
def test_lumped_rates_are_the_published_rate_equations(mechanism: str) -> None:
    keys, equation = EQUATIONS[mechanism]
    generator = np.random.default_rng(11)
    for _ in range(50):
        steps = random_constants(keys, generator)
        enzyme, K = built(mechanism, keys, steps)
        c = dict(zip("ABPQ", 10 ** generator.uniform(-6, -2, 4), strict=True))
        net, gross = lumped_rate(enzyme, c)
        assert net[0] == pytest.approx(equation(steps, K, **c), rel=1e-9, abs=1e-10 * gross)


@pytest.mark.parametrize("mechanism", [*MECHANISMS, "two of a ping pong"])
def test_lumped_rates_are_the_flux_of_the_enzymes_own_master_equation(mechanism: str) -> None:
    """One copy at random concentrations, to 1e-10; the occupancies too."""
    generator = np.random.default_rng(5)
    for _ in range(30):
        enzyme = shared_half(generator) if mechanism not in MECHANISMS else enzyme_of(mechanism, generator, True)
        names = {step.ligand for step in enzyme.steps if step.ligand}
        c = {name: float(10 ** generator.uniform(-6, -1)) for name in names}
        net, gross = lumped_rate(enzyme, c)
        want = np.array(list(turnover_rates(enzyme, c).values()))
        np.testing.assert_allclose(net, want, rtol=1e-10, atol=1e-10 * gross)
        noise = turnover_noise(enzyme)
        np.testing.assert_allclose(noise.rates(noise.ligands(c)), want, rtol=1e-10, atol=1e-10 * gross)


def test_an_exchange_comes_with_a_shared_half() -> None:
    laws = flux_laws(shared_half(np.random.default_rng(1)))
    assert [law.turns for law in laws] == [(1, 0), (0, 1), (1, -1)]
    assert sorted(laws[2].reactants) == ["B", "Q2"]
    assert sorted(laws[2].products) == ["B2", "Q"]


def test_coefficients_hold_over_forty_decades() -> None:
    """Nothing is subtracted: constants 1e20 apart leave every coefficient of the trees right to rounding."""
    steps = {"binds_A": (1e12, 1e-8), "r": (1e10, 1e-10), "releases_P": (1e-6, 1e12)}
    enzyme, _ = built("uni uni", ["binds_A", "r", "releases_P"], steps)
    graph = diagram(enzyme)
    found = graph.trees()
    (k1, k2), (k3, k4), (k5, k6) = steps.values()
    a, p = (next(i for i, v in enumerate(graph.variables) if v.species == name) for name in "AP")
    unit = graph.unit_per_s**2
    expected = {
        (): (k2 * k4 + k2 * k5 + k3 * k5) / unit,
        (a,): k1 * (k3 + k4 + k5) / unit,
        (p,): k6 * (k2 + k3 + k4) / unit,
    }
    assert found.keys() == expected.keys()
    for monomial, value in expected.items():
        assert found[monomial] == pytest.approx(value, rel=1e-14)


def closed(text: str) -> System:
    """A system in which one copy is 1 mol/L, all its enzymes lumped."""
    whole = f'[conditions]\ntemperature = "30 degC"\n[compartments.v]\nvolume = "{ONE_COPY_PER_MOLAR}"\n' + text
    system = driblet.loads(whole)
    return treated(system, {enzyme.name: "lumped" for enzyme in system.enzymes})


def loop(first: str, second: str, catalyses: str = "r", KM: str = '{ A = "2 M", B = "1 M" }', n: int = 5) -> str:
    """Two different enzymes and two uncatalysed reactions on one loop: A + B <=> P + Q, A <=> P, B <=> Q."""
    return f"""
[species]
A = "{n} copies"
B = "{n} copies"
P = "0 copies"
Q = "0 copies"
[reactions.r]
equation = "A + B <=> P + Q"
K = 3
forward = "0.01 /M/s"
[reactions.s]
equation = "A <=> P"
K = 3
forward = "0.05 /s"
[reactions.u]
equation = "B <=> Q"
K = 1
forward = "0.1 /s"
[enzymes.e]
amount = "2 copies"
catalyses = "r"
mechanism = "{first}"
kcat = "10 /s"
KM = {{ A = "2 M", B = "3 M" }}
[enzymes.f]
amount = "1 copies"
catalyses = "{catalyses}"
mechanism = "{second}"
kcat = "30 /s"
KM = {KM}
"""


def adenylate_kinase(mechanism: str) -> str:
    """One species bound twice."""
    return f"""
[species]
ATP = "4 copies"
ADP = "5 copies"
AMP = "3 copies"
[reactions.r]
equation = "2 ADP <=> ATP + AMP"
K = 1.4
forward = "0.01 /M/s"
[enzymes.e]
amount = "2 copies"
catalyses = "r"
mechanism = "{mechanism}"
kcat = "10 /s"
KM = {{ ADP = "2 M" }}
"""


SHARED_HALF = """
[species]
A = "3 copies"
P = "1 copies"
B = "2 copies"
Q = "1 copies"
B2 = "3 copies"
Q2 = "0 copies"
[reactions.r]
equation = "A + B <=> P + Q"
K = 3
forward = "0.01 /M/s"
[reactions.s]
equation = "A + B2 <=> P + Q2"
K = 0.7
[enzymes.e]
amount = "2 copies"
catalyses = "r"
mechanism = "ping pong bi bi"
kcat = "10 /s"
KM = { A = "2 M", B = "3 M" }
[enzymes.e.also.s]
mechanism = "ping pong bi bi"
kcat = "4 /s"
KM = { B2 = "1 M" }
"""

CLOSED = {
    "ordered and uni uni": loop("ordered bi bi", "uni uni", "u", '{ B = "2 M" }'),
    "random and ping pong": loop("random bi bi", "ping pong bi bi"),
    "ping pong and ordered": loop("ping pong bi bi", "ordered bi bi"),
    "adenylate kinase, ordered": adenylate_kinase("ordered bi bi"),
    "adenylate kinase, random": adenylate_kinase("random bi bi"),
    "adenylate kinase, ping pong": adenylate_kinase("ping pong bi bi"),
    "two of a ping pong and their exchange": SHARED_HALF,
}


def stationary_and_flux(network: Network, start: Array) -> tuple[NDArray[np.int64], Array, float]:
    """States, stationary law, and the largest net flux of any reaction between two states over its largest gross flux."""
    equation = MasterEquation.of(network, start, 1.0)
    law = equation.stationary()
    w = network.propensities(law.states.astype(float), network.rates(np.array([1.0]))[0])
    to = neighbours(network, law.states)
    worst = 0.0
    for j in range(0, len(network.channels), 2):
        here = np.flatnonzero(to[:, j] >= 0)
        there = to[here, j]
        forward, backward = law.probability[here] * w[here, j], law.probability[there] * w[there, j + 1]
        worst = max(worst, float(np.max(np.abs(forward - backward)) / np.max(forward + backward)))
    return law.states, law.probability, worst


def distance(system: System, network: Network) -> tuple[float, float]:
    """Total variation between the stationary law and the equilibrium law, and the net flux."""
    start = np.array([s.copies for s in system.free_species], dtype=float)
    states, found, flux = stationary_and_flux(network, start)
    law = count_law(system, start, 1.0)
    assert law is not None
    expected = {tuple(row): p for row, p in zip(law.states, law.probability, strict=True)}
    return 0.5 * sum(abs(p - expected[tuple(row)]) for row, p in zip(states, found, strict=True)), flux


@pytest.mark.parametrize("name", CLOSED)
def test_equilibrium_is_exact_at_any_copy_number(name: str) -> None:
    system = closed(CLOSED[name])
    apart, flux = distance(system, Network.of(system))
    assert apart < 1e-12
    assert flux < 1e-12


def with_own_state_denominators(network: Network) -> Network:
    """The textbook form: each direction takes its factor at the state it leaves."""
    channels = []
    for channel in network.channels:
        if channel.factor is not None:
            channel = replace(channel, factor=replace(channel.factor, offset=(0.0,) * len(channel.factor.offset)))
        channels.append(channel)
    return replace(network, channels=tuple(channels))


def test_twin_own_state_denominators_break_equilibrium_and_keep_a_cycle_turning() -> None:
    apart = {}
    for n in (5, 20):
        system = closed(loop("ordered bi bi", "uni uni", "u", '{ B = "2 M" }', n))
        apart[n], flux = distance(system, with_own_state_denominators(Network.of(system)))
        assert flux > 1e-3
    assert apart[5] > 0.01
    assert apart[20] < apart[5]


@pytest.mark.parametrize("mechanism", ["ordered bi bi", "random bi bi"])
def test_totals_of_the_elementary_system_carry_the_partition_function(mechanism: str) -> None:
    """One enzyme step by step: the law of free + bound is the lumped law times Z(n), Z the sum over its states.

    So it shifts by what the enzyme holds, which is why a lumped enzyme should be rare beside its ligands.
    """
    text = adenylate_kinase(mechanism).replace('"2 copies"', '"1 copies"')
    lumped = closed(text)
    system = driblet.loads(
        f'[conditions]\ntemperature = "30 degC"\n[compartments.v]\nvolume = "{ONE_COPY_PER_MOLAR}"\n' + text
    )
    start = np.array([s.copies for s in system.free_species], dtype=float)
    law = count_law(system, start, 1.0)
    assert law is not None
    holds = np.array([[dict(s.holds).get(n, 0) for s in system.free_species] for n in ("ATP", "ADP", "AMP")])
    totals: dict[tuple[int, ...], float] = {}
    for row, p in zip(law.states, law.probability, strict=True):
        key = tuple(int(v) for v in row[:3] + holds @ row)
        totals[key] = totals.get(key, 0.0) + p
    bare = count_law(lumped, np.array([s.copies for s in lumped.free_species], dtype=float), 1.0)
    assert bare is not None
    weights = {}
    for row, p in zip(bare.states, bare.probability, strict=True):
        weights[tuple(int(v) for v in row[:3])] = p * partition_function(system, row[:3])
    whole = sum(weights.values())
    assert totals.keys() == weights.keys()
    assert 0.5 * sum(abs(totals[k] - weights[k] / whole) for k in totals) < 1e-12
    shift = sum(abs(totals[k] - p) for k, p in zip(totals, bare.probability, strict=True))
    assert shift > 1e-3


def partition_function(system: System, n: NDArray[np.int64]) -> float:
    """Z(n) = sum over states of K_s prod (n)_held, K_s the product of constants along binding steps from the free enzyme."""
    (enzyme,) = system.enzymes
    ln_K = {0: 0.0}
    while len(ln_K) < len(enzyme.states):
        for step in enzyme.steps:
            gain = math.log(step.forward / step.backward)
            if step.ligand is None:
                continue
            if step.source in ln_K:
                ln_K.setdefault(step.target, ln_K[step.source] + gain)
            elif step.target in ln_K:
                ln_K.setdefault(step.source, ln_K[step.target] - gain)
    order = {"ATP": 0, "ADP": 1, "AMP": 2}
    return sum(
        math.exp(ln_K[i]) * math.prod(math.perm(int(n[order[name]]), number) for name, number in state.holds)
        for i, state in enumerate(enzyme.states)
    )


def test_one_firing_shows_its_gibbs_energy() -> None:
    """w+(n) / w-(n + nu) = exp(-dG(n)/RT) for single transitions of a large system, to rounding."""
    system = closed(CLOSED["random and ping pong"])
    network = Network.of(system)
    rates = network.rates(np.array([7e4]))[0]
    rng = np.random.default_rng(2)
    r = system.reactions.index(next(x for x in system.reactions if x.name == "e.r"))
    change = network.stoichiometry[:, r]
    for _ in range(20):
        n = rng.integers(1, 10**5, len(network.species)).astype(float)
        there = network.propensities(n, rates)[2 * r]
        back = network.propensities(n + change, rates)[2 * r + 1]
        a, b, p, q = n[:4]
        assert there / back == pytest.approx(3.0 * a * b / ((p + 1) * (q + 1)), rel=1e-12)


def test_the_macroscopic_limit_is_the_steady_state_flux() -> None:
    system = closed(CLOSED["random and ping pong"])
    network = Network.of(system)
    omega = 1e12
    c = {"A": 1.3, "B": 0.4, "P": 0.7, "Q": 2.0}
    n = np.array([*(v * omega for v in c.values()), 2.0, 1.0])
    rates = network.rates(np.array([omega]))[0]
    w = network.propensities(n, rates)
    for enzyme, copies in zip(system.enzymes, (2, 1), strict=True):
        r = [reaction.name for reaction in system.reactions].index(f"{enzyme.name}.r")
        assert w[2 * r] - w[2 * r + 1] == pytest.approx(copies * turnover_rates(enzyme, c)["r"], rel=1e-9)


def test_a_mechanism_that_works_for_nothing_is_refused() -> None:
    """Microscopic constants that break closure, as no system file can state them."""
    generator = np.random.default_rng(1)
    enzyme = enzyme_of("random bi bi", generator)
    assert closure_excess(enzyme) < 1e-9
    system = driblet.loads(
        f'[conditions]\ntemperature = "30 degC"\n[compartments.v]\nvolume = "{ONE_COPY_PER_MOLAR}"\n'
        + loop("random bi bi", "ordered bi bi")
    )
    first, *others = system.enzymes
    bent = replace(first, steps=(replace(first.steps[0], forward=1.5 * first.steps[0].forward), *first.steps[1:]))
    broken = replace(system, enzymes=(bent, *others))
    with pytest.raises(
        driblet.InputError, match=r"enzymes\.e\.treatment: its constants break closure by 1\.022 kJ/mol"
    ):
        treated(broken, {"e": "lumped"})


def test_too_many_states_are_refused() -> None:
    assembler = Assembler("E", RT)
    assembler.add(ActivitySpec("r", "uni uni", 1, ("A",), ("P",), 2.0, 10.0, {"A": 1e-3}))
    for i in range(MOST_STATES):
        assembler.inhibit(f"I{i}", 1e-3)
    with pytest.raises(MechanismError, match="states are too many to lump"):
        diagram(assembler.enzyme("E"))


def test_an_unknown_enzyme_is_named() -> None:
    system = closed(CLOSED["ordered and uni uni"])
    with pytest.raises(driblet.InputError, match='treatment: "g" is not an enzyme of this system'):
        treated(system, {"g": "lumped"})
    with pytest.raises(driblet.InputError, match=r"enzymes\.e\.treatment: is lumped already"):
        treated(system, {"e": "elementary"})
