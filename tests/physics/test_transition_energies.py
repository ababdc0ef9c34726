"""w+(n)/w-(n + nu) = exp(-dG(n)/RT) for every single transition, by enumeration over random small networks.

dG(n) is the Gibbs energy of one firing: the change of -RT ln prod_i (c0 Omega)^n_i / n_i! plus dG0' and the held species'
RT nu ln(c/c0) (van Kampen, Phys. Lett. A 59:333, 1976). Written here with factorials, apart from the code under test.
"""

from math import exp, factorial, isclose, log

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants

import driblet
from driblet import readouts
from driblet.network import BACKWARD, FORWARD, Network
from driblet.quantities import copies_per_molar
from driblet_analysis.references.master_equation import MasterEquation
from driblet_analysis.references.state_space import enumerate_class
from tests.physics.support import system

RT = constants.R * 298.15e-3
FREE = ["A", "B", "C"]
HELD = {"X": 2e-3, "Y": 0.4}


@st.composite
def sides(draw: st.DrawFn) -> str:
    free = draw(st.lists(st.sampled_from(FREE), max_size=3))
    held = draw(st.lists(st.sampled_from(sorted(HELD)), max_size=1))
    names = sorted(free + held)
    return " + ".join(names) or "nothing"


@st.composite
def reactions(draw: st.DrawFn) -> str:
    left = draw(sides())
    right = draw(sides().filter(lambda side: side != left))
    molecules = 0 if left == "nothing" else left.count("+") + 1
    unit = {0: "M/s", 1: "/s"}.get(molecules, f"/M^{molecules - 1}/s")
    energy = draw(st.floats(-60, 60).map(lambda x: round(x, 3)))
    forward = 10.0 ** draw(st.floats(-3, 6))
    return f'equation = "{left} <=> {right}", energy = "{energy} kJ/mol", forward = "{forward!r} {unit}"'


def one_reaction(reaction: str, volume: str) -> driblet.System:
    species = dict.fromkeys(FREE, '"4 copies"') | {
        name: f'{{ amount = "{c} M", held = true }}' for name, c in HELD.items()
    }
    return system(species, {"r": reaction}, volume)


def transition_energy(one: driblet.System, before: np.ndarray, after: np.ndarray, omega: float) -> float:
    """dG of one forward firing in units of RT."""
    reaction = one.reactions[0]
    assert reaction.dG0_kJ_per_mol is not None
    energy = reaction.dG0_kJ_per_mol / RT
    for name, c in HELD.items():
        energy += reaction.equation.change.get(name, 0) * log(c)
    for n, m in zip(before, after, strict=True):
        energy += log(factorial(int(m))) - log(factorial(int(n))) - (int(m) - int(n)) * log(omega)
    return energy


@given(reaction=reactions(), volume=st.sampled_from([1e-24, 3e-19, 1e-15]))
def test_ratio_of_propensities_is_the_energy_of_the_transition(reaction: str, volume: float) -> None:
    one = one_reaction(reaction, f"{volume} L")
    omega = copies_per_molar(volume)
    network = Network.of(one)
    rates = network.rates(np.array([omega]))[0]
    forward, backward = network.channel_index(FORWARD)[0], network.channel_index(BACKWARD)[0]
    states = enumerate_class(network, [4, 4, 4], caps=[12, 12, 12])
    assert states is not None
    S = network.stoichiometry[:, 0]
    tested = 0
    for before in states:
        after = before + S
        there = network.propensities(before.astype(float), rates)[forward]
        back = network.propensities(after.astype(float), rates)[backward] if (after >= 0).all() else 0.0
        # a transition exists both ways or not at all
        assert (there > 0) == (back > 0)
        if there > 0:
            assert isclose(there / back, exp(-transition_energy(one, before, after, omega)), rel_tol=1e-9)
            tested += 1
    assert tested


@given(reaction=reactions(), volume=st.sampled_from([1e-24, 3e-19, 1e-15]))
def test_gibbs_is_the_energy_of_the_transition_and_infinite_where_there_is_none(reaction: str, volume: float) -> None:
    """In every state: where the net reactants are there it is finite, also where a catalyst is missing and nothing fires."""
    one = one_reaction(reaction, f"{volume} L")
    omega = copies_per_molar(volume)
    network = Network.of(one)
    rates = network.rates(np.array([omega]))[0]
    forward, backward = network.channel_index(FORWARD)[0], network.channel_index(BACKWARD)[0]
    states = np.array(list(np.ndindex(4, 4, 4)))
    S = network.stoichiometry[:, 0]
    found = readouts.transition_energy(one, one.reactions[0], states, np.array(omega)) / RT
    for before, energy in zip(states, found, strict=True):
        after = before + S
        if (after < 0).any():
            assert energy == np.inf
            continue
        assert isclose(energy, transition_energy(one, before, after, omega), rel_tol=1e-9, abs_tol=1e-9)
        there = network.propensities(before.astype(float), rates)[forward]
        back = network.propensities(after.astype(float), rates)[backward]
        if there > 0:
            assert isclose(there / back, exp(-energy), rel_tol=1e-9)


def test_twin_squares_for_falling_factorials_break_it() -> None:
    one = one_reaction('equation = "2 A <=> B", energy = "1 kJ/mol", forward = "1 /M/s"', "1e-24 L")
    before, after = np.array([4, 4, 4]), np.array([2, 5, 4])
    omega = copies_per_molar(1e-24)
    rates = Network.of(one).rates(np.array([omega]))[0]
    energy = transition_energy(one, before, after, omega)
    assert isclose(rates[0] * 4 * 3 / (rates[1] * 5), exp(-energy), rel_tol=1e-12)
    assert not isclose(rates[0] * 4 * 4 / (rates[1] * 5), exp(-energy), rel_tol=0.1)


@given(
    K=st.lists(st.floats(-8, 8), min_size=2, max_size=2),
    rate=st.lists(st.floats(-2, 2), min_size=3, max_size=3),
    omega=st.floats(0.2, 30),
)
def test_no_flux_anywhere_in_a_closed_cycle(K: list[float], rate: list[float], omega: float) -> None:
    """A <=> B, 2 B <=> C + A, A <=> C: the third energy closes the cycle, and every transition balances its reverse."""
    equations = [("A <=> B", "/s"), ("2 B <=> C + A", "/M/s"), ("A <=> C", "/s")]
    e = [*K, 2 * K[0] + K[1]]
    one = system(
        {"A": '"6 copies"', "B": '"0 copies"', "C": '"0 copies"'},
        {
            f"r{k}": f'equation = "{text}", energy = "{e[k]!r} kJ/mol", forward = "{10 ** rate[k]!r} {unit}"'
            for k, (text, unit) in enumerate(equations)
        },
    )
    solved = MasterEquation.of(Network.of(one), [6, 0, 0], omega)
    p = solved.stationary().probability
    flux = (solved.flow * p).toarray()
    assert abs(flux - flux.T).max() < 1e-9 * flux.max()


def test_twin_a_driven_cycle_has_flux() -> None:
    one = system(
        {"A": '"6 copies"', "B": '"0 copies"', "X": '{ amount = "1 M", held = true }'},
        {
            "turn": 'equation = "A <=> B", K = 2, forward = "1 /s"',
            "push": 'equation = "A + X <=> B", K = "3 /M", forward = "1 /M/s"',
        },
    )
    network = Network.of(one)
    law = MasterEquation.of(network, [6, 0], 1.0).stationary()
    firing = law.expect(network.propensities(law.states.astype(float), network.rates(np.array([1.0]))[0]))
    # two states a molecule: turn runs backward as fast as push forward; rates 1, 1/2, 1, 1/3
    b = 6 * 2 / (2 + 1 / 2 + 1 / 3)
    assert firing[0] - firing[1] == pytest.approx((6 - b) - b / 2, rel=1e-9)
    assert firing[0] - firing[1] < -0.1
